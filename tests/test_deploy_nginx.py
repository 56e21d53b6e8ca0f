"""The shipped proxy at work: TLS, streams, and two replicas of which one is killed."""

from __future__ import annotations

import json
import os
import shutil
import socket
import ssl
import subprocess
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import httpx
import pytest

from tests.conftest import ROOT, need_program
from tests.monitoring import free_port, program
from tests.service_http import Server, record, running, serving
from tests.service_postgres import cluster
from tests.test_service_durable import fetch_all, scores

SHIPPED = ROOT / "deploy" / "nginx" / "oddbranch.conf"
NAME = "pumps.example"
HOSTS = f'server.hosts=["{NAME}"]'


class Proxy:
    """A running proxy: where it is, and how to trust it."""

    def __init__(self, port: int, plain_port: int, certificate: Path) -> None:
        self.port, self.plain_port = port, plain_port
        self.trust = ssl.create_default_context(cafile=str(certificate))

    def client(self) -> httpx.Client:
        """Return a client that reaches the proxy by its name."""
        headers = {"host": NAME}
        return httpx.Client(
            base_url=f"https://localhost:{self.port}",
            verify=self.trust,
            headers=headers,
            timeout=30,
        )


def make_certificate(folder: Path) -> Path:
    """Make a certificate of our own, as deploy/README.md says."""
    words = [
        need_program("openssl"), "req", "-x509", "-newkey", "ec", "-pkeyopt",
        "ec_paramgen_curve:prime256v1", "-nodes", "-days", "2", "-subj", f"/CN={NAME}",
        "-addext", f"subjectAltName=DNS:{NAME},DNS:localhost",
        "-keyout", str(folder / "key.pem"), "-out", str(folder / "certificate.pem"),
    ]  # fmt: skip
    subprocess.run(words, check=True, capture_output=True)
    return folder / "certificate.pem"


@contextmanager
def proxying(folder: Path, ports: list[int]) -> Iterator[Proxy]:
    """Run nginx with the shipped file on ports of our own, in front of some replicas."""
    nginx = need_program("nginx")
    certificate = make_certificate(folder)
    port, plain_port = free_port(), free_port()
    text = SHIPPED.read_text(encoding="utf-8")
    upstream = "".join(f"    server 127.0.0.1:{one} max_fails=0;\n" for one in ports)
    shipped = "    server 127.0.0.1:8321 max_fails=0;\n"
    for old, new in (
        (shipped, upstream),
        ("listen 443 ssl http2;", f"listen 127.0.0.1:{port} ssl http2;"),
        ("listen 80;", f"listen 127.0.0.1:{plain_port};"),
        ("    listen [::]:443 ssl http2;\n", ""),
        ("    listen [::]:80;\n", ""),
        ("/etc/oddbranch/", f"{folder}/"),
    ):
        assert old in text
        text = text.replace(old, new)
    (folder / "oddbranch.conf").write_text(text, encoding="utf-8")
    temporary = "".join(
        f"{name}_temp_path {folder}/nginx-{name};\n"
        for name in ("client_body", "proxy", "fastcgi", "uwsgi", "scgi")
    )
    # As root it would give up its rights, and then not reach the scratch folder.
    user = "user root;\n" if os.geteuid() == 0 else ""
    (folder / "nginx.conf").write_text(
        f"{user}daemon off;\npid {folder}/nginx.pid;\nerror_log {folder}/nginx-error.log;\n"
        "worker_processes 1;\nevents { worker_connections 256; }\n"
        f"http {{\naccess_log off;\n{temporary}include {folder}/oddbranch.conf;\n}}\n",
        encoding="utf-8",
    )
    words = [nginx, "-c", str(folder / "nginx.conf"), "-e", str(folder / "nginx-error.log")]
    checked = subprocess.run([*words, "-t"], capture_output=True, text=True, check=False)
    assert checked.returncode == 0, checked.stderr
    assert "warn" not in checked.stderr
    with program(words, folder):
        proxy = Proxy(port, plain_port, certificate)
        _wait(proxy)
        yield proxy


def _wait(proxy: Proxy) -> None:
    end = time.monotonic() + 20
    while True:
        try:
            httpx.get(f"http://127.0.0.1:{proxy.plain_port}/", timeout=5)
        except httpx.TransportError:
            assert time.monotonic() < end, "nginx does not answer"
            time.sleep(0.05)
        else:
            return


