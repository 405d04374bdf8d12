"""Which features work: health from diagnostics, with staleness."""

from __future__ import annotations

import math
from dataclasses import dataclass
from fnmatch import fnmatchcase

import numpy as np

from ..observation import HealthReport
from ..settings import Settings
from ..team import Team

OK, WARN, ERROR, STALE = 0, 1, 2, 3
"""Levels of diagnostic_msgs/msg/DiagnosticStatus."""


@dataclass(frozen=True)
class _Heard:
    level: int
    time: float
    message: str


class FeatureBelief:
    """φ_if: OK 1, WARN ``warn_health``, ERROR and STALE 0.

    A status not repeated within ``health_timeout`` counts as STALE. A feature
    whose status was never heard counts as working: :meth:`unheard` names it,
    so that a mistyped name does not go unnoticed. Where several statuses speak
    for one feature, the worst counts.
    """

    def __init__(self, team: Team, features: tuple[str, ...], declared: np.ndarray) -> None:
        self.declared = declared
        self.rules = [
            (rule.name, i, features.index(rule.feature))
            for i, robot in enumerate(team.robots.values())
            for rule in robot.health or ()
        ]
        self.names = (tuple(team.robots), features)
        exact: dict[str, list[tuple[int, int]]] = {}
        self.patterns = []
        for name, i, f in self.rules:
            if any(sign in name for sign in "*?["):
                self.patterns.append((name, i, f))
            else:
                exact.setdefault(name, []).append((i, f))
        self.exact = exact
        self.heard: dict[tuple[int, int], dict[str, _Heard]] = {}

    def update(
        self, reports: tuple[HealthReport, ...], now: float, settings: Settings
    ) -> np.ndarray:
        """Take in reports and give φ, shape (N, F)."""
        for report in reports:
            heard = _Heard(report.level, now, report.message)
            for place in self._spoken_for(report.name):
                self.heard.setdefault(place, {})[report.name] = heard
        health = self.declared.astype(float)
        for (i, f), statuses in self.heard.items():
            for status in statuses.values():
                level = self._level(status, now, settings)
                value = {OK: 1.0, WARN: settings.warn_health}.get(level, 0.0)
                health[i, f] = min(health[i, f], value)
        return health

    @staticmethod
    def _level(status: _Heard, now: float, settings: Settings) -> int:
        return STALE if now - status.time > settings.health_timeout else status.level

    def _spoken_for(self, name: str) -> list[tuple[int, int]]:
        return self.exact.get(name, []) + [
            (i, f) for pattern, i, f in self.patterns if fnmatchcase(name, pattern)
        ]

    def says(self, robot: int, feature: int, now: float, settings: Settings) -> str:
        """Give what the worst status of a feature says, in words."""
        statuses = self.heard.get((robot, feature), {}).values()
        if not statuses:
            return "never heard"
        worst = max(statuses, key=lambda status: self._level(status, now, settings))
        level = self._level(worst, now, settings)
        if level == STALE and worst.level != STALE:
            return f"STALE, not reported for {now - worst.time:.1f} s"
        word = {OK: "OK", WARN: "WARN", ERROR: "ERROR"}.get(level, "STALE")
        return f"{word}: {worst.message}" if worst.message else word

    def unheard(self) -> list[tuple[str, str, str]]:
        """Give (robot, feature, status name) of features whose status was never heard."""
        robots, features = self.names
        return [
            (robots[i], features[f], name)
            for name, i, f in self.rules
            if (i, f) not in self.heard
        ]

    def troubles(self, now: float, settings: Settings) -> dict[str, tuple[int, str]]:
        """Give the statuses that are not OK: name to level and text."""
        return {
            name: (self._level(status, now, settings), status.message)
            for statuses in self.heard.values()
            for name, status in statuses.items()
            if self._level(status, now, settings) != OK
        }

    def remembered(self) -> list[tuple[int, int, str]]:
        """Give (robot, feature, status name) of failures that only an earlier run heard of."""
        return [
            (i, f, name)
            for (i, f), statuses in self.heard.items()
            for name, status in statuses.items()
            if status.time == math.inf and status.level != OK
        ]

    def recall(self, name: str, level: int, message: str) -> None:
        """Take up a status of an earlier run: it stands until the next one of its name."""
        for place in self._spoken_for(name):
            self.heard.setdefault(place, {})[name] = _Heard(level, math.inf, message)

    def forget_times(self, now: float) -> None:
        """Treat every status as heard now: the clock jumped."""
        for statuses in self.heard.values():
            for name, status in statuses.items():
                statuses[name] = _Heard(status.level, now, status.message)
