"""Child processes that always come to an end, each with its own log file."""

from __future__ import annotations

import contextlib
import os
import signal
import subprocess
import sys
from collections.abc import Mapping, Sequence
from pathlib import Path

PATIENCE = 5.0
"""Time a process gets after each request to end, s."""


class Child:
    """One of this package's commands as a process of its own.

    It leads its own session, so that an interrupt from the keyboard reaches it
    only through :meth:`stop` and the order of stopping is ours.
    """

    def __init__(
        self, command: str, arguments: Sequence[str], log: Path, environment: Mapping[str, str]
    ) -> None:
        """Start ``python -m allocator_node.commands.<command>``, its output to a log file."""
        self.name, self.log = command, log
        with log.open("wb") as out:
            self._process = subprocess.Popen(
                [sys.executable, "-m", f"allocator_node.commands.{command}", *arguments],
                stdin=subprocess.DEVNULL,
                stdout=out,
                stderr=subprocess.STDOUT,
                env={**environment, "PYTHONUNBUFFERED": "1"},
                start_new_session=True,
            )

    @property
    def pid(self) -> int:
        """Number of the process."""
        return self._process.pid

    @property
    def status(self) -> int | None:
        """Exit status, None while it runs."""
        return self._process.poll()

    def stop(self) -> int:
        """Ask with SIGINT, then SIGTERM, then SIGKILL; give the exit status."""
        for sign in (signal.SIGINT, signal.SIGTERM, signal.SIGKILL):
            if self._process.poll() is not None:
                break
            with contextlib.suppress(ProcessLookupError):
                os.killpg(self._process.pid, sign)
            with contextlib.suppress(subprocess.TimeoutExpired):
                self._process.wait(PATIENCE)
        return self._process.wait()

    def last_lines(self, count: int = 15) -> list[str]:
        """Give the last lines of the log."""
        return self.log.read_text("utf-8", errors="replace").splitlines()[-count:]
