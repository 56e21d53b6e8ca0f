"""Settings of the service: one file, environment variables, options, in a stated order.

An option of the command wins over an environment variable, that over the file given with
--config, that over the default. A key or variable that is not known is refused with the
nearest known name. Variables are ODDBRANCH_ + section + __ + key in capitals.
"""

from __future__ import annotations

import os
import tomllib
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any, Literal

from pydantic import BaseModel, ConfigDict, Field, SecretStr, ValidationError
from pydantic_settings import (
    BaseSettings,
    InitSettingsSource,
    PydanticBaseSettingsSource,
    SettingsConfigDict,
)

from config import known
from scoring.alert_settings import AlertSettings
from scoring.errors import OddbranchError
from service.nearest import nearest_of

FILE = "service.toml"

Origin = Literal["option", "environment", "file", "default"]


class BadSettings(OddbranchError):
    """A setting that cannot be used; the sentence names place, key, value and range."""


class _Section(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid")


class ServerSettings(_Section):
    """Where the service listens."""

    host: str = Field("127.0.0.1", description="address to listen on")
    port: int = Field(8321, ge=0, le=65535, description="port; 0 takes a free one")
    hosts: tuple[str, ...] = Field((), description="names that clients may use beside host")
    tls_certificate: Path | None = Field(None, description="file with the certificate chain")
    tls_key: Path | None = Field(None, description="file with the private key")
    n_connections: int = Field(
        1000, ge=1, le=100_000, description="requests answered at the same time"
    )
    drain_s: float = Field(10.0, ge=0, le=600, description="time for running requests at a stop")


class ModelSettings(_Section):
    """Which model scores."""

    path: Path = Field(Path("model"), description="directory of the model")
    reload_s: float = Field(5.0, ge=0.1, le=3600, description="how often a new model is looked for")


class StoreSettings(_Section):
    """Where records are kept and how long."""

    data: Path = Field(Path("data"), description="data folder")
    url: SecretStr = Field(SecretStr(""), description="PostgreSQL URL; empty for SQLite")
    keep_days: float = Field(400.0, ge=0.01, le=100_000, description="age at which records go")
    keep_alerts_days: float = Field(
        1500.0, ge=0.01, le=100_000, description="age at which cleared alerts go"
    )
    keep_mb: float = Field(0.0, ge=0, le=1e9, description="size at which the oldest go; 0: none")
    prune_s: float = Field(600.0, ge=0.1, le=86_400, description="how often old records go")
    max_pages: int = Field(
        0, ge=0, le=2**31, description="SQLite's own limit in 8 KiB pages; 0: none"
    )


class LimitSettings(_Section):
    """What one client may ask."""

    body_mb: float = Field(16.0, ge=0.001, le=1024, description="one body, unpacked")
    stream_mb: float = Field(4096.0, ge=0.001, le=1e7, description="one NDJSON stream, unpacked")
    line_kb: float = Field(256.0, ge=0.1, le=16_384, description="one NDJSON line")
    n_batch: int = Field(10_000, ge=1, le=100_000, description="records in one array")
    n_readings: int = Field(2000, ge=1, le=100_000, description="readings in one record")
    n_sources: int = Field(10_000, ge=1, le=10_000_000, description="sources in all")
    n_waiting: int = Field(50_000, ge=1, le=10_000_000, description="records that may wait")
    memory_mb: float = Field(256.0, ge=0.001, le=1e6, description="all bodies in memory")
    body_s: float = Field(30.0, ge=0.1, le=3600, description="longest pause inside a body")
    n_page: int = Field(1000, ge=1, le=10_000, description="items of one page at most")


class MetricSettings(_Section):
    """What Prometheus sees."""

    per_source: bool = Field(True, description="one series per source")
    n_sources: int = Field(
        1000, ge=1, le=100_000, description="above this many, sources are summed"
    )


class LogSettings(_Section):
    """What is logged."""

    requests: Literal["refused", "all"] = Field("refused", description="which requests get a line")


class Settings(BaseSettings):
    """All settings in force."""

    model_config = SettingsConfigDict(
        env_prefix=known.PREFIX,
        env_nested_delimiter="__",
        extra="forbid",
        frozen=True,
        nested_model_default_partial_update=True,
    )

    server: ServerSettings = ServerSettings()
    model: ModelSettings = ModelSettings()
    store: StoreSettings = StoreSettings()
    limits: LimitSettings = LimitSettings()
    alerts: AlertSettings = AlertSettings()
    metrics: MetricSettings = MetricSettings()
    log: LogSettings = LogSettings()

    @classmethod
    def settings_customise_sources(
        cls,
        settings_cls: type[BaseSettings],
        init_settings: PydanticBaseSettingsSource,
        env_settings: PydanticBaseSettingsSource,
        dotenv_settings: PydanticBaseSettingsSource,
        file_secret_settings: PydanticBaseSettingsSource,
    ) -> tuple[PydanticBaseSettingsSource, ...]:
        """Put the order of sources in one place: options, environment, file."""
        del dotenv_settings, file_secret_settings
        assert isinstance(init_settings, InitSettingsSource)
        given = init_settings.init_kwargs
        options, file = given.get("options", {}), given.get("file", {})
        return (
            InitSettingsSource(settings_cls, options),
            env_settings,
            InitSettingsSource(settings_cls, file),
        )


def known_keys() -> Iterator[tuple[str, str]]:
    """Yield every (section, key)."""
    for section, field in Settings.model_fields.items():
        for key in type(field.default).model_fields:
            yield section, key


def load_settings(
    path: Path | None = None,
    options: Mapping[str, Mapping[str, Any]] | None = None,
    environment: Mapping[str, str] | None = None,
) -> Settings:
    """Return the settings in force; raises BadSettings.

    path: the file given with --config, or None. options: by section and key.
    environment: only for naming what is wrong; values come from the process.
    """
    file = _read_file(path) if path is not None else {}
    _check_file(file, path)
    wrong = known.misspelt(os.environ if environment is None else environment)
    if wrong is not None:
        raise BadSettings(wrong)
    try:
        return Settings(options=dict(options or {}), file=file)  # type: ignore[call-arg]
    except ValidationError as error:
        raise BadSettings(_sentence(error, path, options or {})) from None


def _read_file(path: Path) -> dict[str, Any]:
    try:
        return tomllib.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise BadSettings(f"{path}: no such file; copy config/service.toml and edit it") from None
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise BadSettings(f"{path}: cannot be read as TOML: {error}") from None


def _check_file(file: Mapping[str, Any], path: Path | None) -> None:
    sections: dict[str, set[str]] = {}
    for section, key in known_keys():
        sections.setdefault(section, set()).add(key)
    for section, content in file.items():
        if section not in sections:
            raise BadSettings(f"{path}: section [{section}] is not known{_hint(section, sections)}")
        if not isinstance(content, dict):
            raise BadSettings(f"{path}: {section} is a section; write [{section}] on its own line")
        for key in content:
            if key not in sections[section]:
                other = known.file_with(section, key)
                hint = f"; it belongs in {other}" if other else _hint(key, sections[section])
                raise BadSettings(f"{path}: {section}.{key} is not known{hint}")


def _hint(name: str, names: Any) -> str:
    near = nearest_of(name, names)
    return f"; is {near} meant?" if near else f"; known are {', '.join(sorted(names)[:40])}"


def variable_of(section: str, key: str) -> str:
    """Return the environment variable of a setting."""
    return known.variable_of(FILE, section, key)


def origin_of(
    section: str, key: str, file: Mapping[str, Any], options: Mapping[str, Mapping[str, Any]]
) -> Origin:
    """Return where the value in force comes from."""
    if key in options.get(section, {}):
        return "option"
    if variable_of(section, key) in {name.upper() for name in os.environ}:
        return "environment"
    return "file" if key in file.get(section, {}) else "default"


def read_file(path: Path | None) -> dict[str, Any]:
    """Return the content of the file given with --config."""
    return _read_file(path) if path is not None else {}


def _sentence(
    error: ValidationError, path: Path | None, options: Mapping[str, Mapping[str, Any]]
) -> str:
    first = error.errors()[0]
    section = str(first["loc"][0])
    if len(first["loc"]) < 2:
        return f"{path or 'settings'}: {section}: {first['msg']}"
    key = str(first["loc"][1])
    file = _read_file(path) if path is not None else {}
    place = {
        "option": f"option --{key.replace('_', '-')}",
        "environment": f"environment, {variable_of(section, key)}",
        "file": str(path),
        "default": "default",
    }[origin_of(section, key, file, options)]
    wanted = _range(section, key) or str(first["msg"])
    shown = "**" if key == "url" else repr(first["input"])
    return f"{place}: {section}.{key} = {shown} cannot be used: {wanted}"


def _range(section: str, key: str) -> str | None:
    field = type(Settings.model_fields[section].default).model_fields[key]
    low = next((m.ge for m in field.metadata if hasattr(m, "ge")), None)
    high = next((m.le for m in field.metadata if hasattr(m, "le")), None)
    if low is None:
        return None
    what = "a whole number" if field.annotation is int else "a number"
    return f"{what} from {low:,} to {high:,} is wanted ({field.description})".replace(",", " ")


def lines_in_force(config: Path | None) -> Iterator[str]:
    """Yield every setting in force, where it comes from and what it is; raises BadSettings."""
    settings, file = load_settings(config), read_file(config)
    for section, key in known_keys():
        field = type(Settings.model_fields[section].default).model_fields[key]
        value = getattr(getattr(settings, section), key)
        origin = origin_of(section, key, file, {})
        yield f"{section}.{key} = {_shown(value)}  ({origin}; {field.description})"


def _shown(value: object) -> str:
    if isinstance(value, SecretStr):
        return known.masked(value.get_secret_value()) or '""'
    if isinstance(value, tuple):
        return str(list(value))
    return f'"{value}"' if isinstance(value, str | Path) else str(value).lower()
