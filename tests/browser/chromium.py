"""A headless Chromium for tests, spoken to over a pipe in its DevTools protocol (JSON messages that end with NUL)."""

import base64
import json
import os
import shutil
import subprocess
import sys
import tempfile
from pathlib import Path

COMMAND = next(filter(None, map(shutil.which, ("chromium", "chromium-browser"))), None)
INSTALL = "needs Debian's Chromium: apt-get install chromium"
# Reads from file descriptor 3 and writes to 4.
LAUNCH = ("import os, sys; os.dup2(int(sys.argv[1]), 3); os.dup2(int(sys.argv[2]), 4); "
          "os.execvp(sys.argv[3], sys.argv[3:])")
# Elements that reach beyond the window, but for those inside a box that scrolls by itself.
BEYOND = """[...document.querySelectorAll("body *")].filter(one => one.getBoundingClientRect().right > innerWidth + 1
    && !one.closest(".scroll")).map(one => one.tagName + ": " + one.textContent.trim().slice(0, 60)).slice(0, 5)"""


class Browser:
    """One window; a context that ends with the process.

    `complaints` collects what the page in it wrote to the console or broke, one text each.
    """

    def __enter__(self):
        self._folder = tempfile.mkdtemp(prefix="chromium-")
        ours, theirs = os.pipe(), os.pipe()
        for end in (theirs[0], ours[1]):
            os.set_inheritable(end, True)
        self._process = subprocess.Popen(
            [sys.executable, "-c", LAUNCH, str(theirs[0]), str(ours[1]), COMMAND, "--headless", "--no-sandbox",
             "--disable-gpu", "--disable-dev-shm-usage", "--no-first-run", "--hide-scrollbars",
             f"--user-data-dir={self._folder}", "--remote-debugging-pipe", "about:blank"],
            pass_fds=(theirs[0], ours[1]), stdin=subprocess.DEVNULL, stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL)
        os.close(theirs[0])
        os.close(ours[1])
        self._read, self._write, self._number = os.fdopen(ours[0], "rb", buffering=0), os.fdopen(theirs[1], "wb"), 0
        self._rest, self.complaints, self._session, self._loaded = b"", [], None, False
        page = next(one for one in self._ask("Target.getTargets")["targetInfos"] if one["type"] == "page")
        self._session = self._ask("Target.attachToTarget", targetId=page["targetId"], flatten=True)["sessionId"]
        for domain in ("Page", "Runtime", "Log"):
            self._ask(f"{domain}.enable")
        return self

    def __exit__(self, *_):
        self._write.close()
        self._read.close()
        self._process.kill()
        self._process.wait()
        shutil.rmtree(self._folder, ignore_errors=True)

    def open(self, path, *, width):
        """Open an HTML file in a window of so many CSS pixels."""
        self._ask("Emulation.setDeviceMetricsOverride", width=width, height=900, deviceScaleFactor=1,
                  mobile=width < 600)
        self.complaints, self._loaded = [], False
        self._ask("Page.navigate", url=Path(path).absolute().as_uri())
        while not self._loaded:
            self._listen()

    def value(self, expression):
        """Return what a JavaScript expression comes to."""
        told = self._ask("Runtime.evaluate", expression=expression, returnByValue=True)
        assert "exceptionDetails" not in told, told
        return told["result"].get("value")

    def beyond(self):
        """Return what makes the page wider than the window: nothing, if it is not."""
        width, window = self.value("document.documentElement.scrollWidth"), self.value("innerWidth")
        return [] if width <= window else [f"{width} of {window} px", *self.value(BEYOND)]

    def pdf(self):
        """Return the page as printed, PDF."""
        return base64.b64decode(self._ask("Page.printToPDF", preferCSSPageSize=True, printBackground=True)["data"])

    def picture(self):
        """Return the whole page as it looks, PNG."""
        return base64.b64decode(self._ask("Page.captureScreenshot", captureBeyondViewport=True)["data"])

    def _ask(self, method, **parameters):
        self._number += 1
        message = {"id": self._number, "method": method, "params": parameters}
        if self._session:
            message["sessionId"] = self._session
        self._write.write(json.dumps(message).encode() + b"\0")
        self._write.flush()
        while True:
            answer = self._listen()
            if answer.get("id") == self._number:
                assert "error" not in answer, (method, answer["error"])
                return answer["result"]

    def _listen(self):
        """Return the next message; note what it says of the page."""
        while b"\0" not in self._rest:
            chunk = self._read.read(65536)
            assert chunk, "the browser has ended"
            self._rest += chunk
        message, _, self._rest = self._rest.partition(b"\0")
        told = json.loads(message)
        kind, about = told.get("method"), told.get("params", {})
        if kind == "Page.loadEventFired":
            self._loaded = True
        elif kind == "Runtime.consoleAPICalled":
            self.complaints.append(f"{about['type']}: {[one.get('value') for one in about['args']]}")
        elif kind == "Runtime.exceptionThrown":
            self.complaints.append(about["exceptionDetails"]["text"])
        elif kind == "Log.entryAdded":
            self.complaints.append(f"{about['entry']['level']}: {about['entry']['text']}")
        return told
