"""Headless Chromium over its debugging pipe (Chrome DevTools Protocol), without any further package."""

from __future__ import annotations

import base64
import json
import os
import subprocess
from pathlib import Path
from typing import Any

_FLAGS = [
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--disable-extensions",
    "--hide-scrollbars",
    "--remote-debugging-pipe",
]


class Browser:
    """One page of one browser; `events` are all messages that it sent unasked."""

    def __init__(self, program: str, profile: Path) -> None:
        to_read, self._write = os.pipe()
        self._read, to_write = os.pipe()
        # the browser reads commands from descriptor 3 and answers on 4
        self._process = subprocess.Popen(
            ["bash", "-c", f'exec "$@" 3<&{to_read} 4>&{to_write}', "bash", program, *_FLAGS, f"--user-data-dir={profile}"],
            pass_fds=(to_read, to_write),
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
        )
        os.close(to_read)
        os.close(to_write)
        self._buffer, self._next, self._session = b"", 0, ""
        self.events: list[dict[str, Any]] = []
        target = self.call("Target.createTarget", url="about:blank")["targetId"]
        self._session = self.call("Target.attachToTarget", targetId=target, flatten=True)["sessionId"]
        for domain in ("Page", "Runtime", "Log", "Network"):
            self.call(f"{domain}.enable")

    def call(self, method: str, **parameters: Any) -> dict[str, Any]:
        """Send a command and wait for its answer."""
        self._next += 1
        number = self._next
        message = {"id": number, "method": method, "params": parameters}
        if self._session:
            message["sessionId"] = self._session
        os.write(self._write, json.dumps(message).encode() + b"\0")
        while True:
            found = self._receive()
            if found.get("id") == number:
                assert "error" not in found, (method, found["error"])
                return found["result"]
            self.events.append(found)

    def _receive(self) -> dict[str, Any]:
        while b"\0" not in self._buffer:
            piece = os.read(self._read, 1 << 20)
            assert piece, "the browser has gone"
            self._buffer += piece
        text, self._buffer = self._buffer.split(b"\0", 1)
        return json.loads(text)

    def open(self, page: Path, width: int, height: int = 900, scheme: str = "light") -> None:
        """Open a file in a window of a size in CSS pixels and a preferred colour scheme."""
        self.call("Emulation.setDeviceMetricsOverride", width=width, height=height, deviceScaleFactor=1, mobile=width < 600)
        self.call("Emulation.setEmulatedMedia", features=[{"name": "prefers-color-scheme", "value": scheme}])
        self.events.clear()
        self.call("Page.navigate", url=page.resolve().as_uri())
        while not any(e.get("method") == "Page.loadEventFired" for e in self.events):
            self.events.append(self._receive())

    def run(self, script: str) -> Any:
        """Value of an expression in the page."""
        found = self.call("Runtime.evaluate", expression=script, returnByValue=True, awaitPromise=True)
        assert "exceptionDetails" not in found, found["exceptionDetails"]
        return found["result"].get("value")

    def click(self, selector: str) -> None:
        """Press the mouse in the middle of an element."""
        place = self.run(
            f"(() => {{const e = document.querySelector({json.dumps(selector)}); e.scrollIntoView({{block: 'center'}});"
            "const r = e.getBoundingClientRect(); return {x: r.x + r.width / 2, y: r.y + r.height / 2};})()"
        )
        for kind in ("mousePressed", "mouseReleased"):
            self.call("Input.dispatchMouseEvent", type=kind, button="left", clickCount=1, **place)

    def picture(self, selector: str | None = None) -> bytes:
        """PNG of the whole page, or of one element."""
        script = f"document.querySelector({json.dumps(selector or 'html')}).getBoundingClientRect().toJSON()"
        box = self.run(script)
        top = self.run("window.scrollY")
        clip = {"x": box["x"], "y": box["y"] + top, "width": box["width"], "height": box["height"], "scale": 1}
        return base64.b64decode(self.call("Page.captureScreenshot", clip=clip, captureBeyondViewport=True)["data"])

    def pdf(self) -> bytes:
        """The page as it prints."""
        return base64.b64decode(self.call("Page.printToPDF", preferCSSPageSize=True, printBackground=False)["data"])

    @property
    def complaints(self) -> list[str]:
        """Errors and warnings of the console, and exceptions, since the page was opened."""
        found = []
        for event in self.events:
            method, detail = event.get("method"), event.get("params", {})
            if method == "Runtime.exceptionThrown" or (
                method == "Runtime.consoleAPICalled" and detail["type"] in ("error", "warning", "assert")
            ):
                found.append(json.dumps(detail)[:400])
            if method == "Log.entryAdded" and detail["entry"]["level"] in ("error", "warning"):
                found.append(detail["entry"]["text"])
        return found

    @property
    def requests(self) -> list[str]:
        """Everything that the page asked for since it was opened."""
        return [e["params"]["request"]["url"] for e in self.events if e.get("method") == "Network.requestWillBeSent"]

    def close(self) -> None:
        """End the browser."""
        self._session = ""
        try:
            self.call("Browser.close")
        except (AssertionError, OSError):
            self._process.kill()
        self._process.wait(timeout=20)
        os.close(self._read)
        os.close(self._write)
