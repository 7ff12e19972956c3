"""A headless Chromium driven over its own DevTools protocol: just what the tests of the pages need.

No request leaves the machine: every name but this machine's own fails to resolve, and every request is recorded.
"""

from __future__ import annotations

import base64
import json
import subprocess
import time
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit

from websockets.sync.client import ClientConnection, connect

PROGRAM = Path("/usr/bin/chromium")
PATIENCE = 15.0


@dataclass
class Page:
    """One tab. ``complaints`` are console errors, uncaught exceptions and breaches of the page's policy."""

    socket: ClientConnection
    session: str
    hosts: set[str] = field(default_factory=set)
    requests: list[str] = field(default_factory=list)
    complaints: list[str] = field(default_factory=list)
    _calls: int = 0

    def call(self, method: str, **parameters: Any) -> dict[str, Any]:
        """A command, and its result."""
        self._calls += 1
        sent = self._calls
        self.socket.send(
            json.dumps({"id": sent, "method": method, "params": parameters, "sessionId": self.session})
        )
        end = time.monotonic() + PATIENCE
        while True:
            message = json.loads(self.socket.recv(timeout=max(end - time.monotonic(), 0.01)))
            if message.get("id") == sent:
                assert "error" not in message, (method, message["error"])
                return message["result"]
            self._event(message)

    def _event(self, message: dict[str, Any]) -> None:
        of = message.get("params", {})
        match message.get("method"):
            case "Network.requestWillBeSent":
                self.requests.append(of["request"]["url"])
            case "Runtime.exceptionThrown":
                thrown = of["exceptionDetails"]
                self.complaints.append(thrown.get("exception", {}).get("description", thrown["text"]))
            case "Runtime.consoleAPICalled" if of["type"] in ("error", "warning", "assert"):
                self.complaints.append(" ".join(str(one.get("value", one)) for one in of["args"]))
            case "Log.entryAdded" if of["entry"]["level"] == "error":
                # An answer that is a problem is one of the service's own; the page tells it in words.
                if "status of 4" not in of["entry"]["text"]:
                    self.complaints.append(of["entry"]["text"])

    def open(self, url: str) -> None:
        """Goes to a page and waits until it is loaded."""
        went = self.call("Page.navigate", url=url)
        assert "errorText" not in went, (url, went)
        self.wait("document.readyState === 'complete' && location.href !== 'about:blank'")

    def value(self, expression: str) -> Any:
        """What an expression is, awaited where it is a promise."""
        done = self.call(
            "Runtime.evaluate", expression=expression, returnByValue=True, awaitPromise=True, userGesture=True
        )
        assert "exceptionDetails" not in done, done["exceptionDetails"]
        return done["result"].get("value")

    def wait(self, expression: str) -> None:
        """Waits until an expression holds."""
        end = time.monotonic() + PATIENCE
        while not self.value(f"Boolean({expression})"):
            assert time.monotonic() < end, f"never: {expression}"
            time.sleep(0.03)

    def text(self, selector: str) -> str:
        """The text of the first element that matches, as it is seen."""
        return self.value(f"document.querySelector({json.dumps(selector)})?.innerText ?? ''")

    def size(self, width: int, height: int = 900) -> None:
        """The size of the window."""
        self.call(
            "Emulation.setDeviceMetricsOverride",
            width=width,
            height=height,
            deviceScaleFactor=1,
            mobile=False,
        )

    def press(self, key: str, *, shift: bool = False) -> None:
        """A key."""
        codes = {"Tab": 9, "Enter": 13, " ": 32, "ArrowDown": 40}
        of = {
            "key": key,
            "code": "Space" if key == " " else key,
            "windowsVirtualKeyCode": codes[key],
            "modifiers": 8 if shift else 0,
        }
        text = {"Enter": "\r", " ": " "}.get(key)
        self.call("Input.dispatchKeyEvent", type="keyDown", **of, **({"text": text} if text else {}))
        self.call("Input.dispatchKeyEvent", type="keyUp", **of)

    def click(self, selector: str) -> None:
        """What a click on an element does; it must be there and be seen."""
        self.wait(f"document.querySelector({json.dumps(selector)})?.checkVisibility()")
        self.value(f"document.querySelector({json.dumps(selector)}).click()")

    def choose(self, selector: str, value: str) -> None:
        """Chooses an option, as a person does."""
        self.value(
            f"(() => {{ const one = document.querySelector({json.dumps(selector)}); one.value = "
            f"{json.dumps(value)}; one.dispatchEvent(new Event('change', {{bubbles: true}})); }})()"
        )

    def type(self, text: str) -> None:
        """Text put in where the focus is, as a paste does."""
        self.call("Input.insertText", text=text)

    def picture(self) -> bytes:
        """The whole page as PNG."""
        size = self.call("Page.getLayoutMetrics")["cssContentSize"]
        clip = {"x": 0, "y": 0, "width": size["width"], "height": min(size["height"], 8000), "scale": 1}
        done = self.call("Page.captureScreenshot", captureBeyondViewport=True, clip=clip)
        return base64.b64decode(done["data"])

    def printed(self) -> bytes:
        """The page as it is printed, as PDF."""
        return base64.b64decode(self.call("Page.printToPDF", preferCSSPageSize=True)["data"])

    def close(self) -> None:
        """Ends the tab."""
        self.call("Page.close")

    def strangers(self) -> list[str]:
        """Requests to anywhere but the page's own hosts."""
        return [
            url
            for url in self.requests
            if urlsplit(url).scheme not in ("data", "blob") and urlsplit(url).netloc not in self.hosts
        ]


