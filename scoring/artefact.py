"""The model directory: `model.json` beside `tables.npz`, written aside, then renamed.

Format 1. model.json holds everything but arrays, the SHA-256 of tables.npz, and the
model's name: the hash of the arrays' bytes and of the JSON without `about`, so that
times, hosts and versions are not part of it. Nothing here is a pickle.
"""

from __future__ import annotations

import ctypes
import hashlib
import io
import json
import os
import shutil
import tempfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any
from zipfile import BadZipFile

import numpy as np
from numpy.typing import NDArray

from scoring.bins import Bins
from scoring.channels import parse_channels
from scoring.delays import Delays
from scoring.errors import BadArtefact, BadChannelTable
from scoring.model import Levels, Member, Model, Part, Usual
from scoring.stillness import StillnessLimits
from scoring.tree import Tree

# The version of the model directory that this package writes, and the newest it reads.
MODEL_FORMAT = 1

# What model.json holds beside the content that its name is the hash of.
NOT_NAMED = ("name", "tables_sha256", "about")

# How a directory shows that it does not hold what the format promises.
NOT_WHOLE = (
    KeyError, TypeError, ValueError, IndexError, AttributeError, EOFError, BadZipFile,
    BadChannelTable,
)  # fmt: skip

Arrays = dict[str, NDArray[Any]]


def write_model(model: Model, path: Path) -> Model:
    """Write a model directory and return the model with its name set.

    The directory appears whole or not at all. Raises BadArtefact if `path` exists as
    something else than a model directory, or cannot be written.
    """
    if path.exists() and not (path / "model.json").is_file():
        raise BadArtefact(str(path), "exists and is no model directory; choose another --out")
    arrays, data = _to_arrays(model)
    name = _name(arrays, data)
    packed = io.BytesIO()
    np.savez(packed, allow_pickle=False, **arrays)
    about = {"model": model.about, "members": {m.source: m.about for m in _all_members(model)}}
    data |= {
        "name": name,
        "tables_sha256": hashlib.sha256(packed.getvalue()).hexdigest(),
        "about": about,
    }
    try:
        _publish(path, json.dumps(data, indent=1, allow_nan=False), packed.getvalue())
    except OSError as error:
        raise BadArtefact(str(path), f"cannot be written: {error.strerror}") from None
    return Model(model.table, model.members, model.fleet, model.levels, name, model.about)


def read_model(path: Path) -> Model:
    """Return the model in a directory.

    Raises BadArtefact for a missing or damaged directory, a later format, a checksum or a
    name that does not match.
    """
    try:
        data = json.loads((path / "model.json").read_text(encoding="utf-8"))
        packed = (path / "tables.npz").read_bytes()
    except FileNotFoundError:
        raise BadArtefact(
            str(path),
            "is no model directory (model.json and tables.npz); `oddbranch learn` makes one",
        ) from None
    except (OSError, ValueError) as error:
        raise BadArtefact(str(path / "model.json"), f"cannot be read: {error}") from None
    version = data.get("format") if isinstance(data, dict) else None
    if version != MODEL_FORMAT:
        raise BadArtefact(
            str(path / "model.json"),
            f"has format {version}; this version reads up to {MODEL_FORMAT}, so use the "
            "version that wrote it, or learn the model again",
        )
    if hashlib.sha256(packed).hexdigest() != data.get("tables_sha256"):
        raise BadArtefact(
            str(path / "tables.npz"), "does not match the checksum in model.json; it is damaged"
        )
    try:
        with np.load(io.BytesIO(packed), allow_pickle=False) as stored:
            arrays: Arrays = {key: stored[key] for key in stored.files}
        named = {key: value for key, value in data.items() if key not in NOT_NAMED}
        if _name(arrays, named) != data.get("name"):
            raise BadArtefact(
                str(path / "model.json"),
                "does not match the model's name; it is damaged or was edited by hand",
            )
        return _from_arrays(data, arrays, str(path))
    except NOT_WHOLE as error:
        raise BadArtefact(str(path), f"does not hold a whole model: {error}") from None