@pytest.fixture(scope="module")
def one(tmp_path_factory: pytest.TempPathFactory) -> Iterator[tuple[Proxy, Server]]:
    """A proxy in front of one service."""
    folder = tmp_path_factory.mktemp("proxy")
    (folder / "served").mkdir()
    with serving(folder / "served", HOSTS) as server, proxying(folder, [server.port]) as proxy:
        yield proxy, server


def test_a_record_goes_through_and_the_request_id_with_it(one: tuple[Proxy, Server]) -> None:
    with one[0].client() as client:
        answer = client.post("/records", json=record(0))
        assert answer.status_code == 200
        assert answer.json()["source"] == "mill-lane-2"
        assert len(answer.headers["x-request-id"]) == 32
        assert answer.headers["strict-transport-security"] == "max-age=31536000"
        assert client.get("/health/ready").json()["status"] == "ready"
        assert client.get("/").headers["content-type"].startswith("text/html")


def test_what_each_replica_counts_for_itself_is_not_behind_the_proxy(
    one: tuple[Proxy, Server],
) -> None:
    with one[0].client() as client:
        assert client.get("/metrics").status_code == 404
        assert client.post("/records-stream", content=b"").status_code == 404


def test_a_request_in_the_clear_is_sent_to_tls_with_its_method(one: tuple[Proxy, Server]) -> None:
    answer = httpx.post(
        f"http://127.0.0.1:{one[0].plain_port}/records", headers={"host": NAME}, json=record(0)
    )
    assert answer.status_code == 308
    assert answer.headers["location"] == f"https://{NAME}/records"


def test_an_old_protocol_is_refused(one: tuple[Proxy, Server]) -> None:
    old = ssl.SSLContext(ssl.PROTOCOL_TLS_CLIENT)
    old.check_hostname, old.verify_mode = False, ssl.CERT_NONE
    old.set_ciphers("ALL:@SECLEVEL=0")
    with pytest.warns(DeprecationWarning, match="TLSv1_1"):
        old.minimum_version = old.maximum_version = ssl.TLSVersion.TLSv1_1
    with pytest.raises(httpx.ConnectError):
        httpx.get(f"https://localhost:{one[0].port}/", verify=old)


def test_another_name_is_refused_by_the_service(one: tuple[Proxy, Server]) -> None:
    with one[0].client() as client:
        answer = client.get("/health/ready", headers={"host": "elsewhere.example"})
    assert answer.json()["type"] == "/problems/bad-host"


def test_a_large_array_and_a_too_large_one(one: tuple[Proxy, Server]) -> None:
    items = [record(i / 6, "mill-lane-7") for i in range(8000)]
    with one[0].client() as client:
        answer = client.post("/records", json=items)
        assert len(answer.request.content) > 1_000_000
        assert len(answer.json()) == 8000
        # The service's own refusal, which says what to do, comes before the proxy's.
        refused = client.post("/records", content=b"[" + b" " * 17_000_000 + b"]")
    assert refused.status_code == 413
    assert refused.json()["type"] == "/problems/too-large"


def test_lines_are_answered_while_more_are_still_to_come(one: tuple[Proxy, Server]) -> None:
    """The proxy would otherwise keep the first line until the last one has come."""
    head = f"POST /records HTTP/1.1\r\nHost: {NAME}\r\nContent-Type: application/x-ndjson\r\n"
    head += "Transfer-Encoding: chunked\r\nConnection: close\r\n\r\n"
    with (
        socket.create_connection(("127.0.0.1", one[0].port), timeout=10) as plain,
        one[0].trust.wrap_socket(plain, server_hostname="localhost") as line,
    ):
        line.sendall(head.encode() + _chunk(record(0, "mill-lane-8")))
        met = b""
        while b"04:00:00Z" not in met:
            met += line.recv(65_536)
        assert b"04:01:00Z" not in met
        line.sendall(_chunk(record(1, "mill-lane-8")) + b"0\r\n\r\n")
        while b"04:01:00Z" not in met:
            piece = line.recv(65_536)
            assert piece, "the proxy ended before the second answer"
            met += piece
    assert met.startswith(b"HTTP/1.1 200 OK\r\n")


def _chunk(item: dict[str, Any]) -> bytes:
    text = json.dumps(item).encode() + b"\n"
    return f"{len(text):x}\r\n".encode() + text + b"\r\n"


