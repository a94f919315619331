"""A headless Chromium steered over its debugging pipe: no driver program, no socket, no package.

Chromium reads commands from file descriptor 3 and writes answers and events to 4, as JSON texts that end with a zero
byte (``--remote-debugging-pipe``). That is all there is to it, so the tests need nothing but the browser itself.
"""

from __future__ import annotations

import base64
import fcntl
import json
import os
import selectors
import shutil
import signal
import time
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from tests.shared_inputs import under_ci

PATIENCE = 60.0
#: Names under which systems install it.
NAMES = ("chromium", "chromium-browser", "google-chrome", "chrome")
_FLAGS = (
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-dev-shm-usage", "--no-first-run", "--disable-extensions",
    "--disable-background-networking", "--disable-component-update", "--disable-sync", "--hide-scrollbars",
    # whatever a page asks for has nowhere to go; what it asked for is told by the Network events
    "--host-resolver-rules=MAP * ~NOTFOUND", "--remote-debugging-pipe",
)  # fmt: skip


def demand_chromium() -> str:
    """Path of the browser. Without one the test fails under CI and is skipped elsewhere."""
    found = next((path for path in map(shutil.which, NAMES) if path), None)
    if found is None:
        words = f"no Chromium on this machine (looked for {', '.join(NAMES)})"
        if under_ci():
            pytest.fail(words)
        pytest.skip(words)
    return found


@dataclass
class Event:
    """What the browser told of its own accord."""

    method: str
    params: Mapping[str, Any]


def _high(number: int) -> int:
    """The same file under a number that is in nobody's way."""
    high = fcntl.fcntl(number, fcntl.F_DUPFD_CLOEXEC, 20)
    os.close(number)
    return high


