"""Keep to a place beside something that may move."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from ..team import Point, Positive, Target
from .base import Goals, Scene, Task, hold
from .station import places_of, points_of


@dataclass(frozen=True, kw_only=True)
class Follow(Task):
    """Stays at an offset from its target; the state is who takes which place there.

    Attributes:
        target: What is followed.
        offset: Where to be in the target's frame, x ahead and y to the left, m.
        tolerance: Distance at which a robot counts as there, m.
    """

    kind = "follow"

    target: Point | Target
    offset: Point
    tolerance: Positive = 0.3

    @property
    def keeps_to(self) -> Point | Target:
        """What is followed."""
        return self.target

    def begin(self) -> Mapping[int, int]:
        """Give the state before anybody is there."""
        return {}

    def advance(self, state: Mapping[int, int], scene: Scene) -> Mapping[int, int]:
        """Share out the places among the members."""
        leader = scene.locate(self.target)
        if leader is None:
            return state
        centre, _ = leader.carried(np.array(self.offset))
        return places_of(centre, scene, state)

    def goals(self, state: Mapping[int, int], scene: Scene) -> Goals:
        """Give members their places, everybody else the point itself."""
        leader = scene.locate(self.target)
        if leader is None:
            return hold(scene)
        centre, velocity = leader.carried(np.array(self.offset))
        return Goals(points_of(centre, scene, state), self.tolerance, velocities=velocity)

    def moved(self, at: tuple[float, float, float], heading: float | None) -> Follow:
        """Give the task of following a point."""
        return replace(self, target=at[:2])