@contextmanager
def chromium(profile: Path) -> Iterator[ClientConnection]:
    """A browser with a profile of its own, ended with the block."""
    process = subprocess.Popen(
        [
            str(PROGRAM),
            "--headless",
            "--no-sandbox",
            "--disable-gpu",
            "--disable-dev-shm-usage",
            "--disable-background-networking",
            "--disable-component-update",
            "--disable-sync",
            "--no-first-run",
            "--remote-debugging-port=0",
            "--host-resolver-rules=MAP * ~NOTFOUND, EXCLUDE 127.0.0.1",
            f"--user-data-dir={profile}",
            "about:blank",
        ],
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
    )
    try:
        port = profile / "DevToolsActivePort"
        end = time.monotonic() + PATIENCE
        while not port.exists() or port.read_text().count("\n") < 1:
            assert process.poll() is None, "Chromium ends at once"
            assert time.monotonic() < end, "Chromium does not start"
            time.sleep(0.05)
        number, path = port.read_text().split("\n")[:2]
        with connect(f"ws://127.0.0.1:{number}{path}", max_size=None, compression=None) as socket:
            yield socket
            with suppress(Exception):
                socket.send(json.dumps({"id": 0, "method": "Browser.close"}))
    finally:
        try:
            process.wait(timeout=5)
        except subprocess.TimeoutExpired:
            process.terminate()
            process.wait(timeout=5)


def tab(socket: ClientConnection) -> Page:
    """A new tab, in a context of its own."""
    browser = Page(socket, "")

    def ask(method: str, **parameters: Any) -> dict[str, Any]:
        browser._calls += 1
        socket.send(json.dumps({"id": -browser._calls, "method": method, "params": parameters}))
        while True:
            message = json.loads(socket.recv(timeout=PATIENCE))
            if message.get("id") == -browser._calls:
                assert "error" not in message, message["error"]
                return message["result"]

    context = ask("Target.createBrowserContext")["browserContextId"]
    target = ask("Target.createTarget", url="about:blank", browserContextId=context)["targetId"]
    session = ask("Target.attachToTarget", targetId=target, flatten=True)["sessionId"]
    page = Page(socket, session)
    for domain in ("Page", "Runtime", "Network", "Log", "DOM"):
        page.call(f"{domain}.enable")
    page.size(1280)
    return page
