"""A page opened in Chromium, spoken to through two pipes: what it loads, says and measures.

The messages are those of the browser's own debugging protocol, JSON ended by a NUL byte
(Chromium's `--remote-debugging-pipe`).
"""

from __future__ import annotations

import base64
import contextlib
import json
import os
import subprocess
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from tests.conftest import need_program

# Nothing may call home or look for updates while a page is looked at.
_QUIET = (
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
    "--disable-background-networking", "--disable-component-update", "--disable-sync",
    "--hide-scrollbars", "--remote-debugging-pipe",
)  # fmt: skip
_TIMEOUT_S = 60.0


class Page:
    """One tab.

    requests: addresses that the page asked for. said: what it wrote to the console, its
    errors, and what its policy blocked.
    """

    def __init__(self, to_browser: int, from_browser: int) -> None:
        self._to, self._from = to_browser, from_browser
        self._waiting, self._number = b"", 0
        self._loaded = False
        self.requests: list[str] = []
        self.said: list[str] = []
        target = self._call("Target.createTarget", None, url="about:blank")["targetId"]
        found = self._call("Target.attachToTarget", None, targetId=target, flatten=True)
        self._session = str(found["sessionId"])
        for domain in ("Page", "Network", "Runtime", "Log"):
            self.call(f"{domain}.enable")

    def open(self, address: str, width: int, height: int = 800) -> None:
        """Load an address in a window of the given size in CSS pixels; wait until it is there."""
        self.call(
            "Emulation.setDeviceMetricsOverride",
            width=width, height=height, deviceScaleFactor=1, mobile=False,
        )  # fmt: skip
        self.requests.clear()
        self._loaded = False
        self.call("Page.navigate", url=address)
        while not self._loaded:
            self._read()

    def value(self, expression: str) -> Any:
        """Return the value of a JavaScript expression in the page."""
        found = self.call("Runtime.evaluate", expression=expression, returnByValue=True)
        assert "exceptionDetails" not in found, found["exceptionDetails"]
        return found["result"].get("value")

    def picture(self, path: Path) -> None:
        """Write the whole page as a PNG."""
        size = self.call("Page.getLayoutMetrics")["cssContentSize"]
        clip = {"x": 0, "y": 0, "width": size["width"], "height": size["height"], "scale": 1}
        found = self.call("Page.captureScreenshot", captureBeyondViewport=True, clip=clip)
        path.write_bytes(base64.b64decode(found["data"]))

    def call(self, method: str, **params: Any) -> Any:
        """Return the result of one method of the protocol."""
        return self._call(method, self._session, **params)

    def _call(self, method: str, session: str | None, **params: Any) -> Any:
        self._number += 1
        message = {"id": self._number, "method": method, "params": params}
        if session is not None:
            message["sessionId"] = session
        os.write(self._to, json.dumps(message).encode() + b"\0")
        while True:
            answer = self._read()
            if answer.get("id") == self._number:
                assert "error" not in answer, answer["error"]
                return answer["result"]

    def _read(self) -> dict[str, Any]:
        """Return the next message, noted if it is an event."""
        while b"\0" not in self._waiting:
            part = os.read(self._from, 1 << 16)
            assert part, "the browser went away"
            self._waiting += part
        text, self._waiting = self._waiting.split(b"\0", 1)
        message: dict[str, Any] = json.loads(text)
        params = message.get("params", {})
        match message.get("method"):
            case "Network.requestWillBeSent":
                self.requests.append(params["request"]["url"])
            case "Runtime.consoleAPICalled" | "Runtime.exceptionThrown" | "Log.entryAdded":
                self.said.append(json.dumps(params))
            case "Page.loadEventFired":
                self._loaded = True
        return message


@contextlib.contextmanager
def browser_page(folder: Path) -> Iterator[Page]:
    """Start Chromium with a profile in a folder of its own and yield a tab.

    A test that hangs is ended by the browser's own end after _TIMEOUT_S.
    """
    program = need_program("chromium", "chromium-browser", "google-chrome")
    # The browser reads its file 3 and writes its file 4.
    shell = 'exec "$0" "$@" 3<&"$IN" 4>&"$OUT"'
    browser_reads, to_browser = os.pipe()
    from_browser, browser_writes = os.pipe()
    process = subprocess.Popen(
        [
            *("timeout", str(_TIMEOUT_S), "bash", "-c", shell, program),
            *_QUIET, f"--user-data-dir={folder / 'profile'}", "about:blank",
        ],
        env=os.environ | {"IN": str(browser_reads), "OUT": str(browser_writes)},
        pass_fds=(browser_reads, browser_writes),
        stderr=subprocess.DEVNULL,
    )  # fmt: skip
    os.close(browser_reads)
    os.close(browser_writes)
    try:
        yield Page(to_browser, from_browser)
    finally:
        os.close(to_browser)
        process.terminate()
        process.wait(10)
        os.close(from_browser)
