"""A headless Chromium for the tests, spoken to over a pipe.

The Chrome DevTools Protocol, https://chromedevtools.github.io/devtools-protocol/, needs
nothing but the standard library when it runs over a pipe.
"""

import base64
import io
import json
import os
import select
import shutil
import signal
import subprocess
import time

import numpy as np
from matplotlib.image import imread

NAMES = ("chromium", "chromium-browser", "google-chrome")
# A browser calls home on its own; and no graphics card is needed to draw.
FLAGS = (
    "--headless=new",
    "--no-sandbox",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-default-apps",
    "--disable-extensions",
    "--disable-sync",
    "--disable-dev-shm-usage",
    "--hide-scrollbars",
    "--use-angle=swiftshader",
    "--enable-unsafe-swiftshader",
    "--remote-debugging-pipe",
)
PATIENCE = 60.0  # seconds


def find_chromium():
    """Path of the browser of CHROMIUM or on the PATH, None if there is none."""
    names = (os.environ.get("CHROMIUM", ""), *NAMES)
    return next((path for path in map(shutil.which, filter(None, names)) if path), None)


class Browser:
    """One browser with one page; what it asks for and complains of is kept."""

    def __init__(self, program, profile):
        to_browser, self._out = os.pipe()
        self._in, from_browser = os.pipe()

        def connect():  # the browser reads from 3 and writes to 4
            read, write = os.dup(to_browser), os.dup(from_browser)
            os.dup2(read, 3)
            os.dup2(write, 4)

        self._process = subprocess.Popen(
            [program, *FLAGS, f"--user-data-dir={profile}", "about:blank"],
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
            preexec_fn=connect,  # noqa: PLW1509 - nothing but dup2 in the child
            close_fds=False,
            start_new_session=True,
        )
        os.close(to_browser)
        os.close(from_browser)
        self._rest, self._count, self._session = b"", 0, None
        self.requests, self.complaints, self._loaded = [], [], False
        target = self.call("Target.createTarget", url="about:blank")["targetId"]
        attached = self.call("Target.attachToTarget", targetId=target, flatten=True)
        self._session = attached["sessionId"]
        for domain in ("Page", "Network", "Runtime", "Log"):
            self.call(f"{domain}.enable")

    def close(self):
        os.close(self._out)
        os.close(self._in)
        os.killpg(self._process.pid, signal.SIGKILL)
        self._process.wait()

    def call(self, method, **parameters):
        """Send one command and return its result."""
        self._count += 1
        message = {"id": self._count, "method": method, "params": parameters}
        if self._session:
            message["sessionId"] = self._session
        os.write(self._out, json.dumps(message).encode() + b"\0")
        while True:
            found = self._next()
            if found.get("id") == self._count:
                assert "error" not in found, found
                return found["result"]

    def _next(self):
        """Read one message; note what a test wants to know."""
        while b"\0" not in self._rest:
            ready, _, _ = select.select([self._in], [], [], PATIENCE)
            assert ready, "the browser does not answer"
            more = os.read(self._in, 1 << 20)
            assert more, "the browser has ended"
            self._rest += more
        line, _, self._rest = self._rest.partition(b"\0")
        message = json.loads(line)
        method, told = message.get("method", ""), message.get("params", {})
        if method == "Network.requestWillBeSent":
            self.requests.append(told["request"]["url"])
        elif method == "Page.loadEventFired":
            self._loaded = True
        elif method in ("Runtime.exceptionThrown", "Log.entryAdded") or (
            method == "Runtime.consoleAPICalled" and told["type"] != "log"
        ):
            self.complaints.append(told)
        return message

    def open(self, path, width=1280, height=900):
        """Open a file in a window of that size and wait until it is drawn."""
        self.requests.clear()
        self.complaints.clear()
        self.call(
            "Emulation.setDeviceMetricsOverride",
            width=width,
            height=height,
            deviceScaleFactor=1,
            mobile=False,
        )
        self._loaded = False
        self.call("Page.navigate", url=path.resolve().as_uri())
        end = time.monotonic() + PATIENCE
        while not self._loaded:
            assert time.monotonic() < end, "the page does not load"
            self._next()
        self.settle()

    def settle(self):
        """Wait until what was asked for is drawn."""
        self.evaluate(
            "new Promise(done => requestAnimationFrame(() => requestAnimationFrame(done)))"
            ".then(() => 0)"
        )

    def evaluate(self, expression):
        """Value of an expression in the page."""
        found = self.call(
            "Runtime.evaluate",
            expression=expression,
            awaitPromise=True,
            returnByValue=True,
        )
        assert "exceptionDetails" not in found, found["exceptionDetails"]
        return found["result"].get("value")

    def screenshot(self, *, whole=False):
        """Pixels of the window, or of the whole page, (h, w, 3) between 0 and 1."""
        png = self.picture(whole=whole)
        return np.asarray(imread(io.BytesIO(png)))[..., :3]

    def picture(self, *, whole=False):
        """Return the same as a PNG file."""
        found = self.call("Page.captureScreenshot", captureBeyondViewport=whole)
        return base64.b64decode(found["data"])

    def drag(self, start, end):
        """Press the mouse, move and let go."""
        places = np.linspace(start, end, 5).tolist()
        kinds = ["mousePressed", *["mouseMoved"] * 4, "mouseReleased"]
        for kind, (x, y) in zip(
            kinds, [places[0], *places[1:], places[-1]], strict=True
        ):
            self.call(
                "Input.dispatchMouseEvent",
                type=kind,
                x=x,
                y=y,
                button="left",
                buttons=1,
                clickCount=1,
            )
        self.settle()
