"""A real browser for tests: Chromium without a window, led through its debugging pipe.

Chrome DevTools Protocol over --remote-debugging-pipe: JSON messages that end with a zero
byte. Nothing but the standard library is needed.
"""

from __future__ import annotations

import base64
import json
import os
import select
import shutil
import subprocess
import time
from pathlib import Path

NAMES = ("chromium", "chromium-browser", "google-chrome", "chrome")
FLAGS = (
    "--headless=new",
    "--no-sandbox",
    "--disable-gpu",
    "--no-first-run",
    "--hide-scrollbars",
    "--remote-debugging-pipe",
)


def find_browser() -> str | None:
    """Return the path of an installed Chromium, or None."""
    return next((path for name in NAMES if (path := shutil.which(name))), None)


class Browser:
    """One browser process with one tab; use as a context."""

    def __init__(self, folder: Path):
        self._inward, self._outward = folder / "to-browser", folder / "from-browser"
        self._folder = folder
        self._number, self._left = 0, b""
        self.events: list[dict] = []

    def __enter__(self):
        os.mkfifo(self._inward)
        os.mkfifo(self._outward)
        home = self._folder / "profile"
        self._process = subprocess.Popen(
            ["/bin/sh", "-c", 'exec "$@" 3<"$INWARD" 4>"$OUTWARD"', "sh"]
            + [find_browser(), *FLAGS, f"--user-data-dir={home}", "about:blank"],
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
            env={
                **os.environ,
                "INWARD": str(self._inward),
                "OUTWARD": str(self._outward),
            },
        )
        self._to = os.open(self._inward, os.O_WRONLY)
        self._from = os.open(self._outward, os.O_RDONLY)
        self._session = None
        target = self.call("Target.createTarget", url="about:blank")["targetId"]
        answer = self.call("Target.attachToTarget", targetId=target, flatten=True)
        self._session = answer["sessionId"]
        for domain in ("Page", "Runtime", "Network", "Log"):
            self.call(f"{domain}.enable")
        return self

    def __exit__(self, *_):
        self._session = None
        try:
            self.call("Browser.close")
        except (OSError, TimeoutError):
            pass
        os.close(self._to)
        os.close(self._from)
        try:
            self._process.wait(timeout=10)
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.wait()

    def _message(self, limit_s: float) -> dict:
        end = time.monotonic() + limit_s
        while b"\0" not in self._left:
            ready, _, _ = select.select([self._from], [], [], end - time.monotonic())
            data = os.read(self._from, 1 << 20) if ready else b""
            if not data:
                raise TimeoutError("the browser is silent")
            self._left += data
        message, self._left = self._left.split(b"\0", 1)
        return json.loads(message)

    def call(self, method: str, limit_s: float = 30.0, **params) -> dict:
        """Send one command and return its answer; events that pass are kept."""
        self._number += 1
        message = {"id": self._number, "method": method, "params": params}
        if self._session:
            message["sessionId"] = self._session
        os.write(self._to, json.dumps(message).encode() + b"\0")
        while True:
            answer = self._message(limit_s)
            if answer.get("id") == self._number:
                if "error" in answer:
                    raise RuntimeError(answer["error"])
                return answer["result"]
            self.events.append(answer)

    def open(self, path: Path, width: int = 1000, dark: bool = False) -> None:
        """Load a file at a width in pixels, light or dark; wait until it is there."""
        self.events.clear()
        self.resize(width)
        scheme = {"name": "prefers-color-scheme", "value": "dark" if dark else "light"}
        self.call("Emulation.setEmulatedMedia", features=[scheme])
        self.call("Page.navigate", url=path.as_uri())
        end = time.monotonic() + 30
        while not any(e["method"] == "Page.loadEventFired" for e in self.events):
            self.run("0")
            assert time.monotonic() < end
            time.sleep(0.02)

    def resize(self, width: int, height: int = 900) -> None:
        """Set the width of the page."""
        self.call(
            "Emulation.setDeviceMetricsOverride",
            width=width,
            height=height,
            deviceScaleFactor=1,
            mobile=False,
        )

    def run(self, script: str) -> object:
        """Evaluate JavaScript and return its value."""
        answer = self.call(
            "Runtime.evaluate",
            expression=script,
            returnByValue=True,
            awaitPromise=True,
        )
        if "exceptionDetails" in answer:
            raise RuntimeError(answer["exceptionDetails"])
        return answer["result"].get("value")

    def mouse(self, kind: str, x: float, y: float, button: str = "none") -> None:
        """Send one mouse event: mouseMoved, mousePressed or mouseReleased."""
        self.call(
            "Input.dispatchMouseEvent",
            type=kind,
            x=x,
            y=y,
            button=button,
            clickCount=0 if kind == "mouseMoved" else 1,
        )

    def click(self, x: float, y: float) -> None:
        """Click at a place of the window."""
        self.mouse("mouseMoved", x, y)
        self.mouse("mousePressed", x, y, "left")
        self.mouse("mouseReleased", x, y, "left")

    def key(self, key: str, code: int) -> None:
        """Press and let go of one key, by its name and Windows key code."""
        extra = {"text": "\r"} if key == "Enter" else {}
        for kind in ("keyDown", "keyUp"):
            self.call(
                "Input.dispatchKeyEvent",
                type=kind,
                key=key,
                code=key,
                windowsVirtualKeyCode=code,
                **(extra if kind == "keyDown" else {}),
            )

    def middle(self, selector: str) -> tuple[float, float]:
        """Scroll to an element and return the middle of it in the window."""
        found = self.run(
            f"(() => {{ const e = document.querySelector({json.dumps(selector)});"
            "e.scrollIntoView({block: 'center'}); const r = e.getBoundingClientRect();"
            "return [r.x + r.width / 2, r.y + r.height / 2]; })()"
        )
        return tuple(found)

    def requests(self) -> list[str]:
        """Return the addresses that were asked for since the page was opened."""
        sent = [e for e in self.events if e["method"] == "Network.requestWillBeSent"]
        return [event["params"]["request"]["url"] for event in sent]

    def complaints(self) -> list[str]:
        """Return errors and warnings of the console since the page was opened."""
        out = []
        for event in self.events:
            if event["method"] == "Runtime.exceptionThrown":
                out.append(json.dumps(event["params"]["exceptionDetails"]))
            if event["method"] == "Log.entryAdded":
                out.append(event["params"]["entry"]["text"])
            if event["method"] == "Runtime.consoleAPICalled":
                out.append(json.dumps(event["params"]["args"]))
        return out

    def screenshot(self, path: Path) -> None:
        """Write the whole page as PNG."""
        root = "document.documentElement"
        size = self.run(f"[{root}.clientWidth, {root}.scrollHeight]")
        clip = {"x": 0, "y": 0, "width": size[0], "height": size[1], "scale": 1}
        data = self.call(
            "Page.captureScreenshot",
            format="png",
            clip=clip,
            captureBeyondViewport=True,
            limit_s=60,
        )
        path.write_bytes(base64.b64decode(data["data"]))