def _publish(path: Path, text: str, packed: bytes) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    aside = Path(tempfile.mkdtemp(prefix=f".{path.name}-", dir=path.parent))
    try:
        for name, content in (("model.json", text.encode()), ("tables.npz", packed)):
            with (aside / name).open("wb") as file:
                file.write(content)
                file.flush()
                os.fsync(file.fileno())
        aside.chmod(0o755)
        if not path.exists():
            aside.rename(path)
        elif not _exchange(aside, path):
            old = Path(tempfile.mkdtemp(prefix=f".{path.name}-old-", dir=path.parent))
            path.rename(old / "model")
            aside.rename(path)
            shutil.rmtree(old)
    finally:
        shutil.rmtree(aside, ignore_errors=True)
    descriptor = os.open(path.parent, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def _exchange(aside: Path, path: Path) -> bool:
    """Let two directories change places in one step; False where the system cannot.

    By renameat2(2) of Linux. A rename replaces no directory that holds something, and between
    two renames whoever dies or looks finds nothing.
    """
    call = getattr(ctypes.CDLL(None, use_errno=True), "renameat2", None)
    here, exchange = -100, 2  # AT_FDCWD and RENAME_EXCHANGE
    return call is not None and not call(here, bytes(aside), here, bytes(path), exchange)


def _all_members(model: Model) -> Iterator[Member]:
    yield model.fleet
    yield from model.members.values()


def _name(arrays: Arrays, data: dict[str, Any]) -> str:
    digest = hashlib.sha256()
    for key in sorted(arrays):
        array = np.ascontiguousarray(arrays[key])
        digest.update(f"{key} {array.dtype.str} {array.shape}\n".encode())
        digest.update(array.tobytes())
    digest.update(json.dumps(data, sort_keys=True, allow_nan=False).encode())
    return digest.hexdigest()[:16]


def _to_arrays(model: Model) -> tuple[Arrays, dict[str, Any]]:
    arrays: Arrays = {}
    members = []
    for k, member in enumerate(_all_members(model)):
        usual = member.usual
        arrays[f"{k}.borders"] = np.concatenate([b.borders for b in member.bins])
        arrays[f"{k}.n_borders"] = np.array([len(b.borders) for b in member.bins])
        arrays[f"{k}.rows"] = usual.rows
        arrays[f"{k}.channel"] = np.stack([usual.channel_median, usual.channel_spread])
        if member.stillness is not None:
            for name in StillnessLimits.__dataclass_fields__:
                arrays[f"{k}.stillness.{name}"] = getattr(member.stillness, name)
        for j, part in enumerate(member.parts):
            arrays[f"{k}.{j}.edges"] = part.tree.edges
            arrays[f"{k}.{j}.nats"] = part.tree.nats
            arrays[f"{k}.{j}.log_marginals"] = np.concatenate(part.tree.log_marginals)
            tables = [t.reshape(-1) for t in part.tree.log_ratios]
            arrays[f"{k}.{j}.log_ratios"] = np.concatenate(tables or [np.zeros(0)])
        members.append(
            {
                "source": member.source,
                "tables": member.tables,
                "regime": list(member.regime),
                "usual": {
                    "median": usual.median,
                    "high": usual.high,
                    "sustained": usual.sustained,
                },
                "parts": [
                    {"key": None if p.key is None else list(p.key), "log_share": p.log_share}
                    for p in member.parts
                ],
            }
        )
    data = {
        "format": MODEL_FORMAT,
        "table": model.table.model_dump(mode="json"),
        "levels": _levels_data(model.levels),
        "members": members,
    }
    return arrays, data


def _from_arrays(data: dict[str, Any], arrays: Arrays, place: str) -> Model:
    table = parse_channels(data["table"], place)
    about = data["about"]
    members = [
        _member(table.nodes, k, entry, arrays, about["members"].get(entry["source"], {}))
        for k, entry in enumerate(data["members"])
    ]
    return Model(
        table=table,
        fleet=members[0],
        members={m.source: m for m in members[1:]},
        levels=_levels(data["levels"]),
        name=str(data["name"]),
        about=about["model"],
    )


def _levels_data(levels: Levels) -> dict[str, Any]:
    data = {name: getattr(levels, name) for name in Levels.__dataclass_fields__}
    # What a site left alone is not written: models from before there were delays in them
    # keep their names, and older versions read what they can follow.
    delays = data.pop("delays").model_dump(exclude_defaults=True)
    return {**data, "delays": delays} if delays else data


def _levels(data: dict[str, Any]) -> Levels:
    return Levels(**{**data, "delays": Delays(**data.get("delays", {}))})


def _member(
    nodes: Any, k: int, entry: dict[str, Any], arrays: Arrays, about: dict[str, Any]
) -> Member:
    cuts = np.cumsum(arrays[f"{k}.n_borders"])[:-1]
    borders = np.split(arrays[f"{k}.borders"], cuts)
    bins = tuple(Bins(b, len(channel.words)) for b, channel in zip(borders, nodes, strict=True))
    sizes = np.array([b.n_bins for b in bins])
    parts = tuple(
        Part(
            tree=_tree(arrays, f"{k}.{j}", sizes),
            key=None if part["key"] is None else tuple(part["key"]),
            log_share=float(part["log_share"]),
        )
        for j, part in enumerate(entry["parts"])
    )
    channel = arrays[f"{k}.channel"]
    usual = Usual(
        channel_median=channel[0],
        channel_spread=channel[1],
        rows=arrays[f"{k}.rows"],
        **{name: float(value) for name, value in entry["usual"].items()},
    )
    return Member(
        source=entry["source"],
        bins=bins,
        parts=parts,
        usual=usual,
        regime=tuple(entry["regime"]),
        tables=entry["tables"],
        about=about,
        stillness=_stillness(arrays, f"{k}.stillness"),
    )


def _stillness(arrays: Arrays, prefix: str) -> StillnessLimits | None:
    if f"{prefix}.codes" not in arrays:
        return None
    names = StillnessLimits.__dataclass_fields__
    return StillnessLimits(**{name: arrays[f"{prefix}.{name}"] for name in names})


def _tree(arrays: Arrays, prefix: str, sizes: NDArray[np.int64]) -> Tree:
    edges = arrays[f"{prefix}.edges"].reshape(-1, 2)
    marginals = np.split(arrays[f"{prefix}.log_marginals"], np.cumsum(sizes)[:-1])
    shapes = [(int(sizes[a]), int(sizes[b])) for a, b in edges]
    ends = np.cumsum([a * b for a, b in shapes])
    flat = np.split(arrays[f"{prefix}.log_ratios"], ends[:-1]) if shapes else []
    tables = tuple(t.reshape(s) for t, s in zip(flat, shapes, strict=True))
    return Tree(edges, arrays[f"{prefix}.nats"], tuple(marginals), tables)
