"""`murmesh solve` in a child process: asked for its words without waiting, stopped so that it can go on later."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

# a window started in the background by a script ignores interrupts, and its children would inherit that
_PROGRAM = (
    "import signal, sys; signal.signal(signal.SIGINT, signal.default_int_handler); "
    "from murmesh.plugin.cli import main; sys.exit(main(sys.argv[1:]))"
)
_PATIENCE = 10.0  # seconds between an interrupt and a kill: the line at hand is finished or dropped in less


class Child:
    """A solution under way."""

    def __init__(self, case: Path, result: Path) -> None:
        self.result = result
        command = [sys.executable, "-u", "-c", _PROGRAM, "solve", str(case), str(result)]
        self._process = subprocess.Popen(
            command, stdin=subprocess.DEVNULL, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, start_new_session=True
        )
        assert self._process.stdout is not None
        self._pipe = self._process.stdout.fileno()
        os.set_blocking(self._pipe, False)
        self._rest = b""
        self._asked = 0.0

    def lines(self) -> list[str]:
        """What it said since it was last asked."""
        try:
            while piece := os.read(self._pipe, 65536):
                self._rest += piece
        except BlockingIOError:
            pass
        *whole, self._rest = self._rest.replace(b"\r", b"\n").split(b"\n")
        return [line.decode("utf-8", "replace").strip() for line in whole if line.strip()]

    @property
    def status(self) -> int | None:
        """Its exit status; None while it works."""
        if self._asked and time.monotonic() - self._asked > _PATIENCE and self._process.poll() is None:
            self._process.kill()
        return self._process.poll()

    @property
    def stopped(self) -> bool:
        """Whether it was asked to stop."""
        return bool(self._asked)

    def stop(self) -> None:
        """Interrupt it: finished lines are kept, and the next solution of the same case goes on from there."""
        if self._process.poll() is None and not self._asked:
            self._process.send_signal(signal.SIGINT)
            self._asked = time.monotonic()

    def close(self) -> None:
        """Stop and wait: nothing is left behind when the window closes."""
        self.stop()
        try:
            self._process.wait(_PATIENCE)
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.wait()
        if self._process.stdout is not None:
            self._process.stdout.close()
