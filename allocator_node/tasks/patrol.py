"""Go round a loop of waypoints; several robots spread along it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Annotated, Any

import numpy as np
from annotated_types import Ge, MinLen

from ..team import Point
from .base import Goals, Scene, Task

REACHED = 0.5
"""Distance at which a waypoint counts as passed, m."""

SLOWEST = 0.4
"""Pace of a robot that is right behind the next one."""


@dataclass(frozen=True)
class Round:
    """Attributes: next waypoint of each member, and how many were passed in all."""

    next: Mapping[int, int] = field(default_factory=dict)
    passed: int = 0


@dataclass(frozen=True, kw_only=True)
class Patrol(Task):
    """Each member goes from waypoint to waypoint; whoever is close behind slows down.

    Attributes:
        waypoints: Corners of the closed loop, m.
        laps: Rounds of the whole group together until it is done; 0: for ever.
    """

    kind = "patrol"

    waypoints: Annotated[tuple[Point, ...], MinLen(2)]
    laps: Annotated[int, Ge(0)] = 0

    @cached_property
    def _loop(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Corners (n, 2), legs from each to the next (n, 2), way to each along the loop (n,)."""
        corners = np.array(self.waypoints, dtype=float)
        legs = np.roll(corners, -1, axis=0) - corners
        way = np.concatenate([[0.0], np.cumsum(np.linalg.norm(legs, axis=1))])
        return corners, legs, way

    def _nearest(self, points: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Give for points (N, 2) the distance to the loop (N,) and the leg it is on (N,)."""
        corners, legs, _ = self._loop
        x, y = points[:, :1] - corners[:, 0], points[:, 1:2] - corners[:, 1]
        along = x * legs[:, 0] + y * legs[:, 1]
        along /= np.maximum((legs**2).sum(axis=1), 1e-12)
        np.clip(along, 0.0, 1.0, out=along)
        away = np.hypot(x - along * legs[:, 0], y - along * legs[:, 1])
        leg = away.argmin(axis=1)
        return away[np.arange(len(points)), leg], leg

    @property
    def ends(self) -> bool:
        """A patrol with a number of laps ends."""
        return self.laps > 0

    @property
    def stops(self) -> tuple[tuple[Point, float], ...]:
        """The waypoints."""
        return tuple((corner, REACHED) for corner in self.waypoints)

    def begin(self) -> Round:
        """Give the state before the first round."""
        return Round()

    def saved(self, state: Round) -> int | None:
        """Give how many waypoints were passed, where that is counted."""
        return state.passed if self.ends else None

    def restored(self, saved: Any) -> Round:
        """Give the state after so many waypoints."""
        if not (self.ends and isinstance(saved, int) and saved >= 0):
            raise ValueError("not a number of waypoints passed")
        return Round(passed=saved)

    def advance(self, state: Round, scene: Scene) -> Round:
        """Send each member that reached its waypoint on to the next."""
        corners, _, _ = self._loop
        count = len(corners)
        upcoming, passed = {}, state.passed
        joined = [int(i) for i in scene.members if int(i) not in state.next]
        if joined:
            _, legs = self._nearest(scene.points[joined, :2])
            upcoming = {i: (int(leg) + 1) % count for i, leg in zip(joined, legs, strict=True)}
        for robot in map(int, scene.members):
            corner = upcoming.get(robot, state.next.get(robot, 0))
            away = np.linalg.norm(scene.points[:, :2] - corners[corner], axis=1)
            own, away[robot] = away[robot], np.inf
            # Where somebody stands on the waypoint, coming up beside it must do.
            taken = away.min() < scene.spacing / 2
            if own <= REACHED + (scene.spacing if taken else 0.0):
                corner, passed = (corner + 1) % count, passed + 1
            upcoming[robot] = corner
        return Round(upcoming, passed)

    def goals(self, state: Round, scene: Scene) -> Goals:
        """Give members their next waypoint, others the next after the loop's nearest point."""
        corners, _, _ = self._loop
        away, legs = self._nearest(scene.points[:, :2])
        following = (legs + 1) % len(corners)
        pace = 1.0
        if state.next:
            members = list(state.next)
            following[members] = list(state.next.values())
            if len(members) > 1:
                pace = np.ones(len(scene.points))
                pace[members] = self._pace(scene.points[members, :2], following[members])
        points = np.full((len(following), 3), np.nan)
        points[:, :2] = corners[following]
        return Goals(points, tolerance=0.0, path=away, pace=pace)

    def _pace(self, points: np.ndarray, following: np.ndarray) -> np.ndarray:
        """Give the pace of members by the gap to the one ahead; shape (n,)."""
        corners, _, way = self._loop
        length = way[-1]
        left = np.linalg.norm(corners[following] - points, axis=1)
        along = (np.where(following == 0, length, way[following]) - left) % length
        order = np.argsort(along, kind="stable")
        gap = np.empty(len(points))
        gap[order] = np.diff(along[order], append=along[order[0]] + length)
        return np.clip(gap * len(points) / length, SLOWEST, 1.0)

    def finished(self, state: Round) -> bool:
        """Tell whether all laps are done."""
        return self.laps > 0 and state.passed >= self.laps * len(self.waypoints)

    def ended(self) -> Round:
        """Give the state after the last lap."""
        return Round(passed=self.laps * len(self.waypoints))

    def moved(self, at: tuple[float, float, float], heading: float | None) -> Patrol:
        """Give the same loop with its middle at another place."""
        corners, _, _ = self._loop
        shifted = corners - corners.mean(axis=0) + np.array(at[:2])
        return replace(self, waypoints=tuple((float(x), float(y)) for x, y in shifted))
