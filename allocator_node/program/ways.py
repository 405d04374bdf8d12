"""Ways around keep-out areas: where to steer now, and how far it is along the way."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely
from scipy.sparse.csgraph import dijkstra

from ..team import Point, Team

STEP = 0.1
"""Robots are grouped by clearance, rounded up to this, m."""

GIVE = 0.08
"""How much nearer than a corner a line of sight may pass, m: corners see each other."""

OUTSIDE = 0.02
"""How far corners lie outside the clearance, so that they can be reached, m."""

ARC = 3
"""Straight pieces a right-angled corner is rounded with."""

MOVED = 0.3
"""Distance after which a robot's ways to everywhere are looked up again, m."""

REMEMBERED = 4096
"""Goals whose ways are kept at most."""

STOPS_REMEMBERED = 512
"""Tasks' stops of which it is kept who can come near, at most."""


@dataclass(frozen=True)
class Lead:
    """Where to steer and how far it is.

    Attributes:
        steer: Points to steer to now, m, shape of the goals, height included.
        length: Way to the goals, m, horizontal; inf where there is none.
    """

    steer: np.ndarray
    length: np.ndarray


class Ways:
    """Shortest ways of all robots around the site's areas.

    Visibility graph (Lozano-Pérez and Wesley, "An algorithm for planning
    collision-free paths among polyhedral obstacles", Communications of the ACM
    22(10), 1979) over the corners of the areas grown by a robot's clearance. Built
    once for each clearance; a period only looks from the robots into it.
    """

    def __init__(self, team: Team, clearance: np.ndarray) -> None:
        """Build the graphs.

        Args:
            team: The team; its boundary and keep-out areas are used.
            clearance: Distance each control point keeps from an edge, m, shape (N,).
        """
        areas = [shapely.Polygon(area.polygon) for area in team.keep_out]
        boundary = shapely.Polygon(team.boundary) if team.boundary else None
        convex = boundary is None or boundary.convex_hull.area - boundary.area < 1e-9
        sizes, self._size = np.unique(np.round(clearance, 6), return_inverse=True)
        self._shut = [grown(areas, boundary, size) for size in sizes]
        self._admitted: dict[tuple[tuple[Point, float], ...], np.ndarray] = {}
        self.maps: list[tuple[np.ndarray, _Map]] = []
        self._kept: dict[str, tuple[np.ndarray, np.ndarray, np.ndarray, Lead]] = {}
        if areas or not convex:
            steps = np.ceil(np.asarray(clearance) / STEP - 1e-9)
            self.maps = [
                (np.flatnonzero(steps == step), _Map(areas, boundary, step * STEP))
                for step in np.unique(steps)
            ]

    @property
    def clear(self) -> bool:
        """Whether every way is straight."""
        return not self.maps

    def gap(self, point: Point) -> np.ndarray:
        """Give how far from a point (m) edges keep each robot's control point, m, (N,)."""
        place = shapely.Point(point)
        gaps = [
            shut.boundary.distance(place) if shut.intersects(place) else 0.0
            for shut in self._shut
        ]
        return np.array(gaps)[self._size]

    def admitted(self, stops: tuple[tuple[Point, float], ...]) -> np.ndarray:
        """Tell which robots can come near enough to all of some points, shape (N,).

        Args:
            stops: Points and how near one must come, m.
        """
        if stops not in self._admitted:
            if len(self._admitted) >= STOPS_REMEMBERED:
                self._admitted.clear()
            row = np.ones(len(self._size), dtype=bool)
            for point, within in stops:
                gap = self.gap(point)
                # The last bit before an edge takes for ever.
                row &= (gap == 0) | (gap + OUTSIDE <= within)
            self._admitted[stops] = row
        return self._admitted[stops]

    def lead(self, points: np.ndarray, goals: np.ndarray, wanted: np.ndarray) -> Lead:
        """Give the ways from robots to goals.

        Args:
            points: Control points, m, shape (N, 3).
            goals: Goal points, m, shape (N, M, 3).
            wanted: Pairs that matter, shape (N, M); the others get a straight way.
        """
        offset = goals[..., :2] - points[:, None, :2]
        length = np.hypot(offset[..., 0], offset[..., 1])
        if self.clear or not wanted.any():
            return Lead(goals, length)
        steer = goals.copy()
        for robots, site in self.maps:
            i, m = np.nonzero(wanted[robots])
            if len(i):
                here = robots[i]
                corner, way = site.lead(here, points[here, :2], goals[here, m, :2])
                around = np.isfinite(corner[:, 0])
                steer[here[around], m[around], :2] = corner[around]
                length[here[around], m[around]] = way[around]
                length[here[np.isinf(way)], m[np.isinf(way)]] = np.inf
        return Lead(steer, length)

    def outlook(
        self, points: np.ndarray, goals: np.ndarray, wanted: np.ndarray, purpose: str = "out"
    ) -> Lead:
        """Give the same for pricing: a robot that hardly moved keeps the ways it had.

        Arguments as for :meth:`lead`; ways may be :data:`MOVED` out of date. Ways are
        kept for each purpose apart.
        """
        if self.clear:
            return self.lead(points, goals, wanted)
        before = self._kept.get(purpose)
        if before is None or before[1].shape != goals.shape:
            stale = np.ones(len(points), dtype=bool)
            before = (points, goals, wanted, Lead(goals, np.zeros(goals.shape[:2])))
        else:
            moved = np.hypot(*(points - before[0])[:, :2].T) > MOVED
            other = (goals != before[1])[..., :2].any(axis=2) & wanted
            stale = moved | (other | (wanted & ~before[2])).any(axis=1)
        fresh = self.lead(points, goals, wanted & stale[:, None])
        rows = stale[:, None]
        lead = Lead(
            np.where(rows[..., None], fresh.steer, before[3].steer),
            np.where(rows, fresh.length, before[3].length),
        )
        self._kept[purpose] = (
            np.where(rows, points, before[0]),
            np.where(rows[..., None], goals, before[1]),
            np.where(rows, wanted, before[2]),
            lead,
        )
        return lead


