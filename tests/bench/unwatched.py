"""A page that nobody listens in on: Chromium driven through its pipe, with as few of its tools as possible.

Playwright keeps every answer of the network that a page gets, in the page's own process: as much as 200 MB that is not the page's
own. So memory is measured here.
"""

from __future__ import annotations

import itertools
import json
import os
import subprocess
import tempfile
import time
from typing import Any


class Unwatched:
    """Chromium with one page; close with `close`.

    The protocol is the browser's own: JSON messages, each ended by a zero byte, on file descriptors 3 and 4.
    """

    def __init__(self, chromium: str, flags: list[str], width: int, height: int) -> None:
        self.profile = tempfile.TemporaryDirectory(prefix="tilemap-bench-", ignore_cleanup_errors=True)
        there, self.out = os.pipe()
        self.back, here = os.pipe()

        def pipes() -> None:
            first, second = os.dup(there), os.dup(here)
            os.dup2(first, 3)
            os.dup2(second, 4)

        size = f"--window-size={width},{height}"
        command = [
            chromium,
            "--headless",
            "--remote-debugging-pipe",
            f"--user-data-dir={self.profile.name}",
            size,
            *flags,
        ]
        self.process = subprocess.Popen(
            command, close_fds=False, preexec_fn=pipes, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
        )
        os.close(there)
        os.close(here)
        self.numbers = itertools.count(1)
        self.rest = b""
        self.session: str | None = None
        target = self.send("Target.createTarget", url="about:blank")["targetId"]
        self.session = self.send("Target.attachToTarget", targetId=target, flatten=True)["sessionId"]

    def send(self, method: str, **params: Any) -> dict[str, Any]:
        number = next(self.numbers)
        message: dict[str, Any] = {"id": number, "method": method, "params": params}
        if self.session and not method.startswith(("Target.", "Browser.", "SystemInfo.")):
            message["sessionId"] = self.session
        os.write(self.out, json.dumps(message).encode() + b"\0")
        while True:
            while b"\0" not in self.rest:
                piece = os.read(self.back, 1 << 16)
                if not piece:
                    raise RuntimeError("the browser ended")
                self.rest += piece
            text, self.rest = self.rest.split(b"\0", 1)
            answer = json.loads(text)
            if answer.get("id") == number:
                if "error" in answer:
                    raise RuntimeError(f"{method}: {answer['error']['message']}")
                return answer["result"]

    def run(self, script: str) -> Any:
        """The value of an expression in the page; a promise is awaited."""
        answer = self.send("Runtime.evaluate", expression=script, awaitPromise=True, returnByValue=True)
        if "exceptionDetails" in answer:
            raise RuntimeError(json.dumps(answer["exceptionDetails"])[:400])
        return answer["result"].get("value")

    def go(self, address: str) -> None:
        self.send("Page.navigate", url=address)

    def mouse(self, kind: str, x: float, y: float, **more: Any) -> None:
        self.send("Input.dispatchMouseEvent", type=kind, x=x, y=y, **more)

    def press(self, key: str) -> None:
        self.send("Input.dispatchKeyEvent", type="keyDown", key=key, text=key)
        self.send("Input.dispatchKeyEvent", type="keyUp", key=key)

    def pages(self) -> list[int]:
        """Process numbers of what draws pages, the last begun last."""
        found = self.send("SystemInfo.getProcessInfo")["processInfo"]
        return sorted(each["id"] for each in found if each["type"] == "renderer")

    def close(self) -> None:
        self.process.terminate()
        self.process.wait(10)
        os.close(self.out)
        os.close(self.back)
        time.sleep(0.2)
        self.profile.cleanup()
