"""A page in a headless Chromium, driven over two pipes with its own remote protocol."""

from __future__ import annotations

import json
import os
import select
import shutil
import subprocess
from pathlib import Path
from types import TracebackType
from typing import Any

NAMES = ("chromium", "chromium-browser", "google-chrome-stable", "google-chrome")
PATIENCE = 60.0
"""Seconds without a word from the browser after which a test gives up."""


def find_chromium() -> str | None:
    """Path of an installed browser, or None."""
    return next((path for name in NAMES if (path := shutil.which(name))), None)


class Browser:
    """One browser with one page. ``requests`` and ``faults`` collect what the page loads and complains of."""

    def __init__(self, program: str, profile: Path) -> None:
        to_browser, self._write = os.pipe()
        self._read, from_browser = os.pipe()
        command = [
            program, "--headless", "--no-sandbox", "--disable-gpu", "--disable-dev-shm-usage", "--no-first-run",
            f"--user-data-dir={profile}", "--remote-debugging-pipe", "about:blank",
        ]  # fmt: skip
        # The browser reads from descriptor 3 and writes to descriptor 4.
        wiring = f'exec 8<&{to_browser} 9>&{from_browser} 3<&8 4>&9 8<&- 9>&-; exec "$@"'
        self._process = subprocess.Popen(
            ["bash", "-c", wiring, "browser", *command],
            pass_fds=(to_browser, from_browser),
            stdin=subprocess.DEVNULL,
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
        )
        os.close(to_browser)
        os.close(from_browser)
        self._rest = b""
        self._number = 0
        self._session = ""
        self._events: list[dict[str, Any]] = []
        self.requests: list[str] = []
        self.faults: list[str] = []
        target = self.call("Target.createTarget", url="about:blank")["targetId"]
        self._session = self.call("Target.attachToTarget", targetId=target, flatten=True)["sessionId"]
        for domain in ("Page", "Network", "Runtime", "Log"):
            self.call(f"{domain}.enable")

    def call(self, method: str, **parameters: Any) -> dict[str, Any]:
        """Call a method of the protocol and wait for its answer."""
        self._number += 1
        message: dict[str, Any] = {"id": self._number, "method": method, "params": parameters}
        if self._session:
            message["sessionId"] = self._session
        os.write(self._write, json.dumps(message).encode() + b"\0")
        while True:
            answer = self._next()
            if answer.get("id") == self._number:
                if "error" in answer:
                    raise RuntimeError(f"{method}: {answer['error']}")
                return dict(answer["result"])
            self._note(answer)

    def open(self, page: Path, width: int, height: int = 900) -> None:
        """Load a file in a window of the given size in CSS pixels and wait until it is complete."""
        self.call(
            "Emulation.setDeviceMetricsOverride", width=width, height=height, deviceScaleFactor=1, mobile=width < 600
        )
        self.requests.clear()
        self.faults.clear()
        self._events.clear()
        self.call("Page.navigate", url=page.resolve().as_uri())
        while not any(event["method"] == "Page.loadEventFired" for event in self._events):
            self._note(self._next())

    def run(self, script: str) -> Any:
        """The value of a JavaScript expression in the page."""
        answer = self.call("Runtime.evaluate", expression=script, returnByValue=True, awaitPromise=True)
        if "exceptionDetails" in answer:
            raise RuntimeError(str(answer["exceptionDetails"]))
        return answer["result"].get("value")

    def _next(self) -> dict[str, Any]:
        while b"\0" not in self._rest:
            ready, _, _ = select.select([self._read], [], [], PATIENCE)
            more = os.read(self._read, 1 << 16) if ready else b""
            if not more:
                raise RuntimeError("The browser has gone or is silent.")
            self._rest += more
        line, _, self._rest = self._rest.partition(b"\0")
        return dict(json.loads(line))

    def _note(self, event: dict[str, Any]) -> None:
        method, parameters = event.get("method", ""), event.get("params", {})
        self._events.append({"method": method})
        if method == "Network.requestWillBeSent":
            self.requests.append(parameters["request"]["url"])
        elif method == "Runtime.exceptionThrown":
            self.faults.append(str(parameters["exceptionDetails"]))
        elif method == "Log.entryAdded":
            self.faults.append(parameters["entry"]["text"])
        elif method == "Runtime.consoleAPICalled":
            self.faults.append(str(parameters["args"]))

    def __enter__(self) -> Browser:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, fault: BaseException | None, trace: TracebackType | None
    ) -> None:
        os.close(self._write)
        os.close(self._read)
        self._process.terminate()
        try:
            self._process.wait(10)
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.wait()
