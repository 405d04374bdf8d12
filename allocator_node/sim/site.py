"""What a rehearsal measures of the site: distances between bodies, robots out of bounds."""

from __future__ import annotations

import numpy as np
import shapely

from ..team import Team


class Site:
    """Geometry of a team and its site, ready for many questions."""

    def __init__(self, team: Team, height_clearance: float) -> None:
        """Prepare.

        Args:
            team: The team.
            height_clearance: Height difference from which robots do not meet, m.
        """
        self._radii = np.array([robot.radius for robot in team.robots.values()])
        self._first, self._second = np.triu_indices(len(self._radii), 1)
        self._clearance = height_clearance
        self._boundary = shapely.Polygon(team.boundary) if team.boundary else None
        self._keep_out = shapely.union_all([shapely.Polygon(k.polygon) for k in team.keep_out])
        for area in (self._boundary, self._keep_out):
            if area is not None:
                shapely.prepare(area)

    def separation(self, poses: np.ndarray) -> tuple[float, tuple[int, int]] | None:
        """Give the smallest distance between two bodies' surfaces, m, and the two robots.

        None where no two robots are near the same height.
        """
        apart = poses[self._first] - poses[self._second]
        gap = np.hypot(apart[:, 0], apart[:, 1])
        gap -= self._radii[self._first] + self._radii[self._second]
        gap[np.abs(apart[:, 2]) >= self._clearance] = np.inf
        if not np.isfinite(gap).any():
            return None
        pair = int(np.argmin(gap))
        return float(gap[pair]), (int(self._first[pair]), int(self._second[pair]))

    def outside(self, poses: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Tell which robots are out of bounds: by the body's centre, by any part; each (N,)."""
        points = shapely.points(poses[:, :2])
        by_centre = shapely.contains(self._keep_out, points)
        by_body = shapely.distance(self._keep_out, points) < self._radii
        if self._boundary is not None:
            inside = shapely.covers(self._boundary, points)
            edge = shapely.distance(self._boundary.exterior, points)
            by_centre |= ~inside
            by_body |= ~inside | (edge < self._radii)
        return by_centre, by_body
