"""Headless Chromium, spoken to through a pair of pipes by its debugging protocol (Chrome DevTools Protocol 1.3).

Only the standard library is needed. Messages are JSON texts, each ended by a NUL byte; file descriptors 3 and 4.
"""

import base64
import contextlib
import itertools
import json
import os
import select
import shutil
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path

# The protocol is on descriptors 3 and 4. A program of its own arranges that: code between fork and exec (preexec_fn) is
# not allowed where another test has left JAX.
ARRANGE = """
import os, sys
high = [os.dup2(os.dup(int(fd)), place) for fd, place in zip(sys.argv[1:3], (53, 54))]
os.dup2(high[0], 3)
os.dup2(high[1], 4)
os.execv(sys.argv[3], sys.argv[3:])
"""
NAMES = ("chromium", "chromium-browser", "google-chrome", "chrome")


def find() -> str | None:
    """Path of a Chromium, or None."""
    return next((path for name in NAMES if (path := shutil.which(name))), None)


class Browser:
    """One browser with one tab. `said` collects console messages, exceptions and log entries of the page shown;
    `asked` the addresses it has requested."""

    def __init__(self, executable: str) -> None:
        self.folder = tempfile.mkdtemp(prefix="fellwalk-browser-")
        to_child, self.out = os.pipe()
        self.incoming, from_child = os.pipe()

        self.process = subprocess.Popen(
            [sys.executable, "-S", "-E", "-c", ARRANGE, str(to_child), str(from_child), executable,
             "--headless=new", "--no-sandbox", "--disable-gpu", "--disable-dev-shm-usage", "--no-first-run",
             "--disable-background-networking", "--hide-scrollbars", "--force-color-profile=srgb",
             f"--user-data-dir={self.folder}", "--remote-debugging-pipe", "about:blank"],
            stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, pass_fds=(to_child, from_child))
        os.close(to_child)
        os.close(from_child)
        self.numbers, self.buffer, self.said, self.asked = itertools.count(1), b"", [], []
        self.events: list[dict] = []
        self.session = None
        target = self.call("Target.createTarget", url="about:blank")["targetId"]
        self.session = self.call("Target.attachToTarget", targetId=target, flatten=True)["sessionId"]
        for domain in ("Page", "Runtime", "Log", "Network", "Accessibility", "DOM"):
            self.call(f"{domain}.enable")

    def call(self, method: str, **parameters: object) -> dict:
        """Call a method of the protocol and wait for its answer."""
        number = next(self.numbers)
        message = {"id": number, "method": method, "params": parameters}
        if self.session:
            message["sessionId"] = self.session
        os.write(self.out, json.dumps(message).encode() + b"\0")
        while (answer := self._read()).get("id") != number:
            self._event(answer)
        if "error" in answer:
            raise RuntimeError(f"{method}: {answer['error']}")
        return answer["result"]

    def _read(self, seconds: float = 60.0) -> dict:
        until = time.monotonic() + seconds
        while b"\0" not in self.buffer:
            ready, _, _ = select.select([self.incoming], [], [], max(0.0, until - time.monotonic()))
            more = os.read(self.incoming, 1 << 20) if ready else b""
            if not more:
                raise TimeoutError(f"the browser did not answer within {seconds:.0f} s, or ended")
            self.buffer += more
        text, _, self.buffer = self.buffer.partition(b"\0")
        return json.loads(text)

    def _event(self, message: dict) -> None:
        method, details = message.get("method", ""), message.get("params", {})
        self.events.append(message)
        if method in ("Runtime.consoleAPICalled", "Runtime.exceptionThrown", "Log.entryAdded"):
            self.said.append(f"{method}: {json.dumps(details)[:600]}")
        if method == "Network.requestWillBeSent":
            self.asked.append(details["request"]["url"])

    def open(self, page: Path, width: int = 1280, height: int = 900, *, dark: bool = False, media: str = "") -> None:
        """Show a file and wait until it is loaded."""
        self.said.clear()
        self.asked.clear()
        self.events.clear()
        self.call("Emulation.setDeviceMetricsOverride", width=width, height=height, deviceScaleFactor=1,
                  mobile=width < 600)
        self.call("Emulation.setEmulatedMedia", media=media,
                  features=[{"name": "prefers-color-scheme", "value": "dark" if dark else "light"}])
        self.call("Page.navigate", url=Path(page).resolve().as_uri())
        while not any(event.get("method") == "Page.loadEventFired" for event in self.events):
            self._event(self._read())

    def value(self, expression: str) -> object:
        """What an expression of JavaScript gives on the page."""
        found = self.call("Runtime.evaluate", expression=expression, returnByValue=True)
        assert "exceptionDetails" not in found, found
        return found["result"].get("value")

    def spoken(self) -> list[dict]:
        """What a screen reader is given: {role, name, description} of every node that is not ignored."""
        nodes = self.call("Accessibility.getFullAXTree")["nodes"]
        return [{key: node.get(key, {}).get("value", "") for key in ("role", "name", "description")}
                for node in nodes if not node["ignored"]]

    def picture(self, path: Path, most: int = 30_000) -> None:
        """Write a PNG of the whole page, or of its first `most` pixels."""
        size = self.call("Page.getLayoutMetrics")["cssContentSize"]
        clip = {"x": 0, "y": 0, "width": size["width"], "height": min(size["height"], most), "scale": 1}
        found = self.call("Page.captureScreenshot", format="png", clip=clip, captureBeyondViewport=True)
        Path(path).write_bytes(base64.b64decode(found["data"]))

    def print_to(self, path: Path) -> None:
        """Write the page as PDF, as it would be printed."""
        Path(path).write_bytes(base64.b64decode(self.call("Page.printToPDF", printBackground=True)["data"]))

    def close(self) -> None:
        """End the browser."""
        self.session = None
        with contextlib.suppress(Exception):
            self.call("Browser.close")
        try:
            self.process.wait(10)
        except subprocess.TimeoutExpired:
            self.process.kill()
            self.process.wait()
        os.close(self.out)
        os.close(self.incoming)
        shutil.rmtree(self.folder, ignore_errors=True)


@contextlib.contextmanager
def opened() -> Iterator[Browser]:
    """A browser for as long as the context lasts."""
    browser = Browser(str(find()))
    try:
        yield browser
    finally:
        browser.close()


if __name__ == "__main__":
    # python tests/browser.py PAGE PICTURE [WIDTH [HEIGHT]]: a picture of the top of a page
    page, picture, width, height = (*sys.argv[1:], *("1280", "1500")[len(sys.argv) - 3 :])
    with opened() as shown:
        shown.open(Path(page), int(width))
        shown.picture(Path(picture), int(height))
