"""A real browser without a screen, driven over pipes by the DevTools protocol.

The protocol is that of the Chrome DevTools Protocol, version 1.3: JSON messages that end in a null
byte, from file descriptor 4 of the browser and to its descriptor 3.
"""

from __future__ import annotations

import base64
import contextlib
import json
import os
import select
import shutil
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

NAMES = ("chromium", "chromium-browser")
_PATIENCE_S = 60.0
# The descriptors are put in place by a step between, since only the child may have these numbers.
_LAUNCH = (
    "import os, sys; os.dup2(int(sys.argv[1]), 3); os.dup2(int(sys.argv[2]), 4);"
    " os.execv(sys.argv[3], sys.argv[3:])"
)
_FLAGS = (
    "--headless=new",
    "--remote-debugging-pipe",
    "--no-sandbox",  # the tests may run as root, and the page is our own
    "--disable-gpu",
    "--disable-dev-shm-usage",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--hide-scrollbars",
)


def browser_path() -> str | None:
    """Path of the browser, or None."""
    return next((found for name in NAMES if (found := shutil.which(name))), None)


class Browser:
    """One page of a running browser; everything it says is kept in `events`."""

    def __init__(self, outgoing: int, incoming: int) -> None:
        self._outgoing, self._incoming = outgoing, incoming
        self._buffer = b""
        self._count = 0
        self._session: str | None = None
        self.events: list[dict[str, Any]] = []
        target = self.call("Target.createTarget", url="about:blank")["targetId"]
        attached = self.call("Target.attachToTarget", targetId=target, flatten=True)
        self._session = attached["sessionId"]
        for domain in ("Page", "Network", "Runtime", "Log", "Accessibility"):
            self.call(f"{domain}.enable")

    def call(self, method: str, **parameters: Any) -> dict[str, Any]:
        """Send a command and wait for its answer."""
        self._count += 1
        message: dict[str, Any] = {"id": self._count, "method": method, "params": parameters}
        if self._session is not None:
            message["sessionId"] = self._session
        os.write(self._outgoing, json.dumps(message).encode() + b"\0")
        while True:
            answer = self._receive()
            if answer.get("id") == self._count:
                assert "error" not in answer, (method, answer["error"])
                result: dict[str, Any] = answer["result"]
                return result
            self.events.append(answer)

    def _receive(self) -> dict[str, Any]:
        end = time.monotonic() + _PATIENCE_S
        while b"\0" not in self._buffer:
            ready, _, _ = select.select([self._incoming], [], [], max(0.0, end - time.monotonic()))
            assert ready, "the browser does not answer"
            piece = os.read(self._incoming, 1 << 20)
            assert piece, "the browser has ended"
            self._buffer += piece
        message, _, self._buffer = self._buffer.partition(b"\0")
        received: dict[str, Any] = json.loads(message)
        return received

    def open(self, page: Path, width: int, height: int = 900) -> None:
        """Load a file in a window of this width and wait until it is there."""
        self.events.clear()
        self.call(
            "Emulation.setDeviceMetricsOverride",
            width=width,
            height=height,
            deviceScaleFactor=1,
            mobile=width < 600,
        )
        self.call("Page.navigate", url=page.as_uri())
        while not any(one.get("method") == "Page.loadEventFired" for one in self.events):
            self.events.append(self._receive())

    def evaluate(self, expression: str) -> Any:
        """Value of an expression in the page."""
        answer = self.call("Runtime.evaluate", expression=expression, returnByValue=True)
        assert "exceptionDetails" not in answer, answer
        return answer["result"].get("value")

    def requests(self) -> list[str]:
        """Addresses that the page asked for since it was opened, its own among them."""
        asked = [one for one in self.events if one.get("method") == "Network.requestWillBeSent"]
        return [one["params"]["request"]["url"] for one in asked]

    def complaints(self) -> list[str]:
        """What the console holds since the page was opened."""
        kinds = {"Runtime.consoleAPICalled", "Runtime.exceptionThrown", "Log.entryAdded"}
        return [json.dumps(one["params"]) for one in self.events if one.get("method") in kinds]

    def accessibility_tree(self) -> list[tuple[str, str, str]]:
        """Role, name and description of everything that assistive software is told of."""
        nodes = self.call("Accessibility.getFullAXTree")["nodes"]

        def text(node: dict[str, Any], key: str) -> str:
            return str(node.get(key, {}).get("value", ""))

        return [
            (text(one, "role"), text(one, "name"), text(one, "description"))
            for one in nodes
            if not one.get("ignored")
        ]

    def screenshot(self, width: int, target: Path) -> None:
        """Put a picture of the whole page, at this width, into a PNG file."""
        height = self.evaluate("document.documentElement.scrollHeight")
        clip = {"x": 0, "y": 0, "width": width, "height": height, "scale": 1}
        made = self.call("Page.captureScreenshot", captureBeyondViewport=True, clip=clip)
        target.write_bytes(base64.b64decode(made["data"]))

    def pdf(self, target: Path) -> None:
        """Print the page into a file."""
        made = self.call("Page.printToPDF", preferCSSPageSize=True, printBackground=True)
        target.write_bytes(base64.b64decode(made["data"]))


@contextlib.contextmanager
def running_browser() -> Iterator[Browser]:
    """Start the browser with a profile of its own; end it, and only it, afterwards."""
    path = browser_path()
    assert path is not None
    (to_read, outgoing), (incoming, to_write) = os.pipe(), os.pipe()
    with tempfile.TemporaryDirectory(ignore_cleanup_errors=True) as profile:
        process = subprocess.Popen(
            [
                *(sys.executable, "-c", _LAUNCH, str(to_read), str(to_write)),
                *(path, *_FLAGS, f"--user-data-dir={profile}"),
            ],
            pass_fds=(to_read, to_write),
            stdin=subprocess.DEVNULL,
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
        )
        os.close(to_read)
        os.close(to_write)
        try:
            yield Browser(outgoing, incoming)
        finally:
            os.close(outgoing)  # the browser ends when nobody can speak to it
            try:
                process.wait(20.0)
            except subprocess.TimeoutExpired:
                process.kill()
                process.wait()
            os.close(incoming)
