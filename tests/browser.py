"""A browser without a window, driven through its DevTools protocol over a pair of pipes: no port, no further package.

Messages are JSON texts that end in NUL: commands on the browser's descriptor 3, answers and events on 4
(`--remote-debugging-pipe`). https://chromedevtools.github.io/devtools-protocol/
"""

from __future__ import annotations

import base64
import fcntl
import json
import os
import select
import shutil
import subprocess
import time
from pathlib import Path
from types import TracebackType
from typing import Any

import pytest

SWITCHES = (
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--hide-scrollbars",
    "--disable-background-networking", "--disable-component-update", "--disable-sync", "--disable-dev-shm-usage",
    "--remote-debugging-pipe",
)  # fmt: skip

KEYS: dict[str, tuple[str, int, str | None]] = {
    "Tab": ("Tab", 9, None), "Enter": ("Enter", 13, "\r"), " ": ("Space", 32, " "),
}  # fmt: skip
"""Keys by name: code, number, and the text they give."""

PATIENCE = 60.0
"""Seconds that an answer may take on a loaded machine."""


def browser_path() -> str:
    """The browser of this machine; the test is skipped where there is none."""
    for name in ("chromium", "chromium-browser", "google-chrome"):
        if found := shutil.which(name):
            return found
    pytest.skip("no browser to open the page with (Debian: apt-get install chromium)")


class Browser:
    """One page of one browser with a fresh profile; what the page complains about is collected."""

    def __init__(self, profile: Path) -> None:
        read_end, self._out = os.pipe()
        self._in, write_end = os.pipe()
        # The shell puts the two ends where the browser looks for them: 3 is read, 4 is written. Neither number may be
        # taken by the other's end before.
        to_browser, from_browser = (fcntl.fcntl(end, fcntl.F_DUPFD, 10) for end in (read_end, write_end))
        line = f'exec "$@" 3<&{to_browser} 4>&{from_browser} {to_browser}<&- {from_browser}>&-'
        self._process = subprocess.Popen(
            ["bash", "-c", line, "browser", browser_path(), *SWITCHES, f"--user-data-dir={profile}", "about:blank"],
            pass_fds=(to_browser, from_browser), stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL,
        )  # fmt: skip
        for end in (read_end, write_end, to_browser, from_browser):
            os.close(end)
        self._buffer = b""
        self._number = 0
        self._session: str | None = None
        self.events: list[dict[str, Any]] = []
        target = self.send("Target.createTarget", url="about:blank")["targetId"]
        self._session = self.send("Target.attachToTarget", targetId=target, flatten=True)["sessionId"]
        for part in ("Page", "Runtime", "Log", "Network", "DOM", "CSS", "Accessibility"):
            self.send(f"{part}.enable")

    def __enter__(self) -> Browser:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        try:
            self._session = None
            self.send("Browser.close")
            self._process.wait(10)
        except (OSError, AssertionError, subprocess.TimeoutExpired):
            self._process.kill()
            self._process.wait()
        finally:
            os.close(self._out)
            os.close(self._in)

    def send(self, method: str, **values: Any) -> dict[str, Any]:
        """A command, and its result; events that come meanwhile are kept."""
        self._number += 1
        message: dict[str, Any] = {"id": self._number, "method": method, "params": values}
        if self._session is not None:
            message["sessionId"] = self._session
        data = json.dumps(message).encode() + b"\0"
        while data:
            data = data[os.write(self._out, data) :]
        while True:
            got = self._receive()
            if got.get("id") == self._number:
                assert "error" not in got, (method, got["error"])
                result: dict[str, Any] = got["result"]
                return result
            self.events.append(got)

    def _receive(self) -> dict[str, Any]:
        end = time.monotonic() + PATIENCE
        while b"\0" not in self._buffer:
            ready, _, _ = select.select([self._in], [], [], max(0.0, end - time.monotonic()))
            assert ready, "the browser does not answer"
            read = os.read(self._in, 1 << 20)
            assert read, "the browser has ended"
            self._buffer += read
        text, self._buffer = self._buffer.split(b"\0", 1)
        message: dict[str, Any] = json.loads(text)
        return message

    def open(self, page: Path) -> None:
        """Go to a file and wait until it is loaded and drawn."""
        self.events.clear()
        self.send("Page.navigate", url=page.absolute().as_uri())
        while not any(e.get("method") == "Page.loadEventFired" for e in self.events):
            self.events.append(self._receive())
        self._drawn()

    def _drawn(self) -> None:
        """Wait for two frames: then the page knows of its size."""
        self.evaluate("new Promise((done) => requestAnimationFrame(() => requestAnimationFrame(() => done(0))))")

    def evaluate(self, code: str) -> Any:
        """The value of an expression in the page (JSON); a promise is awaited."""
        got = self.send("Runtime.evaluate", expression=code, returnByValue=True, awaitPromise=True)
        assert "exceptionDetails" not in got, got["exceptionDetails"]
        return got["result"].get("value")

    def window(self, width: int, height: int) -> None:
        """The size of the view in CSS pixels."""
        self.send("Emulation.setDeviceMetricsOverride", width=width, height=height, deviceScaleFactor=1, mobile=False)
        self._drawn()

    def media(self, name: str) -> None:
        """`print`, or `` for the screen."""
        self.send("Emulation.setEmulatedMedia", media=name)

    def press(self, key: str, shift: bool = False) -> None:
        """A key of KEYS, or a letter."""
        code, number, text = KEYS.get(key, (f"Key{key.upper()}", ord(key.upper()[0]), key))
        values: dict[str, Any] = {"key": key, "code": code, "windowsVirtualKeyCode": number, "modifiers": 8 * shift}
        self.send("Input.dispatchKeyEvent", type="keyDown", **values, **({"text": text} if text else {}))
        self.send("Input.dispatchKeyEvent", type="keyUp", **values)

    def write(self, text: str) -> None:
        """Type a text into what has the focus."""
        self.send("Input.insertText", text=text)

    def picture(self, path: Path, whole: bool = True) -> None:
        """A PNG of the page."""
        got = self.send("Page.captureScreenshot", format="png", captureBeyondViewport=whole)
        path.write_bytes(base64.b64decode(got["data"]))

    def printed(self, path: Path) -> None:
        """The page as a PDF, on the paper that its style names."""
        got = self.send("Page.printToPDF", preferCSSPageSize=True, printBackground=True)
        path.write_bytes(base64.b64decode(got["data"]))

    def complaints(self) -> list[str]:
        """What stood in the console since the page was opened: errors, warnings, refused requests, exceptions."""
        self.evaluate("0")  # all events up to now
        told = []
        for event in self.events:
            values = event.get("params", {})
            if event.get("method") == "Runtime.exceptionThrown":
                told.append(str(values["exceptionDetails"].get("exception", values["exceptionDetails"])))
            elif event.get("method") == "Runtime.consoleAPICalled":
                told.append(str([a.get("value") for a in values["args"]]))
            elif event.get("method") == "Log.entryAdded":
                told.append(str(values["entry"]["text"]))
        return told

    def requests(self) -> list[str]:
        """Addresses that the page asked for since it was opened, itself and data aside."""
        asked = [e["params"]["request"]["url"] for e in self.events if e.get("method") == "Network.requestWillBeSent"]
        return [url for url in asked[1:] if not url.startswith("data:")]
