"""A headless browser for tests, spoken to by the DevTools protocol.

Chromium or one of its kin is taken from the variable FIELDMOVER_BROWSER or from the PATH; where there is none, the
engine inside PyQt6-WebEngine, if that is installed.
"""

from __future__ import annotations

import contextlib
import itertools
import json
import os
import shutil
import socket
import subprocess
import sys
import time
import urllib.request
from collections.abc import Iterator
from importlib.util import find_spec
from pathlib import Path
from typing import Any

NAMES = ("chromium", "chromium-headless-shell", "chromium-browser", "google-chrome")
FLAGS = ("--no-sandbox", "--disable-gpu", "--hide-scrollbars", "--no-first-run", "--disable-dev-shm-usage")
QT = """
import sys
from PyQt6.QtCore import QUrl
from PyQt6.QtWebEngineWidgets import QWebEngineView
from PyQt6.QtWidgets import QApplication
app = QApplication(sys.argv[:1])
view = QWebEngineView()
view.resize(1500, 900)
view.load(QUrl("about:blank"))
view.show()
app.exec()
"""
PATIENCE = 30.0  # seconds


def missing() -> str | None:
    """Why there is no browser here, or None."""
    if find_spec("websockets") is None:
        return "websockets is not installed"
    if _binary() is None and (find_spec("PyQt6") is None or find_spec("PyQt6.QtWebEngineWidgets") is None):
        return f"no browser: no FIELDMOVER_BROWSER, none of {', '.join(NAMES)} on the PATH, no PyQt6-WebEngine"
    if _binary() is None:
        tried = subprocess.run(
            [sys.executable, "-c", "import PyQt6.QtWebEngineWidgets"], capture_output=True, text=True, check=False
        )
        if tried.returncode:
            return f"PyQt6-WebEngine lacks something of the system: {tried.stderr.strip().splitlines()[-1:]}"
    return None


def _binary() -> str | None:
    given = os.environ.get("FIELDMOVER_BROWSER")
    return given or next((path for name in NAMES if (path := shutil.which(name))), None)


class Tab:
    """One page of a browser, and all it has told."""

    def __init__(self, channel: Any) -> None:
        self._channel, self._numbers = channel, itertools.count(1)
        self.events: list[dict[str, Any]] = []
        for domain in ("Page", "Runtime", "Log", "Network"):
            self.send(f"{domain}.enable")

    def send(self, method: str, **parameters: Any) -> dict[str, Any]:
        """Call a method of the protocol and wait for its result."""
        number = next(self._numbers)
        self._channel.send(json.dumps({"id": number, "method": method, "params": parameters}))
        while (answer := self._next()).get("id") != number:
            self.events.append(answer)
        if "error" in answer:
            raise RuntimeError(f"{method}: {answer['error']['message']}")
        return answer["result"]

    def open(self, path: Path, width: int, dark: bool = False, media: str = "screen") -> None:
        """Load a file and wait until everything in it is there."""
        self.send("Emulation.setDeviceMetricsOverride", width=width, height=900, deviceScaleFactor=1, mobile=False)
        scheme = {"name": "prefers-color-scheme", "value": "dark" if dark else "light"}
        self.send("Emulation.setEmulatedMedia", media=media, features=[scheme])
        self.events.clear()
        self.send("Page.navigate", url=path.as_uri())
        while not any(event.get("method") == "Page.loadEventFired" for event in self.events):
            self.events.append(self._next())

    def evaluate(self, script: str) -> Any:
        """The value of an expression in the page."""
        found = self.send("Runtime.evaluate", expression=script, returnByValue=True, awaitPromise=True)
        if "exceptionDetails" in found:
            raise RuntimeError(json.dumps(found["exceptionDetails"]))
        return found["result"].get("value")

    def press(self, key: str, code: int) -> None:
        """Strike a key."""
        for kind in ("rawKeyDown", "keyUp"):
            self.send("Input.dispatchKeyEvent", type=kind, key=key, code=key, windowsVirtualKeyCode=code)

    def messages(self) -> list[str]:
        """What the console shows: everything the page or the browser complained about since it was opened."""
        loud = ("Runtime.consoleAPICalled", "Runtime.exceptionThrown", "Log.entryAdded")
        return [json.dumps(event["params"]) for event in self.events if event.get("method") in loud]

    def requests(self) -> list[str]:
        """Addresses that the page asked for."""
        asked = (event for event in self.events if event.get("method") == "Network.requestWillBeSent")
        return [event["params"]["request"]["url"] for event in asked]

    def _next(self) -> dict[str, Any]:
        return json.loads(self._channel.recv(timeout=PATIENCE))


@contextlib.contextmanager
def tab(folder: Path) -> Iterator[Tab]:
    """A browser with one empty page; what it keeps goes into the folder."""
    from websockets.sync.client import connect

    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port = probe.getsockname()[1]
    environment = dict(os.environ)
    if (binary := _binary()) is not None:
        command = [binary, "--headless", *FLAGS, f"--remote-debugging-port={port}", f"--user-data-dir={folder}"]
        command.append("about:blank")
    else:
        command = [sys.executable, "-c", QT]
        environment |= {"QT_QPA_PLATFORM": "offscreen", "QTWEBENGINE_REMOTE_DEBUGGING": str(port)}
        environment |= {"QTWEBENGINE_CHROMIUM_FLAGS": " ".join(FLAGS)}
    quiet = subprocess.DEVNULL
    process = subprocess.Popen(command, stdout=quiet, stderr=quiet, env=environment, start_new_session=True)
    try:
        with connect(_address(process, port), max_size=None, proxy=None) as channel:
            yield Tab(channel)
    finally:
        process.terminate()
        try:
            process.wait(5)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait()


def _address(process: subprocess.Popen, port: int) -> str:
    """Where the page listens, once it does."""
    direct = urllib.request.build_opener(urllib.request.ProxyHandler({}))
    end = time.monotonic() + PATIENCE
    while time.monotonic() < end and process.poll() is None:
        with contextlib.suppress(OSError), direct.open(f"http://127.0.0.1:{port}/json/list", timeout=5) as answer:
            pages = [page for page in json.load(answer) if page["type"] == "page"]
            if pages:
                return pages[0]["webSocketDebuggerUrl"]
        time.sleep(0.1)
    raise RuntimeError(f"the browser does not answer (exit status {process.poll()})")
