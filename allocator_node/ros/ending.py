"""Requests to end, taken calmly: whatever must still be sent is sent, however often one asks."""

from __future__ import annotations

import signal

LISTEN = 0.2
"""How often a request to end is looked for where no message wakes the node, s."""

ENDING = ("SIGINT", "SIGTERM", "SIGHUP")
"""Signals that ask a process to end; not every platform has all of them."""


class Ending:
    """Whether a signal asked this process to end; further ones change nothing."""

    def __init__(self) -> None:
        self.asked = False
        for name in ENDING:
            if hasattr(signal, name):
                signal.signal(getattr(signal, name), self._ask)

    def _ask(self, number: int, frame: object) -> None:
        self.asked = True
