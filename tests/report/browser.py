"""A headless Chromium that tests drive by the DevTools protocol, over the pipe that it reads: no port, no package."""

from __future__ import annotations

import json
import os
import select
import shutil
import subprocess
import tempfile
import time
from pathlib import Path

SECONDS = 60.0  # after which a browser that says nothing is given up
NAMES = ("chromium", "chromium-browser", "google-chrome", "chrome")


def chromium():
    """The path of a browser, or None."""
    return next((path for name in NAMES if (path := shutil.which(name))), None)


class Browser:
    """A browser process; `events` holds what it has told since the last `take`."""

    def __init__(self, program):
        self._folder = tempfile.TemporaryDirectory(prefix="browser-", ignore_cleanup_errors=True)
        read_here, write_there = os.pipe()
        read_there, write_here = os.pipe()
        options = [
            "--headless=new",
            "--no-sandbox",  # a container's root has none
            "--disable-gpu",
            "--disable-dev-shm-usage",
            "--disable-background-networking",
            "--disable-component-update",
            "--disable-sync",
            "--no-first-run",
            "--hide-scrollbars",
            "--remote-debugging-pipe",
            f"--user-data-dir={self._folder.name}",
            "about:blank",
        ]
        # The browser reads commands from descriptor 3 and answers on 4.
        script = f'exec "$@" 3<&{read_there} 4>&{write_there}'
        self._process = subprocess.Popen(
            ["bash", "-c", script, "bash", program, *options],
            pass_fds=(read_there, write_there),
            stdin=subprocess.DEVNULL,
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
        )
        os.close(read_there)
        os.close(write_there)
        self._read, self._write = read_here, write_here
        self._rest, self._number = b"", 0
        self._session = None
        self.events = []
        target = self.call("Target.createTarget", url="about:blank")["targetId"]
        self._session = self.call("Target.attachToTarget", targetId=target, flatten=True)["sessionId"]
        for domain in ("Page", "Network", "Log", "Runtime"):
            self.call(f"{domain}.enable")

    def __enter__(self):
        return self

    def __exit__(self, *_):
        self._session = None
        self.call("Browser.close")
        self._process.wait(SECONDS)
        os.close(self._read)
        os.close(self._write)
        self._folder.cleanup()

    def call(self, method, **parameters):
        """The result of one command."""
        self._number += 1
        message = {"id": self._number, "method": method, "params": parameters}
        if self._session is not None:
            message["sessionId"] = self._session
        os.write(self._write, json.dumps(message).encode() + b"\0")
        while True:
            answer = self._next()
            if answer.get("id") == self._number:
                assert "error" not in answer, answer["error"]
                return answer["result"]
            self.events.append(answer)

    def _next(self):
        end = time.monotonic() + SECONDS
        while b"\0" not in self._rest:
            ready, _, _ = select.select([self._read], [], [], max(0.0, end - time.monotonic()))
            assert ready, "the browser says nothing"
            part = os.read(self._read, 1 << 16)
            assert part, "the browser has gone"
            self._rest += part
        text, _, self._rest = self._rest.partition(b"\0")
        return json.loads(text)

    def open(self, path, *, scripts=True, width=1024, height=900, dark=False):
        """Open a file, and return when all of it is there."""
        self.call("Emulation.setScriptExecutionDisabled", value=not scripts)
        self.call("Emulation.setDeviceMetricsOverride", width=width, height=height, deviceScaleFactor=1, mobile=False)
        scheme = {"name": "prefers-color-scheme", "value": "dark" if dark else "light"}
        self.call("Emulation.setEmulatedMedia", media="screen", features=[scheme])
        self.events.clear()
        self.call("Page.navigate", url=Path(path).absolute().as_uri())
        while not any(event.get("method") == "Page.loadEventFired" for event in self.events):
            self.events.append(self._next())
        self.value("1")  # what was said until then has arrived

    def value(self, expression):
        """The value of an expression in the page, which is computed even where the page's own scripts are off."""
        found = self.call("Runtime.evaluate", expression=expression, returnByValue=True)
        assert "exceptionDetails" not in found, found
        return found["result"].get("value")

    def told(self, *methods):
        """The parameters of what the browser has told since a file was opened."""
        return [event["params"] for event in self.events if event.get("method") in methods]
