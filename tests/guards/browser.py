"""A headless Chromium spoken to over its debugging pipe, for the tests of the report; the standard library alone."""

from __future__ import annotations

import base64
import json
import os
import shutil
import subprocess
import tempfile
from pathlib import Path
from typing import Any

NAMES = ("chromium", "chromium-browser")


def found() -> str | None:
    """The path of a Chromium, or None."""
    return next(filter(None, map(shutil.which, NAMES)), None)


class Browser:
    """One page. `requests`, `complaints` gather what the page asks of the network and says on the console."""

    def __init__(self) -> None:
        self._profile = tempfile.mkdtemp(prefix="browser-")
        (to_browser, self._out), (self._in, from_browser) = os.pipe(), os.pipe()

        def as_3_and_4() -> None:  # where Chromium expects its pipe
            spare = os.dup(to_browser), os.dup(from_browser)
            os.dup2(spare[0], 3)
            os.dup2(spare[1], 4)

        root = ["--no-sandbox"] if os.getuid() == 0 else []
        self._process = subprocess.Popen(
            [found(), "--headless", "--disable-gpu", "--disable-dev-shm-usage", "--remote-debugging-pipe", *root,
             f"--user-data-dir={self._profile}", "about:blank"],
            preexec_fn=as_3_and_4, close_fds=False, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
        os.close(to_browser)
        os.close(from_browser)
        self._buffer, self._number, self._session = b"", 0, None
        self.requests: list[str] = []
        self.complaints: list[str] = []
        self._events: list[str] = []
        page = next(one for one in self.ask("Target.getTargets")["targetInfos"] if one["type"] == "page")
        self._session = self.ask("Target.attachToTarget", targetId=page["targetId"], flatten=True)["sessionId"]
        for domain in ("Page", "Network", "Runtime", "Log"):
            self.ask(f"{domain}.enable")

    def ask(self, method: str, **parameters: Any) -> dict[str, Any]:
        """Send a command, note the events that come before its answer."""
        self._number += 1
        message: dict[str, Any] = {"id": self._number, "method": method, "params": parameters}
        if self._session:
            message["sessionId"] = self._session
        os.write(self._out, json.dumps(message).encode() + b"\0")
        while True:
            answer = self._next()
            if answer.get("id") == self._number:
                assert "error" not in answer, (method, answer)
                return answer["result"]

    def _next(self) -> dict[str, Any]:
        while b"\0" not in self._buffer:
            part = os.read(self._in, 1 << 20)
            assert part, "Chromium has ended"
            self._buffer += part
        line, _, self._buffer = self._buffer.partition(b"\0")
        message = json.loads(line)
        kind, told = message.get("method", ""), message.get("params", {})
        self._events.append(kind)
        if kind == "Network.requestWillBeSent":
            self.requests.append(told["request"]["url"])
        if kind == "Runtime.exceptionThrown":
            self.complaints.append(told["exceptionDetails"]["text"])
        if kind == "Runtime.consoleAPICalled" and told["type"] in ("error", "warning"):
            self.complaints.append(str(told["args"]))
        if kind == "Log.entryAdded" and told["entry"]["level"] in ("error", "warning"):
            self.complaints.append(told["entry"]["text"])
        return message

    def open(self, path: Path, width: int, height: int = 900) -> None:
        """Load a file in a window of that many CSS pixels, as a telephone or a desk would show it."""
        self.ask("Emulation.setDeviceMetricsOverride", width=width, height=height, deviceScaleFactor=1,
                 mobile=width < 500)
        self._events.clear()
        self.ask("Page.navigate", url=path.as_uri())
        while "Page.loadEventFired" not in self._events:
            self._next()

    def value(self, expression: str) -> Any:
        """What a JavaScript expression gives."""
        answer = self.ask("Runtime.evaluate", expression=expression, returnByValue=True)
        assert "exceptionDetails" not in answer, answer["exceptionDetails"]
        return answer["result"].get("value")

    def press(self, key: str) -> None:
        """A key on the keyboard: Tab, Enter."""
        code = {"Tab": 9, "Enter": 13}[key]
        text = {"text": "\r"} if key == "Enter" else {}
        self.ask("Input.dispatchKeyEvent", type="keyDown", key=key, code=key, windowsVirtualKeyCode=code, **text)
        self.ask("Input.dispatchKeyEvent", type="keyUp", key=key, code=key, windowsVirtualKeyCode=code)

    def picture(self, path: Path, whole: bool = True) -> None:
        """Save a screenshot, of the whole page or of what fits the window."""
        path.write_bytes(base64.b64decode(self.ask("Page.captureScreenshot", captureBeyondViewport=whole)["data"]))

    def printed(self) -> bytes:
        """The page as PDF, on its own paper size."""
        return base64.b64decode(self.ask("Page.printToPDF", preferCSSPageSize=True)["data"])

    def close(self) -> None:
        self._session = None
        try:
            self.ask("Browser.close")
        finally:
            self._process.wait(timeout=20)
            os.close(self._out)
            os.close(self._in)
            shutil.rmtree(self._profile, ignore_errors=True)
