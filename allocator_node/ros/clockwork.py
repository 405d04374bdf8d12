"""When a message held: its stamp where that can be believed, else its arrival."""

from __future__ import annotations

import time

import numpy as np

BELIEVED = 1.0
"""A stamp may be this much older than now, s, where ``pose_timeout`` is not more."""

EARLY = 0.1
"""A stamp may be this much ahead of now, s: clocks of two hosts in good agreement."""

DRIFT = 1e-3
"""No two clocks drift apart faster than this, s/s (common practice: 1e-4 at most)."""

SET_AHEAD = 1.0
"""A clock further ahead than this, while less time went by, was set, s."""


class ClockWatch:
    """Notices that the clock was set."""

    def __init__(self) -> None:
        self._last: float | None = None
        self._last_real = 0.0
        self._set_ahead = False

    def look(self, now: float) -> float:
        """Give by how much the clock was set since the last look, s; 0: it runs on.

        Simulated time that runs fast skips much in every look; so only the first of
        several skips counts.
        """
        real = time.monotonic()
        ahead = 0.0 if self._last is None else now - self._last
        went_by, self._last, self._last_real = real - self._last_real, now, real
        if ahead < 0:
            return ahead
        first, self._set_ahead = not self._set_ahead, ahead > SET_AHEAD and went_by < ahead / 2
        return ahead if first and self._set_ahead else 0.0


class Stillness:
    """Tells for how long a clock has not moved."""

    def __init__(self) -> None:
        self._last: float | None = None
        self._since = 0.0

    def look(self, now: float) -> float:
        """Give for how long ``now`` has been the same, s."""
        if now != self._last:
            self._last, self._since = now, time.monotonic()
        return time.monotonic() - self._since


def arrival_time(now: float, received: int, last_look: float) -> float:
    """Give when a message arrived, on the clock of ``now``, s.

    The middleware tells it in system time, which may be stepped, and ``now``
    may be simulated time; the arrival lies between the last look and now in
    any case.

    Args:
        now: Time of this look, s.
        received: System time of the arrival, ns; 0: not told.
        last_look: Time of the look before, s; NaN: there was none.
    """
    age = (time.time_ns() - received) * 1e-9 if received > 0 else 0.0
    longest = now - last_look if now >= last_look else age
    return now - min(max(age, 0.0), longest)


class StampReader:
    """Turns the stamps of one topic into times a pose held.

    A message that repeats the last stamp, or comes late with an older one,
    is no news. A stamp far from now comes from a clock that disagrees: then
    the arrival counts. But where the clock agreed before and runs on, it is the
    message that is late.
    """

    def __init__(self) -> None:
        self._last = 0.0
        self._least = np.inf

    def time_of(
        self, now: float, arrival: float, stamp: float, believed: float = BELIEVED
    ) -> tuple[float | None, str]:
        """Give when the message held, s, and what is odd about it ("" if nothing).

        The time is None where the message is no news.

        Args:
            now: Time of this look, s.
            arrival: When the message arrived, s.
            stamp: Its stamp, s; 0: it has none.
            believed: How much older than now a stamp may be, s.
        """
        if stamp <= 0:
            return arrival, ""
        if stamp == self._last:
            return None, "the same stamp came again, so the message is not new"
        if self._last - BELIEVED < stamp < self._last:
            return None, f"a message came late, {self._last - stamp:.2f} s behind the last one"
        off = now - stamp
        # Clocks drift: the least lag seen counts for less and less.
        ran = stamp - self._last
        self._least = min(off, self._least + DRIFT * ran) if ran > 0 else off
        self._last = stamp
        if -EARLY <= off <= believed:
            return min(stamp, now), ""
        if off > 0 and -EARLY <= self._least <= believed:
            return stamp, f"a message came {off:.1f} s late"
        side = "behind" if off > 0 else "ahead of"
        return arrival, (
            f"stamps are {abs(off):.1f} s {side} this node's clock; "
            "the time of arrival is used instead"
        )

    def forget(self) -> None:
        """Take the next stamp as the first."""
        self._last, self._least = 0.0, np.inf
