# SPDX-License-Identifier: MIT
"""Headless Chromium for tests of pages: opened from a file, with real mouse and keys, everything it says written down.

Load it with `runpy.run_path(path)["Browser"]`. It speaks the DevTools protocol over two pipes, so that nothing but the
browser is needed: each message is JSON and ends with a zero byte.
"""

import base64
import io
import json
import os
import select
import shutil
import subprocess
import time

import numpy as np

CHROMIUM = next(filter(None, map(shutil.which, ("chromium", "chromium-browser", "google-chrome"))), None)
PATIENCE = 60.0  # seconds until a page that does not answer fails the test; slow machines draw without a GPU
FLAGS = (
    "--headless=new", "--no-sandbox", "--remote-debugging-pipe", "--disable-dev-shm-usage", "--hide-scrollbars",
    "--enable-unsafe-swiftshader", "--no-first-run", "--disable-background-networking", "--disable-component-update",
    "--disable-sync", "--disable-extensions", "--force-device-scale-factor=1",
)  # fmt: skip


class Browser:
    """One browser with one page. `requests`, `console` and `errors` hold what the page asked for and said."""

    def __init__(self, profile, *, flags=(), dark=False, size=(1200, 900)):
        down_read, self._down = os.pipe()
        self._up, up_write = os.pipe()

        def connect():  # the browser reads commands from 3 and answers on 4; copies first, since these may be in use
            high = os.dup2(down_read, 90), os.dup2(up_write, 91)
            os.dup2(high[0], 3), os.dup2(high[1], 4)

        command = [CHROMIUM, *FLAGS, *flags, f"--user-data-dir={profile}"]
        self._process = subprocess.Popen(
            command, preexec_fn=connect, close_fds=False, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL,
            env={**os.environ, "HOME": str(profile)},
        )  # fmt: skip
        os.close(down_read), os.close(up_write)
        self._rest, self._count = b"", 0
        self.requests, self.console, self.errors = [], [], []
        self._session = None
        target = self.call("Target.createTarget", url="about:blank")["targetId"]
        self._session = self.call("Target.attachToTarget", targetId=target, flatten=True)["sessionId"]
        for domain in ("Page", "Runtime", "Network", "Log"):
            self.call(f"{domain}.enable")
        self.resize(*size)
        scheme = {"name": "prefers-color-scheme", "value": "dark" if dark else "light"}
        self.call("Emulation.setEmulatedMedia", features=[scheme])

    def __enter__(self):
        return self

    def __exit__(self, *_):
        self._process.kill()
        self._process.wait()
        os.close(self._down), os.close(self._up)

    def call(self, method, **parameters):
        self._count += 1
        message = {"id": self._count, "method": method, "params": parameters}
        if self._session:
            message["sessionId"] = self._session
        os.write(self._down, json.dumps(message).encode() + b"\0")
        while True:
            answer = self._message()
            if answer.get("id") == self._count:
                assert "error" not in answer, f"{method}: {answer}"
                return answer["result"]

    def _message(self):
        until = time.monotonic() + PATIENCE
        while b"\0" not in self._rest:
            ready, _, _ = select.select([self._up], [], [], max(until - time.monotonic(), 0))
            assert ready, "the browser does not answer"
            read = os.read(self._up, 1 << 20)
            assert read, "the browser ended"
            self._rest += read
        first, self._rest = self._rest.split(b"\0", 1)
        message = json.loads(first)
        self._note(message.get("method"), message.get("params", {}))
        return message

    def _note(self, method, said):
        if method == "Network.requestWillBeSent":
            self.requests.append(said["request"]["url"])
        elif method == "Runtime.consoleAPICalled":
            self.console.append((said["type"], " ".join(str(each.get("value")) for each in said["args"])))
        elif method == "Runtime.exceptionThrown":
            self.errors.append(said["exceptionDetails"].get("exception", {}).get("description", "exception"))
        elif method == "Log.entryAdded" and said["entry"]["level"] == "error":
            self.errors.append(said["entry"]["text"])

    def open(self, path):
        self.call("Page.navigate", url=path.as_uri())
        self.wait("document.readyState === 'complete'")

    def resize(self, width, height):
        self.call("Emulation.setDeviceMetricsOverride", width=width, height=height, deviceScaleFactor=1, mobile=False)

    def run(self, script):
        answer = self.call("Runtime.evaluate", expression=script, returnByValue=True, awaitPromise=True)
        assert "exceptionDetails" not in answer, answer["exceptionDetails"]
        return answer["result"].get("value")

    def wait(self, condition):
        until = time.monotonic() + PATIENCE
        while not self.run(condition):
            assert time.monotonic() < until, f"never true: {condition}"
            time.sleep(0.05)

    def settle(self):
        """Wait until what was asked for is on the screen."""
        self.run("new Promise(done => requestAnimationFrame(() => requestAnimationFrame(() => done(true))))")

    def click(self, x, y):
        for kind in ("mousePressed", "mouseReleased"):
            self.call("Input.dispatchMouseEvent", type=kind, x=x, y=y, button="left", buttons=1, clickCount=1)
        self.settle()

    def drag(self, start, end):
        for kind, (x, y), buttons in (
            ("mousePressed", start, 1), ("mouseMoved", end, 1), ("mouseReleased", end, 0),
        ):  # fmt: skip
            self.call("Input.dispatchMouseEvent", type=kind, x=x, y=y, button="left", buttons=buttons, clickCount=1)
        self.settle()

    def wheel(self, x, y, delta):
        self.call("Input.dispatchMouseEvent", type="mouseWheel", x=x, y=y, deltaX=0, deltaY=delta)
        self.settle()

    def key(self, name, *, text="", shift=False):
        codes = {"Tab": 9, "Enter": 13, "Escape": 27, "Home": 36, "ArrowLeft": 37, "ArrowUp": 38, "ArrowRight": 39,
                 "ArrowDown": 40}  # fmt: skip
        about = {"key": name, "windowsVirtualKeyCode": codes.get(name, 0), "modifiers": 8 if shift else 0}
        self.call("Input.dispatchKeyEvent", type="keyDown", text=text or ("\r" if name == "Enter" else ""), **about)
        self.call("Input.dispatchKeyEvent", type="keyUp", **about)
        self.settle()

    def box(self, selector):
        """Left, top, width and height of an element on the screen."""
        return self.run(
            f"(() => {{const b = document.querySelector({json.dumps(selector)}).getBoundingClientRect();"
            "return [b.left, b.top, b.width, b.height]})()"
        )

    def png(self, selector=None):
        """Screenshot of the page or of one element, as bytes."""
        options = {}
        if selector:
            left, top, width, height = self.box(selector)
            options["clip"] = {"x": left, "y": top, "width": width, "height": height, "scale": 1}
        return base64.b64decode(self.call("Page.captureScreenshot", format="png", **options)["data"])

    def pixels(self, selector):
        """Screenshot of one element: array of shape (height, width, 3), 0 to 255."""
        from matplotlib.image import imread

        return np.round(255 * imread(io.BytesIO(self.png(selector)))[..., :3]).astype(int)