class Client:
    """Sends one source's records in order through the proxy; notes every failure."""

    def __init__(self, proxy: Proxy, source: str) -> None:
        self.proxy, self.source = proxy, source
        self.acknowledged: list[dict[str, Any]] = []
        self.failures: list[str] = []
        self.most_tries = 0
        self.stopping = threading.Event()
        self.thread = threading.Thread(target=self._run)
        self.thread.start()

    def _run(self) -> None:
        with self.proxy.client() as client:
            while not self.stopping.wait(0.01):
                at = len(self.acknowledged)
                items = [
                    record((at + i) / 6, self.source, flow=float((at + i) % 300)) for i in range(5)
                ]
                self.acknowledged += self._until_acknowledged(client, items)

    def _until_acknowledged(self, client: httpx.Client, items: list[Any]) -> list[dict[str, Any]]:
        for tries in range(1, 50):
            self.most_tries = max(self.most_tries, tries)
            try:
                answer = client.post("/records", json=items)
            except httpx.TransportError as error:
                self.failures.append(type(error).__name__)
            else:
                if answer.status_code == 200:
                    return list(answer.json())
                self.failures.append(f"{answer.status_code} {answer.text[:80]}")
            time.sleep(0.05)
        raise AssertionError(f"not mended by {tries} tries: {self.failures[-5:]}")

    def stop(self) -> None:
        self.stopping.set()
        self.thread.join()


def test_one_of_two_replicas_is_killed_under_load_and_no_record_is_lost(tmp_path: Path) -> None:
    need_program("nginx")
    with cluster() as database:
        words = (HOSTS, f'store.url="{database.new_database()}"')
        names = ("a", "b")
        for name in names:
            (tmp_path / name).mkdir()
        replicas = {name: Server(tmp_path / name, *words) for name in names}
        try:
            ports = [replicas[name].port for name in names]
            with proxying(tmp_path, ports) as proxy:
                taken = []
                clients = [Client(proxy, f"mill-lane-{n}") for n in range(4)]
                try:
                    for name in names:
                        time.sleep(0.8)
                        taken.append(_n_requests(replicas[name].url))
                        before = [len(client.acknowledged) for client in clients]
                        replicas[name].kill()
                        _wait_for_more(clients, before)
                        port = ports[names.index(name)]
                        replicas[name] = Server(tmp_path / name, *words, f"server.port={port}")
                finally:
                    for client in clients:
                        client.stop()
            stored = {c.source: fetch_all(replicas["a"].url, c.source) for c in clients}
        finally:
            for server in replicas.values():
                if server.is_alive:
                    server.stop()
    assert min(taken) > 0, "each replica worked when it was killed"
    _compare(tmp_path, clients, stored)


def _wait_for_more(clients: list[Client], before: list[int]) -> None:
    """Return when every client was acknowledged more while one replica is gone."""
    end = time.monotonic() + 20
    while any(len(c.acknowledged) <= n for c, n in zip(clients, before, strict=True)):
        assert time.monotonic() < end, "the other replica does not go on alone"
        time.sleep(0.05)


def _n_requests(url: str) -> int:
    text = httpx.get(f"{url}/metrics").text
    line = 'oddbranch_requests_total{method="POST",route="/records",status="200"} '
    return sum(int(float(one.removeprefix(line))) for one in text.splitlines() if line in one)


def _compare(folder: Path, clients: list[Client], stored: dict[str, list[dict[str, Any]]]) -> None:
    """What was acknowledged is stored, and scored as by one service that nobody killed."""
    with running(folder / "unbroken", clock_ns=time.time_ns) as api:
        for client in clients:
            n_known = len(client.acknowledged)
            assert n_known > 50, "the load was real"
            items = [record(i / 6, client.source, flow=float(i % 300)) for i in range(n_known)]
            wanted = api.post_lines(b"".join(json.dumps(one).encode() + b"\n" for one in items))
            assert scores(client.acknowledged) == scores(wanted)
            assert scores(stored[client.source][:n_known]) == scores(wanted)
            # The proxy hides most of it; what shows is mended by sending again.
            assert client.most_tries <= 10, client.failures
            assert all(one.startswith(("502", "503", "504")) for one in client.failures)
    shutil.rmtree(folder / "unbroken")
