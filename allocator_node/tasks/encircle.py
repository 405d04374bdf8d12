"""Keep an evenly spaced ring around something that may move."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Literal

import numpy as np

from ..team import Point, Positive, Target
from .base import Goals, Scene, Task, hold
from .places import share_out
from .target import Located


@dataclass(frozen=True)
class Ring:
    """Attributes: place of each member on the ring, and the bearing of place 0, rad."""

    places: Mapping[int, int] = field(default_factory=dict)
    first: float = 0.0

    def bearings(self) -> np.ndarray:
        """Give the bearing of each place from the middle, rad, shape (n,)."""
        count = len(self.places)
        return self.first + 2 * np.pi * np.arange(count) / max(count, 1)


@dataclass(frozen=True, kw_only=True)
class Encircle(Task):
    """Members stand on a circle at equal angles, and move with its middle.

    Attributes:
        around: The middle.
        radius: Distance from it, m.
        face: Look outward, inward, or at a point, m; None: any heading.
        tolerance: Distance at which a robot counts as in its place, m.
    """

    kind = "encircle"

    around: Point | Target
    radius: Positive
    face: Literal["outward", "inward"] | Point | None = None
    tolerance: Positive = 0.2

    @property
    def keeps_to(self) -> Point | Target:
        """The middle of the ring."""
        return self.around

    def begin(self) -> Ring:
        """Give the state before anybody is there."""
        return Ring()

    def advance(self, state: Ring, scene: Scene) -> Ring:
        """Share out the ring; turn it only when the group has changed."""
        middle = scene.locate(self.around)
        if middle is None:
            return state
        members = [int(i) for i in scene.members]
        if set(members) == set(state.places):
            return self._shared(state.first, state.places, middle, scene)[0]
        if not members:
            return Ring()
        # The least total way leaves somebody on a bearing of its own, or the ring as it was.
        apart = scene.points[members, :2] - middle.at[:2]
        choices = [state.first, *np.arctan2(apart[:, 1], apart[:, 0])]
        rings = [self._shared(float(first), {}, middle, scene) for first in choices]
        return min(rings, key=lambda ring: ring[1])[0]

    def _shared(
        self, first: float, before: Mapping[int, int], middle: Located, scene: Scene
    ) -> tuple[Ring, float]:
        """Give the ring turned to a first bearing, and the total way to it, m."""
        ring = Ring({int(i): k for k, i in enumerate(scene.members)}, first)
        spots = self._spots(middle, ring.bearings())
        ring = Ring(share_out(spots, scene.members, scene.points, before), first)
        taken = list(ring.places.values())
        apart = spots[taken, :2] - scene.points[list(ring.places), :2]
        return ring, float(np.linalg.norm(apart, axis=1).sum())

    def _spots(self, middle: Located, bearings: np.ndarray) -> np.ndarray:
        """Give points of the circle, m, shape (n, 3)."""
        spots = np.repeat(middle.at[None, :], len(bearings), axis=0)
        spots[:, 0] += self.radius * np.cos(bearings)
        spots[:, 1] += self.radius * np.sin(bearings)
        return spots

    def goals(self, state: Ring, scene: Scene) -> Goals:
        """Give members their places, others the nearest point of the circle."""
        middle = scene.locate(self.around)
        if middle is None:
            return hold(scene)
        apart = scene.points[:, :2] - middle.at[:2]
        bearings = np.arctan2(apart[:, 1], apart[:, 0])
        bearings[list(state.places)] = state.bearings()[list(state.places.values())]
        points = self._spots(middle, bearings)
        facing = self._facing(points, bearings)
        if facing is not np.nan:
            # Where a robot looks as demanded, its axle is on the circle.
            points[:, 0] += scene.ahead * np.cos(facing)
            points[:, 1] += scene.ahead * np.sin(facing)
        return Goals(
            points,
            self.tolerance,
            path=np.abs(np.linalg.norm(apart, axis=1) - self.radius),
            velocities=middle.velocity[:3],
            facing=facing,
        )

    def _facing(self, points: np.ndarray, bearings: np.ndarray) -> np.ndarray | float:
        """Give the headings to take, rad, shape (N,)."""
        if self.face is None:
            return np.nan
        if self.face == "outward":
            return bearings
        if self.face == "inward":
            return bearings + np.pi
        return np.arctan2(self.face[1] - points[:, 1], self.face[0] - points[:, 0])

    def moved(self, at: tuple[float, float, float], heading: float | None) -> Encircle:
        """Give the ring around a point."""
        return replace(self, around=at[:2])
