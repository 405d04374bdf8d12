"""How the node itself fares: its period, its solvers, its robots, its tasks."""

from __future__ import annotations

import time
from collections import deque
from collections.abc import Mapping, Sequence

import numpy as np
from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus
from std_msgs.msg import Header

from ..decision import Decision, Level
from .conversions import stamp_of, status_of

SPAN = 200
"""So many periods are looked back on."""

LATE = 1.5
"""A period counts as missed when it took this many times its length."""

LINGER = 10.0
"""An exception in the loop is an ERROR for this long, s."""


class LoopHealth:
    """Counts periods, times and exceptions, and puts them into diagnostics.

    Attributes:
        period: Wanted length of a period, s.
        failures: Exceptions caught in the loop so far.
        stalled: For how long the clock has stood still, s; 0: it runs.
    """

    def __init__(self, name: str, period: float) -> None:
        """Count for the node ``name``."""
        self._name = name
        self.period = period
        self.failures = 0
        self.stalled = 0.0
        self._failed = -np.inf
        self._failure = ""
        self._began: float | None = None
        self._periods: deque[float] = deque(maxlen=SPAN)
        self._steps: deque[float] = deque(maxlen=SPAN)
        self._missed = 0

    def begin(self) -> None:
        """Note that a period begins."""
        now = time.monotonic()
        if self._began is not None:
            length = now - self._began
            self._periods.append(length)
            self._missed += length > LATE * self.period
        self._began = now

    def end(self) -> None:
        """Note that the work of the period is done."""
        self._steps.append(time.monotonic() - self._began)

    def fail(self, error: BaseException) -> None:
        """Note an exception in the loop."""
        self.failures += 1
        self._failed = time.monotonic()
        self._failure = f"{type(error).__name__}: {error}"

    def pause(self) -> None:
        """Note that the loop is stopped on purpose."""
        self._began = None
        self._periods.clear()

    def diagnostics(
        self,
        decision: Decision | None,
        now: float,
        refused: Mapping[str, str],
        unheard: Sequence[tuple[str, str, str]],
        others: list[str],
        silent: Mapping[str, str],
    ) -> DiagnosticArray:
        """Give the diagnostics of the node.

        Args:
            decision: The last decision, if there is one.
            now: Time, s.
            refused: Topic to the reason why its messages are refused.
            unheard: Robot, feature and status name where no diagnostic ever came.
            others: Sentences on other publishers on the command topics.
            silent: Robot to what is known about why it is silent.
        """
        statuses = [self._loop(), self._inputs(refused, unheard), self._outputs(others)]
        if decision is not None:
            statuses += [
                self._solvers(decision), self._robots(decision, silent), self._coverage(decision)
            ]
            statuses += self._notices(decision)
        return DiagnosticArray(header=Header(stamp=stamp_of(now)), status=statuses)

    def _status(
        self, part: str, level: Level, message: str, values: dict[str, object]
    ) -> DiagnosticStatus:
        return status_of(f"{self._name}: {part}", level.value, message, values)

    def _loop(self) -> DiagnosticStatus:
        periods, steps = 1e3 * np.array(self._periods), 1e3 * np.array(self._steps)
        late = int(np.sum(periods > LATE * 1e3 * self.period))
        values = {
            "wanted_ms": 1e3 * self.period,
            "period_ms.median": _of(np.median, periods),
            "period_ms.max": _of(np.max, periods),
            "work_ms.median": _of(np.median, steps),
            "work_ms.max": _of(np.max, steps),
            "missed": self._missed,
            "exceptions": self.failures,
        }
        if time.monotonic() - self._failed < LINGER:
            return self._status(
                "period", Level.ERROR, f"the loop failed: {self._failure}", values
            )
        if self.stalled:
            message = f"no time has gone by for {self.stalled:.0f} s: is /clock published?"
            return self._status("period", Level.ERROR, message, values)
        if late:
            return self._status(
                "period", Level.WARN, f"{late} of the last {len(periods)} periods missed", values
            )
        return self._status("period", Level.OK, "the period is kept", values)

    def _solvers(self, decision: Decision) -> DiagnosticStatus:
        values = {f"{part}_ms": 1e3 * float(s) for part, s in decision.seconds.items()}
        proven = np.isfinite(decision.gap)
        values["gap_wh"] = f"{decision.gap:.6f}" if proven else "not yet proven"
        message = "the assignment stands until a better one is proven"
        if decision.gap == 0.0:
            message = "the assignment is optimal"
        elif proven:
            message = f"the assignment is at most {decision.gap:.2g} Wh from the optimum"
        return self._status("solvers", Level.OK, message, values)

    def _robots(self, decision: Decision, silent: Mapping[str, str]) -> DiagnosticStatus:
        values = {"heard": int(np.sum(decision.heard)), "robots": len(decision.robots)} | silent
        if not silent:
            return self._status("robots", Level.OK, "every robot is heard from", values)
        message = f"silent: {', '.join(silent)}"
        return self._status("robots", Level.ERROR, message, values)

    def _coverage(self, decision: Decision) -> DiagnosticStatus:
        lacking = {shortfall.task: None for shortfall in decision.shortfalls}
        values = {"uncovered": ", ".join(lacking)} | {
            f"progress.{task}": f"{share:.3f}" for task, share in decision.progress.items()
        }
        if not lacking:
            return self._status("coverage", Level.OK, "every active task has what it needs", values)
        message = "; ".join(str(shortfall) for shortfall in decision.shortfalls)
        return self._status("coverage", Level.ERROR, message, values)

    def _notices(self, decision: Decision) -> list[DiagnosticStatus]:
        return [
            self._status(f"notice about {notice.about}", notice.level, notice.text, {})
            for notice in decision.notices
        ]

    def _inputs(
        self, refused: Mapping[str, str], unheard: Sequence[tuple[str, str, str]]
    ) -> DiagnosticStatus:
        values = dict(refused) | {
            f"{robot}.{feature}": f"nothing heard of {name!r}, taken for healthy"
            for robot, feature, name in unheard
        }
        if refused:
            message = f"trouble with {', '.join(refused)}"
            return self._status("inputs", Level.WARN, message, values)
        message = "all messages are good"
        if unheard:
            message += f"; {len(unheard)} features have no diagnostics"
        return self._status("inputs", Level.OK, message, values)

    def _outputs(self, others: list[str]) -> DiagnosticStatus:
        if not others:
            return self._status("commands", Level.OK, "nobody else commands the robots", {})
        return self._status("commands", Level.ERROR, "; ".join(others), {})


def _of(measure, values: np.ndarray) -> float:  # noqa: ANN001
    return float(measure(values)) if len(values) else 0.0
