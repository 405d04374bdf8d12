"""Go to a place, stay there for a while, done."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np

from ..team import NonNegative, Point, Positive
from .base import Goals, Scene, Task, distance
from .station import centre_of, places_of, points_of

STAYS = 1.5
"""Share of the tolerances within which those who are there still count: noise ends no dwell."""

FACING_TOLERANCE = 0.15
"""How well a demanded heading must be met, rad."""


@dataclass(frozen=True)
class Progress:
    """Attributes: places taken, time since a sufficient group stands there, done or not."""

    places: Mapping[int, int] = field(default_factory=dict)
    since: float | None = None
    done: bool = False


@dataclass(frozen=True, kw_only=True)
class Visit(Task):
    """Finishes when a group that meets the needs has stood at its goal long enough.

    Attributes:
        at: Where: x, y and for flying robots a height, m.
        heading: Heading to take there, rad; None: any.
        tolerance: Distance at which a robot counts as there, m.
        dwell: How long to stay, s.
    """

    kind = "visit"

    at: tuple[float, float] | tuple[float, float, float]
    heading: float | None = None
    tolerance: Positive = 0.3
    dwell: NonNegative = 0.0

    @property
    def ends(self) -> bool:
        """A visit always ends."""
        return True

    @property
    def stops(self) -> tuple[tuple[Point, float], ...]:
        """The place of the visit."""
        return ((self.at[:2], self.tolerance),)

    def begin(self) -> Progress:
        """Give the state before anybody was there."""
        return Progress()

    def advance(self, state: Progress, scene: Scene) -> Progress:
        """Count the time for which a sufficient group stands at the goal."""
        if state.done:
            return state
        places = places_of(centre_of(self.at), scene, state.places)
        share = 1.0 if state.since is None else STAYS
        there = scene.members[self._there(places, scene, share)]
        if not scene.suffices(there):
            return Progress(places)
        since = scene.now if state.since is None else state.since
        return Progress(places, since, scene.now - since >= self.dwell)

    def _there(self, places: Mapping[int, int], scene: Scene, share: float) -> np.ndarray:
        """Tell which members are within a share of the tolerances."""
        members = scene.members
        points = points_of(centre_of(self.at), scene, places)
        goals = scene.taken(points)[members]
        away = distance(goals, scene.points[members])
        if self.heading is None:
            return away <= share * self.tolerance
        off = np.angle(np.exp(1j * (scene.headings[members] - self.heading)))
        # Turning on the spot carries the point ahead of the axle along.
        reach = share * self.tolerance + 2 * scene.ahead[members]
        return (away <= reach) & (np.abs(off) <= share * FACING_TOLERANCE)

    def goals(self, state: Progress, scene: Scene) -> Goals:
        """Give the members their places and everybody else the point itself."""
        points = points_of(centre_of(self.at), scene, state.places)
        heading = np.nan if self.heading is None else self.heading
        return Goals(points, self.tolerance, self.dwell, facing=heading)

    def finished(self, state: Progress) -> bool:
        """Tell whether the dwell is over."""
        return state.done

    def ended(self) -> Progress:
        """Give the state after the dwell."""
        return Progress(done=True)

    def moved(self, at: tuple[float, float, float], heading: float | None) -> Visit:
        """Give the visit at another place."""
        place = at if len(self.at) == 3 else at[:2]
        return replace(self, at=place, heading=self.heading if heading is None else heading)
