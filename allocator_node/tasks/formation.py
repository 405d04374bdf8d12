"""Go to a place together, each robot at its own offset in a frame that moves there."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Annotated

import numpy as np
from annotated_types import MinLen

from ..team import HeadCount, Point, Positive
from .base import Goals, Scene, Task
from .places import share_out
from .target import Located

SPARE = 0.6
"""Share of the slowest member's cruising speed that the frame moves at most."""

LAG = 1.0
"""Distance of the last robot from its place at which the frame waits, m."""

HEADINGS = 16
"""Headings of the frame that are tried when a group comes together."""

LONGEST_STEP = 1.0
"""Longest time the frame moves on in one period, s."""


@dataclass(frozen=True)
class March:
    """How far the formation has come.

    Attributes:
        places: Offset taken by each member.
        frame: x, y, m, and heading, rad, of the frame; None before anybody is there.
        velocity: Of the frame, m/s, m/s, rad/s.
        time: When that was, s.
    """

    places: Mapping[int, int] = field(default_factory=dict)
    frame: tuple[float, float, float] | None = None
    velocity: tuple[float, float, float] = (0.0, 0.0, 0.0)
    time: float = 0.0


@dataclass(frozen=True, kw_only=True)
class Formation(Task):
    """The frame starts where the group is, and moves as fast as the last one keeps up.

    With fewer robots than offsets the first offsets are filled.

    Attributes:
        at: Where the frame goes, m.
        heading: Heading it takes there, rad.
        offsets: Places in the frame, x ahead and y to the left, m.
        robots: Head count; None: one robot an offset.
        tolerance: Distance at which a robot counts as in its place, m.

    Raises:
        ValueError: More robots than offsets.
    """

    kind = "formation"

    at: Point
    heading: float = 0.0
    offsets: Annotated[tuple[Point, ...], MinLen(1)]
    robots: HeadCount | None = None
    tolerance: Positive = 0.3

    def __post_init__(self) -> None:
        count = len(self.offsets)
        robots = self.robots or HeadCount(count, count)
        if robots.min > count or (robots.max or 0) > count:
            raise ValueError(f"there may be as many robots as offsets, which are {count}")
        object.__setattr__(self, "robots", replace(robots, max=robots.max or count))

    def begin(self) -> March:
        """Give the state before anybody is there."""
        return March()

    def advance(self, state: March, scene: Scene) -> March:
        """Move the frame on, no faster than the group keeps up; share out the places."""
        members = scene.members
        if not len(members):
            return March()
        frame = state.frame or self._gathered(scene)
        dt = np.clip(scene.now - state.time, 0.0, LONGEST_STEP) if state.frame else 0.0
        frame = _moved_on(frame, state.velocity, dt)
        places = share_out(self._spots(frame, len(members))[0], members, scene.points, state.places)
        moving = March(places, frame, (0.0, 0.0, 0.0), scene.now)
        return replace(moving, velocity=self._velocity(moving, scene))

    def _offsets(self, count: int) -> np.ndarray:
        return np.array(self.offsets[:count], dtype=float)

    def _spots(
        self, frame: tuple[float, ...], count: int, velocity: tuple[float, ...] = (0.0, 0.0, 0.0)
    ) -> tuple[np.ndarray, np.ndarray]:
        """Give the places of a group, m, and their velocities, m/s, each (count, 3)."""
        at = np.array([frame[0], frame[1], np.nan])
        twist = np.array([velocity[0], velocity[1], 0.0, velocity[2]])
        return Located(at, frame[2], twist).carried(self._offsets(count))

    def _gathered(self, scene: Scene) -> tuple[float, float, float]:
        """Give the frame that is least way from where the members are."""
        points, count = scene.points[scene.members, :2], len(scene.members)
        frames = []
        for turn in 2 * np.pi * np.arange(HEADINGS) / HEADINGS:
            heading = self.heading + turn
            spots = self._spots((0.0, 0.0, heading), count)[0]
            x, y = points.mean(axis=0) - spots[:, :2].mean(axis=0)
            frame = (float(x), float(y), float(heading))
            spots, _ = self._spots(frame, count)
            places = share_out(spots, scene.members, scene.points, {})
            apart = spots[list(places.values()), :2] - scene.points[list(places), :2]
            # A near-tie goes to the heading that need not be turned away from.
            frames.append((np.linalg.norm(apart, axis=1).sum().round(3), len(frames), frame))
        return min(frames)[2]

    def _velocity(self, state: March, scene: Scene) -> tuple[float, float, float]:
        """Give the velocity of the frame: towards the goal, slower while somebody lags."""
        x, y, heading = state.frame
        members, taken = list(state.places), list(state.places.values())
        spots, _ = self._spots(state.frame, len(members))
        lag = np.linalg.norm(spots[taken, :2] - scene.points[members, :2], axis=1).max()
        fastest = SPARE * scene.cruise[members].min() * np.clip(1 - lag / LAG, 0.0, 1.0)
        way = np.array([self.at[0] - x, self.at[1] - y])
        turn = np.angle(np.exp(1j * (self.heading - heading)))
        arm = np.linalg.norm(self._offsets(len(members)), axis=1).max()
        # The time in which both the way and the turn are made with no place too fast.
        longest = np.linalg.norm(way) + arm * abs(turn)
        rate = min(fastest / max(longest, 1e-9), 1.0)
        return float(way[0] * rate), float(way[1] * rate), float(turn * rate)

    def goals(self, state: March, scene: Scene) -> Goals:
        """Give members their places, everybody else the frame itself."""
        count = len(scene.points)
        points, velocities = np.full((count, 3), np.nan), np.zeros((count, 3))
        points[:, :2] = self.at if state.frame is None else state.frame[:2]
        if state.places:
            members, taken = list(state.places), list(state.places.values())
            spots, speeds = self._spots(state.frame, len(members), state.velocity)
            points[members], velocities[members] = spots[taken], speeds[taken]
            apart = scene.points[:, None, :2] - spots[None, :, :2]
            path = np.linalg.norm(apart, axis=2).min(axis=1)
        else:
            path = None
        return Goals(points, self.tolerance, path=path, velocities=velocities)

    def moved(self, at: tuple[float, float, float], heading: float | None) -> Formation:
        """Give the formation with another goal."""
        return replace(self, at=at[:2], heading=self.heading if heading is None else heading)


def _moved_on(
    frame: tuple[float, ...], velocity: tuple[float, ...], dt: float
) -> tuple[float, float, float]:
    x, y, heading = (part + float(dt) * rate for part, rate in zip(frame, velocity, strict=True))
    return x, y, heading
