"""A headless Chromium driven through its DevTools protocol over a pipe, with nothing but the standard library."""

import base64
import contextlib
import json
import os
import select
import shutil
import subprocess
import sys
import time

# the browser reads commands from descriptor 3 and writes answers to descriptor 4
_LAUNCH = """
import fcntl, os, sys
pipes = [fcntl.fcntl(int(fd), fcntl.F_DUPFD, 20) for fd in sys.argv[1:3]]
os.dup2(pipes[0], 3), os.dup2(pipes[1], 4)
os.execvp(sys.argv[3], sys.argv[3:])
"""


def found():
    """The browser's command, or None."""
    return next(
        (path for name in ("chromium", "chromium-browser", "google-chrome") if (path := shutil.which(name))), None
    )


class Browser:
    """One tab. `errors` holds console errors and exceptions, `requests` every address that was asked for."""

    def __init__(self, profile):
        to_read, self._to = os.pipe()
        self._from, to_write = os.pipe()
        command = [
            found(),
            "--headless",
            "--no-sandbox",
            "--disable-gpu",
            "--hide-scrollbars",
            "--remote-debugging-pipe",
            f"--user-data-dir={profile}",
            "about:blank",
        ]
        self._process = subprocess.Popen(
            [sys.executable, "-c", _LAUNCH, str(to_read), str(to_write), *command],
            pass_fds=(to_read, to_write),
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
        )
        os.close(to_read)
        os.close(to_write)
        self._rest, self._number, self._session = b"", 0, None
        self.errors, self.requests, self._loaded = [], [], False
        target = next(t for t in self.call("Target.getTargets")["targetInfos"] if t["type"] == "page")
        self._session = self.call("Target.attachToTarget", targetId=target["targetId"], flatten=True)["sessionId"]
        for domain in ("Page", "Runtime", "Network", "Log"):
            self.call(f"{domain}.enable")

    def close(self):
        with contextlib.suppress(OSError):
            self._session = None
            self.call("Browser.close")
        os.close(self._to)
        os.close(self._from)
        self._process.wait(20)

    def _message(self):
        while b"\0" not in self._rest:
            if not select.select([self._from], [], [], 60.0)[0]:
                raise OSError("the browser has not answered for a minute")
            part = os.read(self._from, 1 << 20)
            if not part:
                raise OSError("the browser has ended")
            self._rest += part
        line, self._rest = self._rest.split(b"\0", 1)
        return json.loads(line)

    def call(self, method, **params):
        self._number += 1
        message = {"id": self._number, "method": method, "params": params}
        if self._session:
            message["sessionId"] = self._session
        os.write(self._to, json.dumps(message).encode() + b"\0")
        while True:
            answer = self._message()
            if answer.get("id") == self._number:
                if "error" in answer:
                    raise RuntimeError(f"{method}: {answer['error']}")
                return answer["result"]
            self._event(answer)

    def _event(self, event):
        method, params = event.get("method"), event.get("params", {})
        if method == "Runtime.exceptionThrown":
            details = params["exceptionDetails"]
            self.errors.append(details.get("exception", {}).get("description", details["text"]))
        elif method == "Runtime.consoleAPICalled" and params["type"] in ("error", "warning", "assert"):
            self.errors.append(str(params["args"]))
        elif method == "Log.entryAdded" and params["entry"]["level"] in ("error", "warning"):
            self.errors.append(params["entry"]["text"])
        elif method == "Network.requestWillBeSent":
            self.requests.append(params["request"]["url"])
        elif method == "Page.loadEventFired":
            self._loaded = True

    def open(self, path, width=1280, height=900, dark=False, calm=True):
        """Open a file; return the seconds until it is loaded and drawn."""
        self.errors.clear()
        self.requests.clear()
        self.call(
            "Emulation.setDeviceMetricsOverride", width=width, height=height, deviceScaleFactor=1, mobile=width < 500
        )
        self.media("screen", dark, calm)
        self._loaded = False
        begin = time.perf_counter()
        self.call("Page.navigate", url=path.resolve().as_uri())
        while not self._loaded:
            self._event(self._message())
        self.settle()
        return time.perf_counter() - begin

    def media(self, kind, dark=False, calm=True):
        features = [
            {"name": "prefers-color-scheme", "value": "dark" if dark else "light"},
            {"name": "prefers-reduced-motion", "value": "reduce" if calm else "no-preference"},
        ]
        self.call("Emulation.setEmulatedMedia", media=kind, features=features)

    def settle(self):
        """Wait until two frames were drawn."""
        self.run("new Promise(done => requestAnimationFrame(() => requestAnimationFrame(() => done(1))))")

    def run(self, script):
        """The value of a script."""
        answer = self.call("Runtime.evaluate", expression=script, awaitPromise=True, returnByValue=True)
        if "exceptionDetails" in answer:
            raise RuntimeError(answer["exceptionDetails"])
        return answer["result"].get("value")

    def mouse(self, kind, x, y, **more):
        self.call("Input.dispatchMouseEvent", type=kind, x=x, y=y, **more)

    def click(self, x, y):
        self.mouse("mousePressed", x, y, button="left", clickCount=1)
        self.mouse("mouseReleased", x, y, button="left", clickCount=1)
        self.settle()

    def key(self, key, shift=False):
        text = {"text": key} if len(key) == 1 else {}
        for kind in ("keyDown", "keyUp"):
            self.call("Input.dispatchKeyEvent", type=kind, key=key, modifiers=8 if shift else 0, **text)
        self.settle()

    def picture(self, path, whole=True):
        size = self.run("[document.documentElement.scrollWidth, document.documentElement.scrollHeight]")
        clip = {"clip": {"x": 0, "y": 0, "width": size[0], "height": size[1], "scale": 1}} if whole else {}
        shot = self.call("Page.captureScreenshot", captureBeyondViewport=whole, **clip)
        path.write_bytes(base64.b64decode(shot["data"]))

    def pdf(self, path):
        self.media("print")
        made = self.call("Page.printToPDF", paperWidth=8.27, paperHeight=11.69, preferCSSPageSize=False)
        path.write_bytes(base64.b64decode(made["data"]))
