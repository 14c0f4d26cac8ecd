"""A headless browser driven by plain W3C WebDriver calls; nothing but the standard library."""

from __future__ import annotations

import base64
import contextlib
import http.client
import json
import shutil
import socket
import subprocess
import tempfile
import time
from pathlib import Path

CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser")
DRIVER = shutil.which("chromedriver")
KEYS = {
    "Home": "\ue011",
    "End": "\ue010",
    "PageUp": "\ue00e",
    "PageDown": "\ue00f",
    "Left": "\ue012",
    "Up": "\ue013",
    "Right": "\ue014",
    "Down": "\ue015",
    "Tab": "\ue004",
}
_FLAGS = [
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--hide-scrollbars",
    "--force-device-scale-factor=1",
]
_ELEMENT = "element-6066-11e4-a52e-4f735466cecf"  # the key that W3C WebDriver gives elements


class Browser:
    """One session. Commands are named as in the W3C recommendation."""

    def __init__(self, port: int, profile: str):
        self._port = port
        answer = self._send(
            "POST",
            "/session",
            {
                "capabilities": {
                    "alwaysMatch": {
                        "browserName": "chrome",
                        "goog:chromeOptions": {
                            "binary": CHROMIUM,
                            "args": [*_FLAGS, f"--user-data-dir={profile}"],
                        },
                        "goog:loggingPrefs": {"browser": "ALL", "performance": "ALL"},
                    }
                }
            },
        )
        self._session = f"/session/{answer['sessionId']}"

    def _send(self, method: str, path: str, body: dict | None = None):
        connection = http.client.HTTPConnection("127.0.0.1", self._port)
        try:
            data = json.dumps(body) if body is not None else None
            connection.request(method, path, data, {"Content-Type": "application/json"})
            value = json.loads(connection.getresponse().read())["value"]
        finally:
            connection.close()
        if isinstance(value, dict) and "error" in value:
            raise RuntimeError(f"{method} {path}: {value['error']}: {value['message']}")
        return value

    def command(self, method: str, path: str, body: dict | None = None):
        """Any command of this session."""
        return self._send(method, self._session + path, body)

    def open(self, path: Path) -> None:
        """Load a file from disk."""
        self.command("POST", "/url", {"url": path.resolve().as_uri()})

    def run(self, script: str, *args):
        """The value of a function body run in the page."""
        return self.command("POST", "/execute/sync", {"script": script, "args": list(args)})

    def run_async(self, script: str, *args):
        """Like ``run``; the last argument is the function to call with the value."""
        return self.command("POST", "/execute/async", {"script": script, "args": list(args)})

    def type(self, selector: str, keys: str) -> None:
        """Keystrokes into an element."""
        found = self.command("POST", "/element", {"using": "css selector", "value": selector})
        self.command("POST", f"/element/{found[_ELEMENT]}/value", {"text": keys})

    def press(self, keys: str) -> None:
        """Keystrokes into whatever has the focus."""
        strokes = [{"type": kind, "value": key} for key in keys for kind in ("keyDown", "keyUp")]
        self.command(
            "POST", "/actions", {"actions": [{"type": "key", "id": "keyboard", "actions": strokes}]}
        )

    def text(self, selector: str) -> str:
        """Text content of the first element that matches."""
        return self.run("return document.querySelector(arguments[0]).textContent", selector)

    def size(self, width: int, height: int) -> None:
        """Size of the viewport."""
        self.devtools(
            "Emulation.setDeviceMetricsOverride",
            width=width,
            height=height,
            deviceScaleFactor=1,
            mobile=width < 500,
        )

    def media(self, scheme: str) -> None:
        """What the person prefers: "light" or "dark"."""
        self.devtools(
            "Emulation.setEmulatedMedia",
            features=[{"name": "prefers-color-scheme", "value": scheme}],
        )

    def devtools(self, name: str, **params):
        """A command of the DevTools protocol."""
        return self.command("POST", "/goog/cdp/execute", {"cmd": name, "params": params})

    def picture(self) -> bytes:
        """The whole page as PNG."""
        shot = self.devtools("Page.captureScreenshot", format="png", captureBeyondViewport=True)
        return base64.b64decode(shot["data"])

    def printed(self) -> bytes:
        """The page as PDF, on the paper that its style sheet names."""
        shot = self.devtools("Page.printToPDF", preferCSSPageSize=True, printBackground=True)
        return base64.b64decode(shot["data"])

    def console(self) -> list[dict]:
        """What the console said since the last call."""
        return self.command("POST", "/se/log", {"type": "browser"})

    def requests(self) -> list[str]:
        """Addresses asked for since the last call."""
        events = [
            json.loads(entry["message"])["message"]
            for entry in self.command("POST", "/se/log", {"type": "performance"})
        ]
        return [
            event["params"]["request"]["url"]
            for event in events
            if event["method"] == "Network.requestWillBeSent"
        ]


@contextlib.contextmanager
def browser():
    """A fresh browser with an empty profile; gone at the end, with all it started."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port = probe.getsockname()[1]
    with tempfile.TemporaryDirectory(ignore_cleanup_errors=True) as profile:
        driver = subprocess.Popen(
            [DRIVER, f"--port={port}"], stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
        )
        try:
            _wait_for(port, driver)
            session = Browser(port, profile)
            try:
                yield session
            finally:
                session.command("DELETE", "")
        finally:
            driver.terminate()
            driver.wait()


def _wait_for(port: int, driver: subprocess.Popen) -> None:
    while driver.poll() is None:
        try:
            with socket.create_connection(("127.0.0.1", port)):
                return
        except OSError:
            time.sleep(0.05)
    raise RuntimeError(f"chromedriver ended at once with code {driver.returncode}")
