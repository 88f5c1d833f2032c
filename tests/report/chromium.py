"""A headless Chromium driven over its debugging pipe: trusted clicks and keys, values read back, pictures taken."""

import base64
import json
import os
import select
import shutil
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest

FLAGS = (
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--hide-scrollbars",
    "--remote-debugging-pipe",
)
PATIENCE_S = 60.0
# Chromium reads commands from its descriptor 3 and answers on 4.
START = """
import fcntl, os, sys
commands, answers = (fcntl.fcntl(int(number), fcntl.F_DUPFD, 10) for number in sys.argv[1:3])
os.dup2(commands, 3)
os.dup2(answers, 4)
os.execv(sys.argv[3], sys.argv[3:])
"""


class Tab:
    """One page. `evaluate` returns the value of a JavaScript expression, promises awaited."""

    def __init__(self, write_end: int, read_end: int) -> None:
        self._write_end, self._read_end = write_end, read_end
        self._buffer = b""
        self._number = 0
        self._session: str | None = None

    def _receive(self) -> dict[str, Any]:
        deadline = time.monotonic() + PATIENCE_S
        while b"\0" not in self._buffer:
            ready, _, _ = select.select([self._read_end], [], [], max(0.0, deadline - time.monotonic()))
            if not ready:
                raise TimeoutError("Chromium did not answer")
            chunk = os.read(self._read_end, 1 << 16)
            if not chunk:
                raise ConnectionError("Chromium closed its pipe")
            self._buffer += chunk
        message, self._buffer = self._buffer.split(b"\0", 1)
        return json.loads(message)

    def send(self, method: str, **parameters: Any) -> dict[str, Any]:
        """Call a method of the debugging protocol."""
        self._number += 1
        message: dict[str, Any] = {"id": self._number, "method": method, "params": parameters}
        if self._session is not None:
            message["sessionId"] = self._session
        os.write(self._write_end, json.dumps(message).encode() + b"\0")
        while True:
            answer = self._receive()
            if answer.get("id") == self._number:
                if "error" in answer:
                    raise RuntimeError(f"{method}: {answer['error']}")
                return answer["result"]

    def open(self, page: Path, width: int, height: int) -> None:
        """Load a page in a window of the given size, device pixel ratio 1."""
        made = self.send("Target.createTarget", url="about:blank")
        self._session = self.send("Target.attachToTarget", targetId=made["targetId"], flatten=True)["sessionId"]
        self.send(
            "Emulation.setDeviceMetricsOverride", width=width, height=height, deviceScaleFactor=1, mobile=False,
            screenWidth=width, screenHeight=height,
        )  # fmt: skip
        self.send("Page.navigate", url=page.resolve().as_uri())
        self.wait_for("document.readyState === 'complete'")

    def evaluate(self, expression: str) -> Any:
        """Value of an expression."""
        answer = self.send("Runtime.evaluate", expression=expression, returnByValue=True, awaitPromise=True)
        if "exceptionDetails" in answer:
            raise RuntimeError(answer["exceptionDetails"]["exception"].get("description", "script failed"))
        return answer["result"].get("value")

    def wait_for(self, expression: str) -> None:
        """Wait until an expression is true."""
        deadline = time.monotonic() + PATIENCE_S
        while not self.evaluate(expression):
            if time.monotonic() > deadline:
                raise TimeoutError(f"never came true: {expression}")
            time.sleep(0.05)

    def click(self, selector: str) -> None:
        """Click the middle of an element, as a person's mouse does."""
        x, y = self.evaluate(
            f"(() => {{ const e = document.querySelector({selector!r}); e.scrollIntoView({{block: 'center'}});"
            " const b = e.getBoundingClientRect(); return [b.x + b.width / 2, b.y + b.height / 2]; })()"
        )
        for kind in ("mousePressed", "mouseReleased"):
            self.send("Input.dispatchMouseEvent", type=kind, x=x, y=y, button="left", clickCount=1)

    def press(self, key: str) -> None:
        """Press and release a key."""
        for kind in ("keyDown", "keyUp"):
            self.send("Input.dispatchKeyEvent", type=kind, key=key, code=key)

    def picture(self) -> bytes:
        """The window as PNG."""
        return base64.b64decode(self.send("Page.captureScreenshot", format="png")["data"])


@contextmanager
def chromium_tab(page: Path, profile: Path, width: int = 1280, height: int = 800, dark: bool = False) -> Iterator[Tab]:
    """Open a page; skips the test where Chromium is not installed."""
    program = shutil.which("chromium")
    if program is None:
        pytest.skip("Debian's package chromium is not installed")
    to_read, to_write = os.pipe()
    from_read, from_write = os.pipe()
    flags = [*FLAGS, f"--user-data-dir={profile}", f"--window-size={width},{height}"]
    flags += ["--blink-settings=preferredColorScheme=0"] if dark else []
    command = [sys.executable, "-c", START, str(to_read), str(from_write), program, *flags]
    process = subprocess.Popen(
        command, pass_fds=(to_read, from_write), stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
    )
    os.close(to_read)
    os.close(from_write)
    try:
        tab = Tab(to_write, from_read)
        tab.open(page, width, height)
        yield tab
    finally:
        os.close(to_write)
        try:
            process.wait(timeout=10)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait()
        os.close(from_read)
