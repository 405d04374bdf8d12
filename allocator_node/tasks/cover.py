"""Spread over an area, each robot in the middle of what is nearest to it."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
import shapely
from scipy.spatial import cKDTree

from ..team import Checked, Point, Polygon, Positive
from .base import Goals, Scene, Task

FINENESS = 60
"""Cells of the grid along the longer side of the area."""

SETTLED = 0.1
"""Distance from its centroid at which a robot stands, m."""


@dataclass(frozen=True)
class Bump(Checked):
    """A normal density: weight · exp(−r² / 2 spread²).

    Attributes:
        at: Its middle, m.
        spread: Standard deviation, m.
        weight: Height beside the other bumps.
    """

    at: Point
    spread: Positive
    weight: Positive = 1.0


@dataclass(frozen=True)
class Cells:
    """The area in small pieces.

    Attributes:
        middles: Their centroids, m, shape (Q, 2).
        masses: Their masses, shape (Q,).
    """

    middles: np.ndarray
    masses: np.ndarray

    def centroids(self, generators: np.ndarray) -> np.ndarray:
        """Give the centroid of each generator's Voronoi cell, (n, 2); NaN: an empty cell."""
        _, owner = cKDTree(generators).query(self.middles)
        count = len(generators)
        mass = np.bincount(owner, self.masses, minlength=count)
        sums = [np.bincount(owner, self.masses * part, minlength=count) for part in self.middles.T]
        with np.errstate(invalid="ignore"):
            return np.column_stack(sums) / mass[:, None]


@dataclass(frozen=True, kw_only=True)
class Cover(Task):
    """Each member goes to the centroid of its own Voronoi cell.

    The published gradient descent of H = Σ_i ∫_{V_i} ‖q − p_i‖² φ(q) dq (Cortés,
    Martínez, Karatas and Bullo, "Coverage control for mobile sensing networks",
    IEEE Trans. Robotics and Automation 20(2), 2004): every p_i moves to the
    centroid of V_i. The integrals are sums over small pieces of the area.

    Attributes:
        area: Area to cover, m.
        density: Where more is to be seen; none: everywhere the same.
    """

    kind = "cover"

    area: Polygon
    density: tuple[Bump, ...] = ()

    @cached_property
    def _cells(self) -> Cells:
        """The area's pieces, made once: a square grid cut along the area's edge."""
        area = shapely.Polygon(self.area)
        x0, y0, x1, y1 = area.bounds
        step = max(x1 - x0, y1 - y0) / FINENESS
        x, y = np.meshgrid(np.arange(x0, x1, step), np.arange(y0, y1, step))
        boxes = shapely.box(x.ravel(), y.ravel(), x.ravel() + step, y.ravel() + step)
        pieces = shapely.intersection(boxes, area)
        pieces = pieces[shapely.area(pieces) > 0]
        middles = shapely.get_coordinates(shapely.centroid(pieces))
        masses = shapely.area(pieces)
        if self.density:
            masses = masses * sum(
                bump.weight * np.exp(-((middles - bump.at) ** 2).sum(1) / (2 * bump.spread**2))
                for bump in self.density
            )
        # Far from every bump the density vanishes; the area itself must still count.
        return Cells(middles, np.maximum(masses / max(masses.max(), 1e-300), 1e-12))

    def begin(self) -> None:
        """Give the state, which is nothing: all that counts is where the robots are."""

    def advance(self, state: None, scene: Scene) -> None:
        """Go on: there is nothing to keep."""

    def goals(self, state: None, scene: Scene) -> Goals:
        """Give members their centroids, others the area's own."""
        centre = self._cells.middles.T @ self._cells.masses / self._cells.masses.sum()
        points = np.full((len(scene.points), 3), np.nan)
        points[:, :2] = centre
        if len(scene.members):
            centroids = self._cells.centroids(scene.points[scene.members, :2])
            points[scene.members, :2] = np.where(np.isnan(centroids), centre, centroids)
        away = shapely.distance(shapely.Polygon(self.area), shapely.points(scene.points[:, :2]))
        return Goals(points, SETTLED, path=away)

    def moved(self, at: tuple[float, float, float], heading: float | None) -> Cover:
        """Give the same area and density with the area's middle at another place."""
        middle = shapely.Polygon(self.area).centroid
        dx, dy = at[0] - middle.x, at[1] - middle.y
        bumps = tuple(
            replace(bump, at=(bump.at[0] + dx, bump.at[1] + dy)) for bump in self.density
        )
        return replace(self, area=tuple((x + dx, y + dy) for x, y in self.area), density=bumps)