class Chromium:
    """One browser with one page; ``events`` holds everything it told, in order."""

    def __init__(self, profile: Path) -> None:
        path = demand_chromium()
        theirs_in, ours_out = map(_high, os.pipe())
        ours_in, theirs_out = map(_high, os.pipe())
        command = [path, *_FLAGS, f"--user-data-dir={profile}", "about:blank"]
        quiet = [(os.POSIX_SPAWN_OPEN, k, os.devnull, os.O_WRONLY, 0) for k in (1, 2)]
        # The browser expects its pipe at these two numbers.
        pipe = [(os.POSIX_SPAWN_DUP2, theirs_in, 3), (os.POSIX_SPAWN_DUP2, theirs_out, 4)]
        self._process = os.posix_spawn(path, command, os.environ, file_actions=[*quiet, *pipe])
        os.close(theirs_in)
        os.close(theirs_out)
        self._in, self._out = ours_in, ours_out
        self._selector = selectors.DefaultSelector()
        self._selector.register(ours_in, selectors.EVENT_READ)
        self._rest = b""
        self._number = 0
        self.events: list[Event] = []
        targets = self._send("Target.getTargets", {}, None)["targetInfos"]
        page = next(t["targetId"] for t in targets if t["type"] == "page")
        self._session = self._send("Target.attachToTarget", {"targetId": page, "flatten": True}, None)[
            "sessionId"
        ]
        for domain in ("Page", "Runtime", "Log", "Network"):
            self.send(f"{domain}.enable")

    def close(self) -> None:
        """End the browser and everything it started."""
        try:
            self._send("Browser.close", {}, None)
        except (OSError, ConnectionError, TimeoutError):
            os.kill(self._process, signal.SIGKILL)
        os.waitpid(self._process, 0)
        self._selector.close()
        os.close(self._in)
        os.close(self._out)

    def send(self, method: str, **params: Any) -> Mapping[str, Any]:
        """Answer of a command to the page. Raises RuntimeError with the browser's words when it refuses."""
        return self._send(method, params, self._session)

    def _send(self, method: str, params: Mapping[str, Any], session: str | None) -> Mapping[str, Any]:
        self._number += 1
        message: dict[str, Any] = {"id": self._number, "method": method, "params": params}
        if session:
            message["sessionId"] = session
        data = json.dumps(message).encode() + b"\0"
        while data:
            data = data[os.write(self._out, data) :]
        return self._until(lambda m: m.get("id") == self._number)

    def _until(self, wanted: Any) -> Mapping[str, Any]:
        """Reads on until a message is the wanted one; everything else is an event."""
        end = time.monotonic() + PATIENCE
        while True:
            while b"\0" in self._rest:
                text, self._rest = self._rest.split(b"\0", 1)
                message = json.loads(text)
                if "method" in message:
                    self.events.append(Event(message["method"], message.get("params", {})))
                if wanted(message):
                    if "error" in message:
                        raise RuntimeError(f"{message['error']}")
                    answer: Mapping[str, Any] = message.get("result", {})
                    return answer
            if time.monotonic() > end or not self._selector.select(end - time.monotonic()):
                raise TimeoutError("the browser did not answer")
            more = os.read(self._in, 1 << 20)
            if not more:
                raise ConnectionError("the browser closed its pipe")
            self._rest += more

    # ---- what a person does

    def size(self, width: int, height: int) -> None:
        self.send(
            "Emulation.setDeviceMetricsOverride",
            width=width,
            height=height,
            deviceScaleFactor=1,
            mobile=False,
        )

    def open(self, file: Path) -> None:
        """Open a file and wait until it has loaded; forgets earlier events."""
        self.events.clear()
        self.send("Page.navigate", url=file.resolve().as_uri())
        if not any(e.method == "Page.loadEventFired" for e in self.events):
            self._until(lambda m: m.get("method") == "Page.loadEventFired")

    def value(self, expression: str) -> Any:
        """Value of a JavaScript expression. Raises RuntimeError when it throws."""
        answer = self.send("Runtime.evaluate", expression=expression, returnByValue=True)
        if "exceptionDetails" in answer:
            raise RuntimeError(str(answer["exceptionDetails"]))
        return answer["result"].get("value")

    def media(self, kind: str = "", **features: str) -> None:
        """Print or screen, and features such as prefers_color_scheme="dark"; nothing moves slowly, so that clicks hit."""
        wanted = {"prefers_reduced_motion": "reduce", **features}
        pairs = [{"name": k.replace("_", "-"), "value": v} for k, v in wanted.items()]
        self.send("Emulation.setEmulatedMedia", media=kind, features=pairs)

    def drawn(self) -> None:
        """Waits until what the page looks like now has been drawn: a click goes to what is drawn."""
        frames = "new Promise(done => requestAnimationFrame(() => requestAnimationFrame(() => done(1))))"
        self.send("Runtime.evaluate", expression=frames, awaitPromise=True)

    def box(self, selector: str) -> Sequence[float]:
        """Left, top, width, height of the first match on the screen, scrolled into view. Needs the page's scripts."""
        text = json.dumps(selector)
        found: Sequence[float] = self.value(
            f"(e=>{{e.scrollIntoView({{block:'center',behavior:'instant'}});const b=e.getBoundingClientRect();"
            f"return [b.left,b.top,b.width,b.height]}})(document.querySelector({text}))"
        )
        self.drawn()
        return found

    def click(self, selector: str) -> None:
        """A real click into the middle of an element."""
        left, top, width, height = self.box(selector)
        where = {"x": left + width / 2, "y": top + height / 2, "button": "left", "clickCount": 1}
        for kind in ("mousePressed", "mouseReleased"):
            self.send("Input.dispatchMouseEvent", type=kind, **where)

    def point(self, selector: str, across: float, down: float) -> None:
        """Moves the pointer to a place inside an element: shares of its width and height."""
        left, top, width, height = self.box(selector)
        self.send(
            "Input.dispatchMouseEvent", type="mouseMoved", x=left + across * width, y=top + down * height
        )

    def key(self, name: str) -> None:
        """Presses and releases a key by its DOM name."""
        codes = {
            "Tab": 9,
            "Enter": 13,
            "ArrowRight": 39,
            "ArrowLeft": 37,
            "Escape": 27,
            "End": 35,
            "Home": 36,
            " ": 32,
        }
        text = {"text": "\r"} if name == "Enter" else {"text": " "} if name == " " else {}
        for kind in ("keyDown", "keyUp"):
            more = text if kind == "keyDown" else {}
            self.send(
                "Input.dispatchKeyEvent", type=kind, key=name, windowsVirtualKeyCode=codes[name], **more
            )

    def picture(self, *, whole: bool = False) -> bytes:
        """The page as PNG: what is on the screen, or all of it."""
        return base64.b64decode(self.send("Page.captureScreenshot", captureBeyondViewport=whole)["data"])

    def printed(self) -> bytes:
        """The page as PDF, as its own style sheet wants it printed."""
        answer = self.send("Page.printToPDF", preferCSSPageSize=True, printBackground=True)
        return base64.b64decode(answer["data"])

    # ---- what went wrong

    def complaints(self) -> list[str]:
        """Script errors, console errors and refused content since the page was opened."""
        out = []
        for e in self.events:
            if e.method == "Runtime.exceptionThrown":
                out.append(json.dumps(e.params["exceptionDetails"]))
            elif e.method == "Runtime.consoleAPICalled" and e.params["type"] in (
                "error",
                "warning",
                "assert",
            ):
                out.append(json.dumps(e.params["args"]))
            elif e.method == "Log.entryAdded" and e.params["entry"]["level"] in ("error", "warning"):
                out.append(json.dumps(e.params["entry"]))
        return out

    def requests(self) -> list[str]:
        """Addresses asked for since the page was opened, the page itself among them."""
        return [e.params["request"]["url"] for e in self.events if e.method == "Network.requestWillBeSent"]
