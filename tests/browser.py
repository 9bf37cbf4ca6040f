"""Headless Chromium over its debugging pipe, for the tests that open pages."""

import base64
import json
import os
import shutil
import subprocess
import time

import pytest

CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser")
_FLAGS = (
    "--headless", "--no-sandbox", "--use-angle=swiftshader", "--enable-unsafe-swiftshader",
    "--disable-quic", "--no-first-run", "--disable-background-networking", "--hide-scrollbars",
    "--disable-component-update", "--disable-sync", "--disable-extensions",
    "--remote-debugging-pipe",
)  # fmt: skip


class Browser:
    """One page of a headless browser.

    Use as a context manager. `problems` collects what the console calls an error, exceptions that
    nobody caught, and requests for anything but the page itself.
    """

    def __init__(self, folder, *, width=1400, height=1000):
        self.folder, self.size = folder, f"{width},{height}"
        self.problems, self.requests = [], []

    def __enter__(self):
        to_browser, self._write = os.pipe()
        self._read, from_browser = os.pipe()
        # Chromium reads commands from descriptor 3 and answers on 4.
        shell = f'exec "$0" "$@" 3<&{to_browser} 4>&{from_browser}'
        self._process = subprocess.Popen(
            ["/bin/bash", "-c", shell, CHROMIUM, *_FLAGS, f"--window-size={self.size}",
             f"--user-data-dir={self.folder}", "about:blank"],
            pass_fds=(to_browser, from_browser), stderr=subprocess.DEVNULL,
            stdout=subprocess.DEVNULL,
        )  # fmt: skip
        os.close(to_browser)
        os.close(from_browser)
        self._pending, self._number, self._session = b"", 0, None
        targets = self.command("Target.getTargets")["targetInfos"]
        page = next(t["targetId"] for t in targets if t["type"] == "page")
        attached = self.command("Target.attachToTarget", targetId=page, flatten=True)
        self._session = attached["sessionId"]
        for domain in ("Page", "Runtime", "Log", "Network"):
            self.command(f"{domain}.enable")
        return self

    def __exit__(self, *_):
        self._session = None
        try:
            self.command("Browser.close")
            self._process.wait(20)
        except (OSError, EOFError, subprocess.TimeoutExpired):
            self._process.kill()
            self._process.wait()
        os.close(self._read)
        os.close(self._write)

    def command(self, method, **params):
        """Send one command and return its result."""
        self._number += 1
        message = {"id": self._number, "method": method, "params": params}
        if self._session:
            message["sessionId"] = self._session
        os.write(self._write, json.dumps(message).encode() + b"\0")
        while True:
            answer = self._next()
            if answer.get("id") == self._number:
                if "error" in answer:
                    pytest.fail(f"{method}: {answer['error']}")
                return answer["result"]
            self._note(answer)

    def open(self, path):
        """Open a file and wait for its load."""
        self.command("Page.navigate", url=path.resolve().as_uri())
        self.wait_for("document.readyState === 'complete'")

    def run(self, script):
        """Run a JavaScript expression in the page and return its value."""
        found = self.command(
            "Runtime.evaluate", expression=script, returnByValue=True, awaitPromise=True
        )
        if "exceptionDetails" in found:
            pytest.fail(f"{script}: {found['exceptionDetails']}")
        return found["result"].get("value")

    def wait_for(self, script, seconds=60):
        """Wait until an expression is true."""
        end = time.monotonic() + seconds
        while not self.run(script):
            assert time.monotonic() < end, f"{script}: not true after {seconds} s"
            time.sleep(0.1)

    def click(self, x, y):
        """Move the pointer to a place in the window and press its main button."""
        at = {"x": x, "y": y, "button": "left", "buttons": 1, "clickCount": 1}
        self.command("Input.dispatchMouseEvent", type="mouseMoved", x=x, y=y)
        time.sleep(0.5)
        self.command("Input.dispatchMouseEvent", type="mouseMoved", x=x + 1, y=y)
        time.sleep(0.5)
        self.command("Input.dispatchMouseEvent", type="mousePressed", **at)
        time.sleep(0.3)  # the view in space looks at the buttons as it draws
        self.command("Input.dispatchMouseEvent", type="mouseReleased", **at)

    def screenshot(self, path, *, whole=True):
        """Write the page as it looks to a PNG file."""
        shot = self.command("Page.captureScreenshot", captureBeyondViewport=whole)
        path.write_bytes(base64.b64decode(shot["data"]))

    def pdf(self):
        """Return the page as it prints."""
        return base64.b64decode(self.command("Page.printToPDF", printBackground=True)["data"])

    def _next(self):
        while b"\0" not in self._pending:
            part = os.read(self._read, 1 << 20)
            if not part:
                raise EOFError
            self._pending += part
        message, self._pending = self._pending.split(b"\0", 1)
        return json.loads(message)

    def _note(self, event):
        params = event.get("params", {})
        if event.get("method") == "Runtime.exceptionThrown":
            details = params["exceptionDetails"]
            self.problems.append(details.get("exception", {}).get("description", details["text"]))
        elif event.get("method") == "Runtime.consoleAPICalled" and params["type"] == "error":
            self.problems.append(str([a.get("value") for a in params["args"]]))
        elif event.get("method") == "Log.entryAdded" and params["entry"]["level"] == "error":
            self.problems.append(params["entry"]["text"])
        elif event.get("method") == "Network.requestWillBeSent":
            self.requests.append(params["request"]["url"])
