"""Warnings about what came in, throttled a topic at a time."""

from __future__ import annotations

import math
import time

from rclpy.impl.rcutils_logger import RcutilsLogger

QUIET = 5.0
"""Shortest time between two warnings about one topic, s."""

QUIETEST = 60.0
"""Longest time between two warnings about the same thing that goes on, s."""


class Complaints:
    """Logs what is wrong with a topic, at most every :data:`QUIET` seconds.

    What goes on unchanged is said half as often each time, down to once in
    :data:`QUIETEST` seconds.

    Attributes:
        refused: Topic to the number of messages refused so far.
        last: Topic to the last reason and its monotonic time, s.
    """

    def __init__(self, logger: RcutilsLogger) -> None:
        self._logger = logger
        self._spoken: dict[str, tuple[str, float, float]] = {}  # reason, when, pause
        self._unsaid: dict[str, int] = {}
        self.refused: dict[str, int] = {}
        self.last: dict[str, tuple[str, float]] = {}

    def refuse(self, topic: str, reason: str) -> None:
        """Say why a message was not taken."""
        self.refused[topic] = self.refused.get(topic, 0) + 1
        self.warn(topic, f"refused: {reason}")

    def warn(self, topic: str, reason: str) -> None:
        """Say what is odd about a topic."""
        now = time.monotonic()
        self.last[topic] = (reason, now)
        before, when, pause = self._spoken.get(topic, ("", -math.inf, QUIET))
        if now - when < (pause if reason == before else QUIET):
            self._unsaid[topic] = self._unsaid.get(topic, 0) + 1
            return
        goes_on = reason == before and now - when < 2 * pause
        unsaid = self._unsaid.pop(topic, 0)
        more = f" ({unsaid} more since the last warning)" if unsaid else ""
        self._spoken[topic] = (reason, now, min(2 * pause, QUIETEST) if goes_on else QUIET)
        self._logger.warning(f"{topic}: {reason}{more}")

    def recent(self) -> dict[str, str]:
        """Give the topics complained about within :data:`QUIET` seconds, with the reason."""
        now = time.monotonic()
        return {topic: why for topic, (why, when) in self.last.items() if now - when < QUIET}