class _Map:
    """Visibility graph for one clearance."""

    def __init__(
        self,
        areas: list[shapely.Polygon],
        boundary: shapely.Polygon | None,
        clearance: float,
    ) -> None:
        self.blocked = grown(areas, boundary, clearance - GIVE)
        around = grown(areas, boundary, clearance + OUTSIDE)
        corners = shapely.get_coordinates(around)
        inside = shapely.intersects_xy(self.blocked, corners)
        self.corners = np.unique(np.round(corners[~inside], 6), axis=0)
        if boundary is not None:
            self.corners = self.corners[shapely.contains_xy(boundary, self.corners)]
        shapely.prepare(self.blocked)
        count = len(self.corners)
        first, second = np.triu_indices(count, 1)
        sees = self._sees(self.corners[first], self.corners[second])
        lengths = np.full((count, count), np.inf)
        apart = np.linalg.norm(self.corners[first] - self.corners[second], axis=1)
        lengths[first[sees], second[sees]] = apart[sees]
        lengths[second[sees], first[sees]] = apart[sees]
        self.between = dijkstra(np.where(np.isinf(lengths), 0.0, lengths), directed=False)
        self._from_goal: dict[tuple[float, float], np.ndarray] = {}
        self._seen: dict[int, tuple[np.ndarray, np.ndarray]] = {}

    def _sees(self, starts: np.ndarray, ends: np.ndarray) -> np.ndarray:
        """Tell whether straight lines between points (n, 2) are free, shape (n,)."""
        lines = shapely.linestrings(np.stack([starts, ends], axis=1))
        return ~shapely.intersects(self.blocked, lines)

    def _freed(self, points: np.ndarray) -> np.ndarray:
        """Give points (n, 2) with those inside a grown area moved to its edge."""
        inside = shapely.intersects_xy(self.blocked, points)
        if not inside.any():
            return points
        freed = points.copy()
        nearest = shapely.shortest_line(self.blocked.boundary, shapely.points(points[inside]))
        edge = shapely.get_coordinates(nearest)[0::2]
        outward = edge - points[inside]
        size = np.maximum(np.linalg.norm(outward, axis=1, keepdims=True), 1e-9)
        freed[inside] = edge + 1e-3 * outward / size
        return freed

    def lead(
        self, here: np.ndarray, points: np.ndarray, goals: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray]:
        """Give the corner to steer to (p, 2), NaN where it is straight on, and the way (p,).

        Args:
            here: Robot of each pair, shape (p,).
            points: Its control point, m, shape (p, 2).
            goals: Goal of each pair, m, shape (p, 2).
        """
        corner = np.full(goals.shape, np.nan)
        way = np.zeros(len(goals))
        starts, ends = self._freed(points), self._freed(goals)
        hidden = np.flatnonzero(~self._sees(starts, ends))
        if not len(hidden):
            return corner, way
        if not len(self.corners):
            way[hidden] = np.inf
            return corner, way
        _, one, robot = np.unique(here[hidden], return_index=True, return_inverse=True)
        look = self._looks(here[hidden][one], starts[hidden][one])
        places, goal = np.unique(np.round(ends[hidden], 3), axis=0, return_inverse=True)
        onward = np.stack([self._onward((float(x), float(y))) for x, y in places])
        total = look[robot] + onward[goal.ravel()]
        best = total.argmin(axis=1)
        way[hidden] = total[np.arange(len(hidden)), best]
        known = np.isfinite(way[hidden])
        corner[hidden[known]] = self.corners[best[known]]
        return corner, way

    def _onward(self, goal: tuple[float, float]) -> np.ndarray:
        """Give the way from each corner to a goal, m, shape (V,)."""
        if goal not in self._from_goal:
            if len(self._from_goal) >= REMEMBERED:
                self._from_goal.clear()
            point = np.broadcast_to(np.array(goal), self.corners.shape)
            last = np.linalg.norm(self.corners - point, axis=1)
            last[~self._sees(self.corners, point)] = np.inf
            self._from_goal[goal] = (self.between + last).min(axis=1)
        return self._from_goal[goal]

    def _looks(self, robots: np.ndarray, points: np.ndarray) -> np.ndarray:
        """Give the straight ways from robots (r,) at points (r, 2) to the corners they see.

        Returns:
            Ways, m, shape (r, V); inf where a corner is not seen.
        """
        count = len(self.corners)
        moved = [
            row
            for row, robot in enumerate(robots)
            if robot not in self._seen
            or np.hypot(*(self._seen[robot][0] - points[row])) > MOVED / 2
        ]
        if moved:
            starts = np.repeat(points[moved], count, axis=0)
            ends = np.tile(self.corners, (len(moved), 1))
            sees = self._sees(starts, ends).reshape(-1, count)
            for row, seen in zip(moved, sees, strict=True):
                self._seen[int(robots[row])] = (points[row], seen)
        seen = np.stack([self._seen[int(robot)][1] for robot in robots])
        way = np.linalg.norm(points[:, None] - self.corners, axis=2)
        return np.where(seen, way, np.inf)


def grown(
    areas: list[shapely.Polygon], boundary: shapely.Polygon | None, clearance: float
) -> shapely.Geometry:
    """Give what a control point must stay out of, its round corners as few straight ones."""
    grown = [area.buffer(clearance, quad_segs=ARC) for area in areas]
    if boundary is not None:
        inner = boundary.buffer(-clearance, join_style="mitre")
        frame = boundary.buffer(10 * clearance + 1.0, join_style="mitre")
        grown.append(frame.difference(inner))
    return shapely.union_all(grown)
