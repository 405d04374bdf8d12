"""Who is really able to do what: efficacy learned from measured progress."""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass

import numpy as np

from ..settings import Settings

CLEAR = 8.0
"""A window counts from this many standard deviations of pose noise on (common practice)."""

MOST_DOUBLINGS = 5
"""Trust returns at most 2⁵ times more slowly after repeated failures."""

TRUSTED = 0.6
"""Efficacy to which a robot that failed must have relaxed before it tries again."""

FREE = 0.7
"""Share of the expected progress from which a robot that was stuck moves freely again."""

LEAVING = 30.0
"""Time after which it is judged at its next task even if it does not, s."""


@dataclass(frozen=True)
class Step:
    """One period's motion of all robots.

    Attributes:
        time: End of the period, s.
        expected: Progress the commands sent imply through the model, m, shape (N,).
        measured: Progress the poses show along the same direction, m, shape (N,).
        counted: Robots it says something about, shape (N,).
    """

    time: float
    expected: np.ndarray
    measured: np.ndarray
    counted: np.ndarray


class EfficacyBelief:
    """η_im, and how it follows from progress.

    Over a window in which robot i executed task m, with the ratio law

        r = clip(measured / ((1 − allowance) · expected), 0, 1)
        η ← η + (1 − e^(−Δt/τ)) (r − η)

    or with the published additive law η ← clip(η + β (Δh measured − Δh expected)),
    h = −d²/2. Only windows whose expected motion is well clear of the pose noise
    count. Off the task η relaxes to 1 with time constant ``retry_after``, which
    each failed try doubles.

    Attributes:
        eta: η_im, shape (N, M).
        failures: Failed tries, shape (N, M).
        barred: Pairs that failed and wait for their next try, shape (N, M).
    """

    def __init__(self, robots: int, tasks: int) -> None:
        self.eta = np.ones((robots, tasks))
        self.failures = np.zeros((robots, tasks), dtype=int)
        self.barred = np.zeros((robots, tasks), dtype=bool)
        self._steps: deque[Step] = deque()
        self._since = np.full(robots, -np.inf)
        self._stuck_until = np.full(robots, -np.inf)

    def forget(self) -> None:
        """Set every efficacy back to 1."""
        self.eta[:] = 1.0
        self.failures[:] = 0
        self.barred[:] = False
        self._steps.clear()

    def recall(self, robot: int, task: int, eta: float, failures: int, barred: bool) -> None:
        """Take up what an earlier run had learned of one pair."""
        self.eta[robot, task] = eta
        self.failures[robot, task] = np.clip(failures, 0, MOST_DOUBLINGS)
        self.barred[robot, task] = barred

    def retable(self, kept: np.ndarray) -> None:
        """Go on with another task table.

        Args:
            kept: Former index of each task, −1 for a new one, shape (M,).
        """
        stays = kept >= 0
        for name, fresh in (("eta", 1.0), ("failures", 0), ("barred", False)):
            former = getattr(self, name)
            table = np.full((len(former), len(kept)), fresh, dtype=former.dtype)
            table[:, stays] = former[:, kept[stays]]
            setattr(self, name, table)

    def reassigned(
        self,
        robots: np.ndarray,
        former: np.ndarray,
        now: float,
        settings: Settings,
    ) -> None:
        """Note that robots got another task.

        A robot that failed at its former task is not judged at the next one
        before it moves freely again: being stuck there is the former task's fault.

        Args:
            robots: Indices, shape (n,).
            former: Their former tasks, −1: none, shape (n,).
            now: Time, s.
            settings: Weights and times.
        """
        self._since[robots] = now
        for robot, task in zip(robots, former, strict=True):
            if task >= 0 and self.eta[robot, task] < self._failed_below(settings):
                self.failures[robot, task] = min(self.failures[robot, task] + 1, MOST_DOUBLINGS)
                self.barred[robot, task] = True
                self._stuck_until[robot] = now + LEAVING

    @staticmethod
    def _failed_below(settings: Settings) -> float:
        return (1 + settings.s_min) / 2

    def update(
        self,
        step: Step,
        assignment: np.ndarray,
        away: np.ndarray,
        dt: float,
        settings: Settings,
    ) -> None:
        """Learn from one period.

        Args:
            step: What was expected and measured.
            assignment: Task of each robot during it, −1: none, shape (N,).
            away: Distances to the goals, m, shape (N,).
            dt: Length of the period, s.
            settings: Weights and times.
        """
        self._relax(assignment, dt, settings)
        self._steps.append(step)
        while step.time - self._steps[0].time > settings.efficacy_window:
            self._steps.popleft()
        expected, measured = self._window(len(assignment))
        clear = expected >= max(CLEAR * settings.pose_noise, 1e-3)

        stuck = np.isfinite(self._stuck_until)
        released = stuck & (
            (clear & (measured > FREE * expected)) | (step.time > self._stuck_until)
        )
        self._since[released] = step.time
        self._stuck_until[released] = -np.inf
        judged = step.counted & (assignment >= 0) & ~stuck
        robots = np.flatnonzero(judged & clear)
        tasks = assignment[robots]
        if settings.efficacy_law == "additive":
            # Δh = d · progress; the window's surprise is spread evenly over its length.
            surprise = (measured - expected)[robots] * dt / settings.efficacy_window
            gained = settings.efficacy_gain * away[robots] * surprise
            self.eta[robots, tasks] = np.clip(self.eta[robots, tasks] + gained, 0.0, 1.0)
        else:
            ratio = np.clip(
                measured[robots] / ((1 - settings.allowance) * expected[robots]), 0.0, 1.0
            )
            weight = 1 - np.exp(-dt / settings.efficacy_tau)
            self.eta[robots, tasks] += weight * (ratio - self.eta[robots, tasks])
        proven = self.eta[robots, tasks] > 0.9
        self.failures[robots[proven], tasks[proven]] = 0

    def outside(self, robot: int, task: int, quality: float, settings: Settings) -> None:
        """Take in an outside measurement of task quality, 0..1: it counts like one window."""
        weight = 1 - np.exp(-settings.efficacy_window / settings.efficacy_tau)
        self.eta[robot, task] += weight * (np.clip(quality, 0.0, 1.0) - self.eta[robot, task])

    def _relax(self, assignment: np.ndarray, dt: float, settings: Settings) -> None:
        constant = settings.retry_after * 2.0 ** np.maximum(self.failures - 1, 0)
        weight = 1 - np.exp(-dt / constant)
        busy = np.flatnonzero(assignment >= 0)
        weight[busy, assignment[busy]] = 0.0
        self.eta += weight * (1.0 - self.eta)
        self.barred &= self.eta < TRUSTED

    def _window(self, robots: int) -> tuple[np.ndarray, np.ndarray]:
        expected, measured = np.zeros(robots), np.zeros(robots)
        for step in self._steps:
            counted = step.counted & (step.time > self._since)
            expected += np.where(counted, step.expected, 0.0)
            measured += np.where(counted, step.measured, 0.0)
        return expected, measured
