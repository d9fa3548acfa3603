"""Headless Chromium over its own pipe: no port, no further package. The child reads messages on 3 and answers on 4."""

from __future__ import annotations

import base64
import json
import os
import select
import shutil
import subprocess
import time

import pytest

FLAGS = ["--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--disable-background-networking",
         "--disable-component-update", "--disable-sync", "--hide-scrollbars", "--remote-debugging-pipe"]
SECONDS = 60


def chromium():
    """The program, or a skip; a failure where the tests must run (CI=true)."""
    found = shutil.which("chromium")
    if found is None:
        why = "no chromium here (Debian package chromium): the report page is not tested in a browser"
        if os.environ.get("CI") == "true":
            pytest.fail(why, pytrace=False)
        pytest.skip(why)
    return found


class Browser:
    """One page of a browser with an empty profile. `trouble`: console errors, exceptions, and requests that left the disk."""

    def __init__(self, program, profile):
        here, out = os.pipe(), os.pipe()

        def wire():
            ends = os.dup(here[0]), os.dup(out[1])
            os.dup2(ends[0], 3)
            os.dup2(ends[1], 4)

        self.process = subprocess.Popen([program, *FLAGS, f"--user-data-dir={profile}", "about:blank"], preexec_fn=wire,
                                        close_fds=False, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
        os.close(here[0])
        os.close(out[1])
        self.to, self.source, self.buffer, self.number = here[1], out[0], b"", 0
        self.events, self.trouble, self.session = [], [], None
        target = next(found for found in self.call("Target.getTargets")["targetInfos"] if found["type"] == "page")
        self.session = self.call("Target.attachToTarget", targetId=target["targetId"], flatten=True)["sessionId"]
        for domain in ("Page", "Runtime", "Log", "Network"):
            self.call(f"{domain}.enable")

    def call(self, method, **parameters):
        self.number += 1
        message = {"id": self.number, "method": method, "params": parameters}
        if self.session:
            message["sessionId"] = self.session
        os.write(self.to, json.dumps(message).encode() + b"\0")
        while True:
            answer = self._next()
            if answer.get("id") == self.number:
                assert "error" not in answer, f"{method}: {answer['error']}"
                return answer["result"]

    def _next(self):
        until = time.monotonic() + SECONDS
        while b"\0" not in self.buffer:
            ready, _, _ = select.select([self.source], [], [], max(0.0, until - time.monotonic()))
            assert ready, "the browser does not answer"
            part = os.read(self.source, 1 << 20)
            assert part, "the browser ended"
            self.buffer += part
        message, self.buffer = self.buffer.split(b"\0", 1)
        message = json.loads(message)
        method, parameters = message.get("method"), message.get("params", {})
        if method == "Runtime.exceptionThrown":
            self.trouble.append(str(parameters["exceptionDetails"]))
        elif method == "Runtime.consoleAPICalled" and parameters["type"] in ("error", "warning", "assert"):
            self.trouble.append(str(parameters["args"]))
        elif method == "Log.entryAdded" and parameters["entry"]["level"] in ("error", "warning"):
            self.trouble.append(str(parameters["entry"]))
        elif method == "Network.requestWillBeSent" and not parameters["request"]["url"].startswith(("file:", "data:", "about:")):
            self.trouble.append(f"asked for {parameters['request']['url']}")
        elif method:
            self.events.append(method)
        return message

    def open(self, path, width=1366, height=768):
        self.call("Emulation.setDeviceMetricsOverride", width=width, height=height, deviceScaleFactor=1, mobile=False)
        self.events, self.trouble = [], []
        self.call("Page.navigate", url=path.as_uri())
        while "Page.loadEventFired" not in self.events:
            self._next()
        self.value("new Promise(done => requestAnimationFrame(() => requestAnimationFrame(done)))")

    def value(self, expression):
        """What a JavaScript expression gives."""
        answer = self.call("Runtime.evaluate", expression=expression, returnByValue=True, awaitPromise=True)
        assert "exceptionDetails" not in answer, answer["exceptionDetails"]
        return answer["result"].get("value")

    def text(self, selector):
        return self.value(f"document.querySelector({json.dumps(selector)}).textContent")

    def centre(self, selector):
        return self.value(f"(() => {{ const b = document.querySelector({json.dumps(selector)}).getBoundingClientRect();"
                          " return [b.x + b.width / 2, b.y + b.height / 2]; })()")

    def mouse(self, kind, x, y, **more):
        self.call("Input.dispatchMouseEvent", type=kind, x=x, y=y, **more)

    def hover(self, selector):
        self.mouse("mouseMoved", *self.centre(selector))

    def click(self, selector):
        x, y = self.centre(selector)
        for kind in ("mouseMoved", "mousePressed", "mouseReleased"):
            self.mouse(kind, x, y, button="left" if kind != "mouseMoved" else "none", clickCount=1)

    def key(self, key, code=0):
        text = {"text": key} if len(key) == 1 else {}
        for kind in ("keyDown", "keyUp"):
            self.call("Input.dispatchKeyEvent", type=kind, key=key, code=key, windowsVirtualKeyCode=code,
                      **(text if kind == "keyDown" else {}))

    def screenshot(self, path, whole=False):
        shot = self.call("Page.captureScreenshot", format="png", captureBeyondViewport=whole)
        path.write_bytes(base64.b64decode(shot["data"]))

    def pdf(self, path):
        path.write_bytes(base64.b64decode(self.call("Page.printToPDF", printBackground=True, preferCSSPageSize=True)["data"]))

    def close(self):
        try:
            self.session = None
            self.call("Browser.close")
        finally:
            os.close(self.to)
            os.close(self.source)
            self.process.wait(SECONDS)
