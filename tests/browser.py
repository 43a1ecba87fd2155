"""A headless Chromium for tests, driven over its debugging pipe (Chrome DevTools Protocol)."""

import base64
import json
import os
import select
import shutil
import subprocess
import sys
import time
from pathlib import Path

CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser") or shutil.which("google-chrome")
OPTIONS = (
    "--headless --no-sandbox --disable-gpu --disable-quic --no-first-run --disable-background-networking"
    " --disable-component-update --disable-sync --disable-dev-shm-usage --autoplay-policy=user-gesture-required"
    " --remote-debugging-pipe about:blank"
)
# The browser listens at descriptor 3 and answers at 4: put the pipes there, then become the browser.
START = """
import fcntl, os, sys
theirs_in, theirs_out = (fcntl.fcntl(int(fd), fcntl.F_DUPFD, 10) for fd in sys.argv[1:3])
os.dup2(theirs_in, 3)
os.dup2(theirs_out, 4)
os.execv(sys.argv[3], sys.argv[3:])
"""
PATIENCE_S = 60.0


class Browser:
    """One browser with its own profile in `folder`; closed at the end of the with-block."""

    def __init__(self, folder: Path) -> None:
        theirs_in, self._to = os.pipe()
        self._from, theirs_out = os.pipe()
        self._process = subprocess.Popen(
            [
                *(sys.executable, "-c", START, str(theirs_in), str(theirs_out)),
                *(str(CHROMIUM), *OPTIONS.split(), f"--user-data-dir={folder}"),
            ],
            pass_fds=(theirs_in, theirs_out),
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
        )
        os.close(theirs_in)
        os.close(theirs_out)
        self._number = 0
        self._buffer = b""
        self.events: list[dict] = []

    def __enter__(self) -> "Browser":
        return self

    def __exit__(self, *_: object) -> None:
        self._process.terminate()
        self._process.wait(10)
        os.close(self._to)
        os.close(self._from)

    def call(self, method: str, session: str | None = None, **parameters: object) -> dict:
        """One command of the protocol; what happened meanwhile is kept in `events`."""
        self._number += 1
        message = {"id": self._number, "method": method, "params": parameters}
        if session is not None:
            message["sessionId"] = session
        os.write(self._to, json.dumps(message).encode() + b"\0")
        until_s = time.monotonic() + PATIENCE_S
        while True:
            answer = self._message(until_s)
            if answer.get("id") == self._number:
                assert "error" not in answer, (method, answer["error"])
                return answer["result"]
            self.events.append(answer)

    def page(self, address: str = "about:blank", **size: object) -> "Tab":
        """A new tab of its own profile, at an address."""
        context = self.call("Target.createBrowserContext")["browserContextId"]
        target = self.call("Target.createTarget", url="about:blank", browserContextId=context)["targetId"]
        session = self.call("Target.attachToTarget", targetId=target, flatten=True)["sessionId"]
        tab = Tab(self, session, target)
        for domain in ("Page", "Runtime", "Log", "Network"):
            tab.call(f"{domain}.enable")
        if size:
            tab.resize(**size)
        tab.go(address)
        return tab

    def _message(self, until_s: float) -> dict:
        while b"\0" not in self._buffer:
            ready, _, _ = select.select([self._from], [], [], max(0.0, until_s - time.monotonic()))
            assert ready, "the browser does not answer"
            piece = os.read(self._from, 1 << 20)
            assert piece, "the browser has gone"
            self._buffer += piece
        message, _, self._buffer = self._buffer.partition(b"\0")
        return json.loads(message)


class Tab:
    """One tab, and what a person does with it."""

    def __init__(self, browser: Browser, session: str, target: str) -> None:
        self._browser, self._session, self._target = browser, session, target

    def call(self, method: str, **parameters: object) -> dict:
        return self._browser.call(method, self._session, **parameters)

    def go(self, address: str) -> None:
        self.call("Page.navigate", url=address)
        self.wait(f"location.href.startsWith({json.dumps(address)}) && document.readyState === 'complete'")

    def close(self) -> None:
        self._browser.call("Target.closeTarget", targetId=self._target)

    def resize(self, width: int, height: int, *, dark: bool = False, touch: bool = False) -> None:
        self.call("Emulation.setDeviceMetricsOverride", width=width, height=height, deviceScaleFactor=1, mobile=touch)
        scheme = {"name": "prefers-color-scheme", "value": "dark" if dark else "light"}
        self.call("Emulation.setEmulatedMedia", features=[scheme])

    def js(self, text: str) -> object:
        """The value of a JavaScript expression; a promise is waited for."""
        result = self.call("Runtime.evaluate", expression=text, returnByValue=True, awaitPromise=True)
        assert "exceptionDetails" not in result, result["exceptionDetails"]
        return result["result"].get("value")

    def wait(self, text: str, within_s: float = PATIENCE_S) -> object:
        """Wait until an expression is true."""
        until_s = time.monotonic() + within_s
        while True:
            value = self.js(text)
            if value:
                return value
            assert time.monotonic() < until_s, f"still not: {text}, but {self.js('document.body.innerText')}"
            time.sleep(0.05)

    def click(self, selector: str) -> None:
        """A click, as by a mouse, in the middle of the element."""
        box = self.js(
            f"(() => {{ const e = document.querySelector({json.dumps(selector)});"
            " e.scrollIntoView({block: 'center'});"
            " const b = e.getBoundingClientRect(); return [b.x + b.width / 2, b.y + b.height / 2]; })()"
        )
        self.drag([tuple(box)])

    def drag(self, places: list[tuple[float, float]]) -> None:
        """Press at the first place, move through the others, let go at the last."""
        self._mouse("mousePressed", *places[0])
        for place in places[1:]:
            self._mouse("mouseMoved", *place)
        self._mouse("mouseReleased", *places[-1])

    def key(self, key: str, code: int, text: str = "", modifiers: int = 0) -> None:
        """Press and release a key: its name, its Windows virtual code, the text that it types; 8 = Shift."""
        common = {"key": key, "code": key, "windowsVirtualKeyCode": code, "modifiers": modifiers}
        self.call("Input.dispatchKeyEvent", type="keyDown", text=text, **common)
        self.call("Input.dispatchKeyEvent", type="keyUp", **common)

    def screenshot(self, file: Path, whole: bool = False) -> None:
        data = self.call("Page.captureScreenshot", captureBeyondViewport=whole)["data"]
        file.write_bytes(base64.b64decode(data))

    def complaints(self) -> list[str]:
        """What the console has said: errors of scripts, refusals by policy, requests that failed.

        A press that comes too late is refused with status 409, and the last picture may be asked for when the
        server has gone: these are no faults.
        """
        self.js("0")
        said = []
        for event in self._browser.events:
            if event.get("sessionId") != self._session:
                continue
            if event["method"] == "Runtime.exceptionThrown":
                said.append(event["params"]["exceptionDetails"]["exception"].get("description", "exception"))
            if event["method"] == "Log.entryAdded" and event["params"]["entry"]["level"] == "error":
                said.append(f"{event['params']['entry']['text']} {event['params']['entry'].get('url', '')}")
        return [line for line in said if "status of 409" not in line and "ERR_CONNECTION_REFUSED" not in line]

    def _mouse(self, kind: str, x: float, y: float) -> None:
        buttons = 0 if kind == "mouseReleased" else 1
        self.call("Input.dispatchMouseEvent", type=kind, x=x, y=y, button="left", buttons=buttons, clickCount=1)
