"""Lanes that cover a polygon: a boustrophedon along its longest side."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import shapely
from shapely import affinity


@dataclass(frozen=True)
class Lanes:
    """Straight lanes, in order across the area; L lanes.

    Attributes:
        start: First points, m, shape (L, 2).
        along: Unit vector of all lanes, shape (2,).
        length: Lengths, m, shape (L,).
    """

    start: np.ndarray
    along: np.ndarray
    length: np.ndarray

    def at(self, lane: int | np.ndarray, way: float | np.ndarray) -> np.ndarray:
        """Give points of lanes so many metres from their first points, (..., 2)."""
        return self.start[lane] + np.multiply.outer(way, self.along)

    def seen(self, lane: int, point: np.ndarray) -> tuple[float, float]:
        """Give how far along a lane a point (2,) is, and how far beside it, m."""
        along, across = self.along, np.array([-self.along[1], self.along[0]])
        apart = point - self.start[lane]
        return float(apart @ along), float(apart @ across)


def lanes_of(area: Sequence[Sequence[float]], width: float, overlap: float) -> Lanes:
    """Lay lanes over a polygon.

    They run along the longer side of the least rectangle around it, evenly
    spaced, and each as far as its strip of the area reaches; where the area is
    in several pieces there, so is the lane.

    Args:
        area: Corners, m.
        width: Width of what a robot covers, m.
        overlap: Least share of the width that neighbours have in common.
    """
    polygon = shapely.Polygon(area)
    rectangle = shapely.get_coordinates(polygon.minimum_rotated_rectangle)
    sides = np.diff(rectangle, axis=0)
    longest = sides[np.linalg.norm(sides, axis=1).round(6).argmax()]
    angle = math.atan2(longest[1], longest[0])
    level = affinity.rotate(polygon, -angle, origin=(0, 0), use_radians=True)
    left, bottom, right, top = level.bounds
    height = top - bottom
    count = max(1, math.ceil((height - width) / (width * (1 - overlap)) - 1e-9) + 1)
    middles = (
        np.linspace(bottom + width / 2, top - width / 2, count)
        if count > 1
        else np.array([(bottom + top) / 2])
    )
    ends = []
    for y in middles:
        strip = shapely.intersection(level, shapely.box(left, y - width / 2, right, y + width / 2))
        pieces = (part.bounds for part in shapely.get_parts(strip) if part.area > 0)
        ends += [(x0, x1, y) for x0, _, x1, _ in sorted(pieces)]
    x0, x1, y = np.array(ends).T
    cos, sin = math.cos(angle), math.sin(angle)
    start = np.column_stack([cos * x0 - sin * y, sin * x0 + cos * y])
    return Lanes(start, np.array([cos, sin]), x1 - x0)
