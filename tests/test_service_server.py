"""The web server: TLS of its own, what keeps it from listening, and the memory of models."""

from __future__ import annotations

import gc
import ssl
import subprocess
import weakref
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import httpx
import pytest

from scoring.artefact import write_model
from service.scoring_engine import load_engine
from service.server import YOUNG, CannotListen, check_tls, listen, settle
from tests.conftest import need_program
from tests.models import a_model
from tests.service_http import record, running, serving, settings_for


@pytest.fixture(scope="module")
def pair(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path]:
    """Return a certificate for this machine and its key."""
    openssl = need_program("openssl")
    folder = tmp_path_factory.mktemp("tls")
    certificate, key = folder / "certificate.pem", folder / "key.pem"
    subprocess.run(
        [openssl, "req", "-x509", "-newkey", "ec", "-pkeyopt", "ec_paramgen_curve:prime256v1",
         "-nodes", "-keyout", key, "-out", certificate, "-days", "2", "-subj", "/CN=localhost",
         "-addext", "subjectAltName=DNS:localhost"],
        capture_output=True, check=True,
    )  # fmt: skip
    return certificate, key


def test_it_speaks_tls_with_the_files_that_are_given(
    tmp_path: Path, pair: tuple[Path, Path]
) -> None:
    certificate, key = pair
    words = f'server.tls_certificate="{certificate}"', f'server.tls_key="{key}"'
    trusting = ssl.create_default_context(cafile=str(certificate))
    with serving(tmp_path, *words) as server:
        url = f"https://localhost:{server.port}"
        assert httpx.post(f"{url}/records", json=record(), verify=trusting).status_code == 200
        with pytest.raises(httpx.ConnectError, match="certificate verify failed"):
            httpx.get(f"{url}/health/live")
        # In the clear nobody is answered.
        with pytest.raises(httpx.TransportError):
            httpx.get(f"http://localhost:{server.port}/health/live")
    assert "https://127.0.0.1" in (tmp_path / "server.out").read_text(encoding="utf-8")


def test_files_that_no_tls_can_be_made_of_are_refused_with_a_sentence(
    tmp_path: Path, pair: tuple[Path, Path]
) -> None:
    certificate, key = pair
    for files, sentence in (
        ({"tls_certificate": certificate}, "needs both server.tls_certificate and server.tls_key"),
        ({"tls_key": key}, "needs both server.tls_certificate and server.tls_key"),
        ({"tls_certificate": tmp_path / "none.pem", "tls_key": key}, "none.pem: cannot be read"),
        ({"tls_certificate": certificate, "tls_key": certificate}, "without a password"),
        ({"tls_certificate": key, "tls_key": key}, "a certificate chain and the private key"),
    ):
        with pytest.raises(CannotListen, match=sentence):
            listen(settings_for(tmp_path, server={"port": 0, **files}))
    locked = tmp_path / "locked.pem"
    words = [need_program("openssl"), "ec", "-in", str(key), "-aes256", "-passout", "pass:x"]
    subprocess.run([*words, "-out", locked], capture_output=True, check=True)
    with pytest.raises(CannotListen, match="the key without a password"):
        check_tls(
            settings_for(tmp_path, server={"tls_certificate": certificate, "tls_key": locked})
        )
    check_tls(settings_for(tmp_path))


@pytest.fixture
def _rounds_as_before() -> Iterator[None]:
    threshold = gc.get_threshold()
    yield
    gc.set_threshold(*threshold)
    gc.unfreeze()


@pytest.mark.usefixtures("_rounds_as_before")
def test_a_model_that_was_replaced_is_freed(tmp_path: Path) -> None:
    model = a_model()
    write_model(model, tmp_path / "one")
    levels = replace(model.levels, record=model.levels.record + 1)
    write_model(replace(model, levels=levels), tmp_path / "two")
    (tmp_path / "model").symlink_to("one")
    with running(tmp_path, load=load_engine) as api:
        settle()
        assert (gc.get_threshold()[0], gc.get_freeze_count() > 0) == (YOUNG, True)
        api.service.models.when_taken = settle
        readings = {"in": 12.0, "out": 14.0, "power": 15.0, "pump": "running"}
        item = {"source": "a", "time": "2026-11-30T00:00:00Z", "readings": readings}
        assert api.post(item).json()["suspect"]["neighbours"]
        name, before = api.service.engine.name, weakref.ref(api.service.engine)
        (tmp_path / "model").unlink()
        (tmp_path / "model").symlink_to("two")
        api.call(api.service.models.look())
        assert api.service.engine.name != name
        assert before() is None
