"""The rows that may not be traded for progress: pairs, areas, silent robots."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import shapely
from scipy.spatial import cKDTree

from ..drives import level
from ..model import Model
from ..settings import Settings
from ..team import Team

CALM = 0.3
"""Highest speed at which robots that are too near are asked to come apart, m/s."""


@dataclass(frozen=True)
class SafetyRows:
    """Linear rows normal · (ṗ_first − ṗ_second) ≥ bound on horizontal velocities.

    Attributes:
        first: Robot index, shape (R,).
        second: Robot index, or −1 where the first has to keep the row alone, shape (R,).
        normal: Unit vectors pointing away from the obstacle, shape (R, 2).
        bound: Right-hand sides, m/s, shape (R,).
        violated: Where the distance asked for is not kept already, or would not be by
            standing still, as the obstacle comes nearer by itself, shape (R,).
        room: Distance left before the margin is touched, m, shape (R,).
        obstacle: What the row keeps away from: a robot index, or −1 for an area.
    """

    first: np.ndarray
    second: np.ndarray
    normal: np.ndarray
    bound: np.ndarray
    violated: np.ndarray
    room: np.ndarray
    obstacle: np.ndarray

    def __len__(self) -> int:
        return len(self.first)

    @classmethod
    def none(cls) -> SafetyRows:
        """Give no rows."""
        return cls(
            np.zeros(0, int), np.zeros(0, int), np.zeros((0, 2)), np.zeros(0),
            np.zeros(0, bool), np.zeros(0), np.zeros(0, int),
        )  # fmt: skip

    @classmethod
    def of(
        cls,
        first: np.ndarray,
        second: np.ndarray,
        normal: np.ndarray,
        bound: np.ndarray,
        room: np.ndarray,
        obstacle: np.ndarray,
        approach: np.ndarray | float = 0.0,
    ) -> SafetyRows:
        """Give rows; violated ones ask for a calm way out, away from obstacles that come.

        Args:
            approach: How fast the obstacle comes along the normal, m/s, shape (R,).
        """
        bound = np.minimum(bound, CALM) + approach
        return cls(first, second, normal, bound, (room < 0) | (bound > 0), room, obstacle)

    @classmethod
    def joined(cls, parts: list[SafetyRows]) -> SafetyRows:
        """Give the rows of all parts."""
        return cls(
            *(
                np.concatenate([getattr(part, name) for part in parts])
                for name in cls.__dataclass_fields__
            )
        )

    def slackness(self, velocities: np.ndarray, others: np.ndarray | None = None) -> np.ndarray:
        """Give normal · (ṗ_first − ṗ_second) − bound, m/s, shape (R,).

        Args:
            velocities: Velocities, m/s, shape (N, 3).
            others: Those of the second robots, where they are to differ, shape (N, 3).
        """
        others = velocities if others is None else others
        relative = velocities[self.first, :2].copy()
        other = self.second >= 0
        relative[other] -= others[self.second[other], :2]
        return (self.normal * relative).sum(axis=1) - self.bound


def rolled(speed: np.ndarray, silent_for: np.ndarray, settings: Settings) -> np.ndarray:
    """Give how far silent robots may be from their last pose, m, shape (N,).

    A robot moves on under our commands until it counts as silent, and from then on
    no farther than ``silent_reach``.

    Args:
        speed: Highest speeds, m/s, shape (N,).
        silent_for: Time since the last pose, s, shape (N,); 0 for robots heard.
        settings: Weights and times.
    """
    return np.minimum(speed * silent_for, speed * settings.pose_timeout + settings.silent_reach)


class Safety:
    """Makes the rows of one period; keeps what does not change of a team and its site.

    Barriers on the control points, in the published form ḣ ≥ −γ_s h (Ames, Xu,
    Grizzle and Tabuada, "Control barrier function based quadratic programs for
    safety critical systems", IEEE Trans. Automatic Control 62(8), 2017):
    h_ij = ‖p_i − p_j‖² − D_ij² for pairs, the distance to the nearest points of
    edges for areas. A row on one pair allows one robot to come nearer while the
    other makes way; so that nobody relies on a robot that may be stuck, each also
    keeps the row it would have beside a robot that stands still.
    """

    def __init__(self, team: Team, model: Model, settings: Settings) -> None:
        self.settings = settings
        fleet = model.fleet
        # The body reaches this far around the control point.
        self.reach = model.radius + fleet.ahead
        self.speed = fleet.max_speed
        self.flies = fleet.flies
        self.areas = [shapely.Polygon(area.polygon) for area in team.keep_out]
        self.boundary = shapely.Polygon(team.boundary) if team.boundary else None
        rings = [area.exterior for area in self.areas]
        if self.boundary is not None:
            rings.append(self.boundary.exterior)
        self.edges = np.array(
            [
                shapely.LineString([start, end])
                for ring in rings
                for start, end in zip(ring.coords[:-1], ring.coords[1:], strict=True)
            ]
        )
        self.edge_index = shapely.STRtree(self.edges) if len(self.edges) else None
        for shape in self.areas:
            shapely.prepare(shape)
        if self.boundary is not None:
            shapely.prepare(self.boundary)

    def rows(
        self,
        points: np.ndarray,
        known: np.ndarray,
        heard: np.ndarray,
        growth: np.ndarray,
        drift: np.ndarray | None = None,
        trail: np.ndarray | None = None,
    ) -> SafetyRows:
        """Give the rows of this period.

        Args:
            points: Control points, m, shape (N, 3); not looked at where not known.
            known: Robots that were ever heard, shape (N,).
            heard: Robots heard from now, which obey commands, shape (N,).
            growth: How far a silent robot may have moved, m, shape (N,).
            drift: Velocities of robots that go their own way, m/s, shape (N, 2); 0 for
                all others. Default 0.
            trail: Where the commands since its last pose may have taken a silent robot,
                as seen from there, m, shape (N, 2). Default 0.
        """
        drift = np.zeros((len(points), 2)) if drift is None else drift
        parts = [self._pairs(points, known, heard, growth, drift)]
        if trail is not None and heard.any():
            lost = np.flatnonzero(known & ~heard & (growth > 0))
            parts.append(self._trails(points, np.flatnonzero(heard), lost, trail))
        if self.edge_index is not None and heard.any():
            parts.append(self._areas(points, np.flatnonzero(heard)))
        return SafetyRows.joined(parts)

    def _pairs(
        self,
        points: np.ndarray,
        known: np.ndarray,
        heard: np.ndarray,
        growth: np.ndarray,
        drift: np.ndarray,
    ) -> SafetyRows:
        robots = np.flatnonzero(known)
        if len(robots) < 2:
            return SafetyRows.none()
        gamma, margin = self.settings.gamma_s, self.settings.margin
        # Beyond this distance no command can bring h down faster than γ_s h.
        widest = 2 * self.reach[robots].max() + margin + growth[robots].max()
        rush = 2 * self.speed[robots].max() / gamma
        horizon = rush / 2 + np.hypot(rush / 2, widest)
        pairs = cKDTree(points[robots, :2]).query_pairs(horizon, output_type="ndarray")
        i, j = robots[pairs[:, 0]], robots[pairs[:, 1]]
        near = self._level(points, i, j) & (heard[i] | heard[j])
        i, j = i[near], j[near]

        apart = points[i, :2] - points[j, :2]
        distance = np.linalg.norm(apart, axis=1)
        together = distance < 1e-6
        apart[together], distance[together] = (1e-6, 0.0), 1e-6
        keep = self.reach[i] + self.reach[j] + margin + growth[i] + growth[j]
        bound = self._barrier(distance, keep)
        binding = -(self.speed[i] + self.speed[j]) <= bound
        i, j, apart, distance, keep, bound = (
            part[binding] for part in (i, j, apart, distance, keep, bound)
        )
        normal, room = apart / distance[:, None], distance - keep

        both = heard[i] & heard[j]
        alone = np.where(room < 0, bound / 2, bound)
        return SafetyRows.joined(
            [
                SafetyRows.of(i[both], j[both], normal[both], bound[both], room[both], j[both]),
                *(
                    SafetyRows.of(
                        me[obeys],
                        np.full(obeys.sum(), -1),
                        sign * normal[obeys],
                        np.where(both, alone, bound)[obeys],
                        room[obeys],
                        other[obeys],
                        np.maximum((sign * normal * drift[other]).sum(axis=1), 0.0)[obeys],
                    )
                    for me, other, obeys, sign in ((i, j, heard[i], 1), (j, i, heard[j], -1))
                ),
            ]
        )

    def _trails(
        self, points: np.ndarray, heard: np.ndarray, lost: np.ndarray, trail: np.ndarray
    ) -> SafetyRows:
        """Keep robots (n,) off the trails of silent ones (l,), also within their circles.

        The circle soon covers whoever is beside it, and from within it asks for no more
        than a calm way out; most likely, though, the robot is somewhere on its trail.
        """
        me, other = (part.ravel() for part in np.meshgrid(heard, lost, indexing="ij"))
        near = self._level(points, me, other)
        me, other = me[near], other[near]
        apart, way = points[me, :2] - points[other, :2], trail[other]
        share = (apart * way).sum(axis=1) / np.maximum((way**2).sum(axis=1), 1e-12)
        apart -= np.clip(share, 0.0, 1.0)[:, None] * way
        distance = np.maximum(np.hypot(apart[:, 0], apart[:, 1]), 1e-6)
        keep = self.reach[me] + self.reach[other] + self.settings.margin
        bound = self._barrier(distance, keep)
        near = -self.speed[me] <= bound
        me, other, apart, distance, keep, bound = (
            part[near] for part in (me, other, apart, distance, keep, bound)
        )
        normal = apart / distance[:, None]
        alone = np.full(len(me), -1)
        return SafetyRows.of(me, alone, normal, bound, distance - keep, other)

    def _level(self, points: np.ndarray, i: np.ndarray, j: np.ndarray) -> np.ndarray:
        apart, fly = points[i, 2] - points[j, 2], self.flies[i] | self.flies[j]
        return level(apart, fly, self.settings.height_clearance)

    def _barrier(self, distance: np.ndarray, keep: np.ndarray) -> np.ndarray:
        """Give the bound of ḣ ≥ −γ_s h with h = d² − D² on the speed apart ḋ, m/s."""
        return -self.settings.gamma_s * (distance**2 - keep**2) / (2 * distance)

    def _areas(self, points: np.ndarray, robots: np.ndarray) -> SafetyRows:
        places = shapely.points(points[robots, :2])
        gamma = self.settings.gamma_s
        keep = self.reach[robots] + self.settings.margin
        outside = self._outside(points[robots, :2])
        horizon = keep + self.speed[robots] / gamma
        near, edge = self.edge_index.query(places, predicate="dwithin", distance=horizon)
        near, edge = near[~outside[near]], edge[~outside[near]]
        # Where a robot is on the wrong side, only the nearest edge counts: back over it.
        wrong = np.flatnonzero(outside)
        near = np.concatenate([near, wrong])
        edge = np.concatenate([edge, self.edge_index.nearest(places[wrong])]).astype(int)

        if not len(near):
            return SafetyRows.none()
        line = shapely.get_coordinates(shapely.shortest_line(self.edges[edge], places[near]))
        closest, point = line[0::2], line[1::2]
        away = point - closest
        distance = np.linalg.norm(away, axis=1)
        normal = away / np.maximum(distance, 1e-9)[:, None]
        back = outside[near]
        normal[back] *= -1
        room = np.where(back, -distance, distance) - keep[near]
        lone = np.full(len(near), -1)
        return SafetyRows.of(robots[near], lone, normal, -gamma * room, room, lone)

    def clear(self, points: np.ndarray, robot: int) -> np.ndarray:
        """Tell at which points (n, 2) a robot's control point keeps all margins of areas."""
        free = ~self._outside(points)
        if len(self.edges):
            keep = self.reach[robot] + self.settings.margin
            distances = shapely.distance(shapely.points(points)[:, None], self.edges[None])
            free &= distances.min(axis=1) >= keep
        return free

    def _outside(self, points: np.ndarray) -> np.ndarray:
        """Tell which points (n, 2) are beyond the boundary or inside a keep-out area."""
        outside = np.zeros(len(points), dtype=bool)
        if self.boundary is not None:
            outside |= ~shapely.contains_xy(self.boundary, points)
        for area in self.areas:
            outside |= shapely.contains_xy(area, points)
        return outside
