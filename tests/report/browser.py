"""A headless Chromium, driven over the WebDriver protocol (W3C) with nothing but the library."""

import base64
import json
import shutil
import socket
import subprocess
import time
import urllib.error
import urllib.request
from contextlib import contextmanager
from pathlib import Path


def missing() -> str:
    """Why no browser can be driven here; "" if it can."""
    for name in ("chromium", "chromedriver"):
        if shutil.which(name) is None:
            return f"{name} is not installed (Debian's packages chromium and chromium-driver)"
    return ""


class Browser:
    """A window of the browser."""

    def __init__(self, address: str) -> None:
        options = {
            "args": ["--headless", "--no-sandbox", "--disable-gpu", "--hide-scrollbars"],
            "binary": shutil.which("chromium"),
        }
        wanted = {"goog:chromeOptions": options, "goog:loggingPrefs": {"browser": "ALL"}}
        self._address = address
        answer = self._call("POST", "/session", {"capabilities": {"alwaysMatch": wanted}})
        self._session = f"/session/{answer['sessionId']}"

    def open(self, path: Path, *, width: int = 1200, height: int = 1600) -> None:
        self._call("POST", f"{self._session}/window/rect", {"width": width, "height": height})
        self._call("POST", f"{self._session}/url", {"url": path.absolute().as_uri()})

    def run(self, script: str):
        """The value that a piece of JavaScript returns."""
        return self._call("POST", f"{self._session}/execute/sync", {"script": script, "args": []})

    def scheme(self, name: str) -> None:
        """Pretend that the person prefers a "light" or "dark" page."""
        features = [{"name": "prefers-color-scheme", "value": name}]
        command = {"cmd": "Emulation.setEmulatedMedia", "params": {"features": features}}
        self._call("POST", f"{self._session}/goog/cdp/execute", command)

    def messages(self) -> list[str]:
        """What the console has said since it was asked last."""
        log = self._call("POST", f"{self._session}/se/log", {"type": "browser"})
        return [entry["message"] for entry in log]

    def picture(self) -> bytes:
        """PNG of the window."""
        return base64.b64decode(self._call("GET", f"{self._session}/screenshot"))

    def print(self) -> bytes:
        """PDF of the page as it would be printed."""
        return base64.b64decode(self._call("POST", f"{self._session}/print", {}))

    def close(self) -> None:
        self._call("DELETE", self._session)

    def _call(self, method: str, path: str, body: dict | None = None):
        data = None if body is None else json.dumps(body).encode()
        request = urllib.request.Request(self._address + path, data=data, method=method)
        with urllib.request.urlopen(request, timeout=60) as answer:
            return json.load(answer)["value"]


@contextmanager
def browser():
    """A browser that is closed, with its driver, when the block ends."""
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        port = free.getsockname()[1]
    driver = subprocess.Popen(
        ["chromedriver", f"--port={port}"], stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
    )
    try:
        window = _patiently(lambda: Browser(f"http://127.0.0.1:{port}"))
        try:
            yield window
        finally:
            window.close()
    finally:
        driver.terminate()
        driver.wait()


def _patiently(make, *, seconds: float = 20.0):
    """Try again while the driver is starting."""
    end = time.monotonic() + seconds
    while True:
        try:
            return make()
        except (urllib.error.URLError, ConnectionError):
            if time.monotonic() > end:
                raise
            time.sleep(0.1)
