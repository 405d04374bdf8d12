"""Hold a station and face a point, for ever."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from ..team import Point, Positive
from .base import Goals, Scene, Task
from .station import centre_of, places_of, points_of


@dataclass(frozen=True, kw_only=True)
class Watch(Task):
    """Stands at a point; the state is who takes which place around it.

    Attributes:
        at: Where: x, y and for flying robots a height, m.
        face: Point to look at, m; None: any heading.
        tolerance: Distance at which a robot counts as there, m.
    """

    kind = "watch"

    at: tuple[float, float] | tuple[float, float, float]
    face: Point | None = None
    tolerance: Positive = 0.3

    @property
    def stops(self) -> tuple[tuple[Point, float], ...]:
        """The place of the watch."""
        return ((self.at[:2], self.tolerance),)

    def begin(self) -> Mapping[int, int]:
        """Give the state before anybody is there."""
        return {}

    def advance(self, state: Mapping[int, int], scene: Scene) -> Mapping[int, int]:
        """Share out the places among the members."""
        return places_of(centre_of(self.at), scene, state)

    def goals(self, state: Mapping[int, int], scene: Scene) -> Goals:
        """Give the members their places and everybody else the point itself."""
        points = points_of(centre_of(self.at), scene, state)
        if self.face is None:
            return Goals(points, self.tolerance)
        facing = np.arctan2(self.face[1] - points[..., 1], self.face[0] - points[..., 0])
        return Goals(points, self.tolerance, facing=facing)

    def moved(self, at: tuple[float, float, float], heading: float | None) -> Watch:
        """Give the watch at another place; a heading turns what it faces with it."""
        face = self.face
        if heading is not None and face is not None:
            reach = float(np.hypot(face[0] - self.at[0], face[1] - self.at[1]))
            face = (at[0] + reach * np.cos(heading), at[1] + reach * np.sin(heading))
        return replace(self, at=at if len(self.at) == 3 else at[:2], face=face)
