"""A headless Chromium driven over its own debugging pipe, with the standard library alone."""

from __future__ import annotations

import base64
import fcntl
import json
import os
import shutil
import signal
import subprocess
import tempfile
import threading
from pathlib import Path
from queue import Empty, Queue
from typing import Any

FLAGS = (
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--disable-dev-shm-usage",
    "--remote-debugging-pipe",
)


class Browser:
    """One browser with an empty profile; pages are opened one after another in one tab."""

    def __init__(self, program: str) -> None:
        self._home = tempfile.mkdtemp(prefix="mwdlink-browser-")
        ends = [
            fcntl.fcntl(fd, fcntl.F_DUPFD_CLOEXEC, 20)
            for pair in (os.pipe(), os.pipe())
            for fd in pair
        ]
        theirs_in, ours_out, ours_in, theirs_out = ends

        def hand_over() -> None:
            os.dup2(theirs_in, 3)
            os.dup2(theirs_out, 4)

        self._process = subprocess.Popen(
            [program, *FLAGS, f"--user-data-dir={self._home}", "about:blank"],
            preexec_fn=hand_over,
            pass_fds=(3, 4),
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
            start_new_session=True,
        )
        os.close(theirs_in)
        os.close(theirs_out)
        self._out = os.fdopen(ours_out, "wb", buffering=0)
        self._in = os.fdopen(ours_in, "rb", buffering=0)
        self._answers: dict[int, dict[str, Any]] = {}
        self._queue: Queue[dict[str, Any]] = Queue()
        self.events: list[dict[str, Any]] = []
        self._number = 0
        threading.Thread(target=self._listen, daemon=True).start()
        target = self.call("Target.createTarget", url="about:blank")["targetId"]
        self._session: str | None = self.call(
            "Target.attachToTarget", targetId=target, flatten=True
        )["sessionId"]
        for domain in ("Page", "Runtime", "Log", "Network"):
            self.call(f"{domain}.enable")

    _session = None

    def _listen(self) -> None:
        rest = b""
        while True:
            try:
                chunk = self._in.read(1 << 16)
            except (OSError, ValueError):
                return
            if not chunk:
                return
            *messages, rest = (rest + chunk).split(b"\0")
            for message in messages:
                self._queue.put(json.loads(message))

    def _next(self, timeout: float) -> bool:
        try:
            message = self._queue.get(timeout=timeout)
        except Empty:
            return False
        if "id" in message:
            self._answers[message["id"]] = message
        else:
            self.events.append(message)
        return True

    def call(self, method: str, **params: Any) -> dict[str, Any]:
        """Send a command and wait for its answer."""
        self._number += 1
        number = self._number
        message: dict[str, Any] = {"id": number, "method": method, "params": params}
        if self._session is not None:
            message["sessionId"] = self._session
        self._out.write(json.dumps(message).encode() + b"\0")
        while number not in self._answers:
            if not self._next(60.0):
                raise TimeoutError(f"no answer to {method}")
        answer = self._answers.pop(number)
        if "error" in answer:
            raise RuntimeError(f"{method}: {answer['error']}")
        return answer.get("result", {})

    def open(
        self,
        path: Path,
        *,
        width: int = 1000,
        height: int = 900,
        dark: bool = False,
        media: str = "",
        script: bool = True,
    ) -> None:
        """Open a file in a window of the given size [px] and wait until it is loaded."""
        self.events.clear()
        self.call("Emulation.setScriptExecutionDisabled", value=not script)
        self.call(
            "Emulation.setDeviceMetricsOverride",
            width=width,
            height=height,
            deviceScaleFactor=1,
            mobile=width < 500,
        )
        features = [{"name": "prefers-color-scheme", "value": "dark" if dark else "light"}]
        self.call("Emulation.setEmulatedMedia", media=media, features=features)
        self.call("Page.navigate", url=path.resolve().as_uri())
        while not any(e["method"] == "Page.loadEventFired" for e in self.events):
            if not self._next(60.0):
                raise TimeoutError("the page did not load")

    def run(self, script: str) -> Any:
        """Value of a script's expression in the page."""
        answer = self.call(
            "Runtime.evaluate", expression=script, returnByValue=True, awaitPromise=True
        )
        if "exceptionDetails" in answer:
            raise RuntimeError(
                answer["exceptionDetails"].get("exception", {}).get("description", str(answer))
            )
        return answer["result"].get("value")

    def complaints(self) -> list[str]:
        """What the console and the log said since the page was opened, errors and warnings."""
        out = []
        for e in self.events:
            p = e.get("params", {})
            if e["method"] == "Runtime.exceptionThrown":
                out.append(str(p["exceptionDetails"]))
            elif e["method"] == "Runtime.consoleAPICalled" and p["type"] in {
                "error",
                "warning",
                "assert",
            }:
                out.append(str(p["args"]))
            elif e["method"] == "Log.entryAdded":
                out.append(p["entry"]["text"])
        return out

    def requests(self) -> list[str]:
        """Addresses asked for since the page was opened, the page itself and data: apart."""
        return [
            e["params"]["request"]["url"]
            for e in self.events
            if e["method"] == "Network.requestWillBeSent"
            and not e["params"]["request"]["url"].startswith("data:")
            and e["params"].get("type") != "Document"
        ]

    def screenshot(self, path: Path, *, full: bool = True) -> None:
        answer = self.call("Page.captureScreenshot", format="png", captureBeyondViewport=full)
        path.write_bytes(base64.b64decode(answer["data"]))

    def pdf(self) -> bytes:
        """The page printed on A4 as its own style sheet says."""
        answer = self.call("Page.printToPDF", preferCSSPageSize=True, printBackground=True)
        return base64.b64decode(answer["data"])

    def close(self) -> None:
        try:
            self._session = None
            self.call("Browser.close")
            self._process.wait(10)
        except (TimeoutError, RuntimeError, OSError, subprocess.TimeoutExpired):
            os.killpg(self._process.pid, signal.SIGKILL)
            self._process.wait(10)
        self._out.close()
        shutil.rmtree(self._home, ignore_errors=True)
