"""A headless Chromium, driven over its DevTools protocol: pages, keys, pointers, screenshots, and what its console said."""

from __future__ import annotations

import base64
import json
import os
import shutil
import subprocess
import time
from collections import deque
from pathlib import Path
from typing import Any
from urllib.request import urlopen

from websockets.sync.client import ClientConnection, connect

PROGRAMS = ("chromium", "chromium-browser", "google-chrome")
KEY_CODES = {"Escape": 27, "Tab": 9, "Enter": 13, "ArrowUp": 38, "ArrowDown": 40, "ArrowLeft": 37, "ArrowRight": 39}


class Chromium:
    """One browser process; `page` opens a tab."""

    def __init__(self, folder: Path) -> None:
        program = next((found for name in PROGRAMS if (found := shutil.which(name))), None)
        if program is None:
            raise FileNotFoundError("Chromium is not installed; on Debian: apt-get install chromium")
        options = ["--headless=new", "--remote-debugging-port=0", f"--user-data-dir={folder}", "--no-first-run", "--disable-gpu"]
        options += ["--no-sandbox"] if os.geteuid() == 0 else []
        options += ["--disable-dev-shm-usage", "--disable-background-networking", "--disable-component-update", "about:blank"]
        self._process = subprocess.Popen([program, *options], stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
        told = folder / "DevToolsActivePort"
        deadline_s = time.monotonic() + 30.0
        while not (told.exists() and "\n" in told.read_text()):
            if self._process.poll() is not None or time.monotonic() > deadline_s:
                raise RuntimeError("Chromium did not start")
        self.port = int(told.read_text().split()[0])
        self._pages: list[Page] = []

    def page(self, url: str, width: int = 1440, height: int = 900) -> Page:
        """A new tab at an address."""
        with urlopen(f"http://127.0.0.1:{self.port}/json/list") as reply:
            known = next(target["id"] for target in json.load(reply) if target["type"] == "page")
        target = self._pages[0].send("Target.createTarget", url="about:blank")["targetId"] if self._pages else known
        page = Page(f"ws://127.0.0.1:{self.port}/devtools/page/{target}", width, height)
        self._pages.append(page)
        page.go(url)
        return page

    def close(self) -> None:
        """End the browser."""
        for page in self._pages:
            page.close()
        self._process.terminate()
        self._process.wait(timeout=10.0)


class Page:
    """One tab. `errors` holds what its console complained of."""

    def __init__(self, address: str, width: int, height: int) -> None:
        self._socket: ClientConnection = connect(address, max_size=None)
        self._number = 0
        self.errors: deque[str] = deque()
        for domain in ("Page", "Runtime", "Log", "Network"):
            self.send(f"{domain}.enable")
        self.resize(width, height)

    def send(self, method: str, **params: Any) -> dict[str, Any]:
        """A command of the DevTools protocol, and its result."""
        self._number += 1
        self._socket.send(json.dumps({"id": self._number, "method": method, "params": params}))
        while True:
            message = json.loads(self._socket.recv(timeout=60.0))
            self._note(message)
            if message.get("id") == self._number:
                if "error" in message:
                    raise RuntimeError(f"{method}: {message['error']['message']}")
                result: dict[str, Any] = message["result"]
                return result

    def _note(self, message: dict[str, Any]) -> None:
        params = message.get("params", {})
        match message.get("method"):
            case "Runtime.exceptionThrown":
                self.errors.append(params["exceptionDetails"].get("exception", {}).get("description", "exception"))
            case "Runtime.consoleAPICalled" if params["type"] in ("error", "warning", "assert"):
                self.errors.append(" ".join(str(one.get("value", one.get("description"))) for one in params["args"]))
            case "Log.entryAdded" if params["entry"]["level"] in ("error", "warning"):
                self.errors.append(f"{params['entry']['text']} {params['entry'].get('url', '')}")

    def go(self, url: str) -> None:
        """Open an address."""
        self.send("Page.navigate", url=url)
        self.wait("document.readyState === 'complete' && location.href !== 'about:blank'")

    def resize(self, width: int, height: int, scale: float = 1.0) -> None:
        """Give the tab the size of a screen."""
        self.send("Emulation.setDeviceMetricsOverride", width=width, height=height, deviceScaleFactor=scale, mobile=False)

    def ask(self, script: str) -> Any:
        """The value of a script, awaited."""
        found = self.send("Runtime.evaluate", expression=script, awaitPromise=True, returnByValue=True)
        if "exceptionDetails" in found:
            raise RuntimeError(f"{script}: {found['exceptionDetails'].get('exception', {}).get('description')}")
        return found["result"].get("value")

    def wait(self, script: str, timeout_s: float = 20.0) -> None:
        """Wait until a script says true."""
        deadline_s = time.monotonic() + timeout_s
        while not self.ask(f"Boolean({script})"):
            if time.monotonic() > deadline_s:
                raise AssertionError(f"never came true: {script}; the page says: {self.text('body')[:2000]}")
            self.ask("new Promise((go) => setTimeout(go, 30))")

    def text(self, selector: str) -> str:
        """What an element shows."""
        found: str = self.ask(f"document.querySelector({selector!r}).innerText")
        return found

    def centre(self, selector: str) -> tuple[float, float]:
        """Middle of an element in the window, scrolled into view."""
        x, y = self.ask(
            f"(() => {{ const one = document.querySelector({selector!r}); one.scrollIntoView({{block: 'nearest'}});"
            "const box = one.getBoundingClientRect(); return [box.x + box.width / 2, box.y + box.height / 2]; })()"
        )
        return x, y

    def click(self, selector: str) -> None:
        """Press an element with the mouse."""
        at = self.centre(selector)
        self._mouse("mousePressed", at)
        self._mouse("mouseReleased", at)

    def drag(self, start: tuple[float, float], end: tuple[float, float], steps: int = 8) -> None:
        """Drag with the mouse."""
        self._mouse("mousePressed", start)
        for step in range(1, steps + 1):
            share = step / steps
            self._mouse("mouseMoved", (start[0] + share * (end[0] - start[0]), start[1] + share * (end[1] - start[1])))
        self._mouse("mouseReleased", end)

    def _mouse(self, kind: str, at: tuple[float, float]) -> None:
        self.send("Input.dispatchMouseEvent", type=kind, x=at[0], y=at[1], button="left", buttons=1, clickCount=1)

    def key(self, name: str) -> None:
        """Press a key."""
        code = KEY_CODES.get(name, ord(name[0].upper()))
        text = {"text": name} if len(name) == 1 else {}
        for kind in ("keyDown", "keyUp"):
            self.send("Input.dispatchKeyEvent", type=kind, key=name, windowsVirtualKeyCode=code, **(text if kind == "keyDown" else {}))

    def screenshot(self, path: Path, whole: bool = False) -> None:
        """A PNG of the window, or of the whole page."""
        data = self.send("Page.captureScreenshot", format="png", captureBeyondViewport=whole)["data"]
        path.write_bytes(base64.b64decode(data))

    def close(self) -> None:
        """Let the tab go."""
        self._socket.close()
