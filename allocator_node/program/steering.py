"""Steers robots that turn only as they drive, along paths they can follow."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import shapely

from ..drives import Fleet, level
from ..model import Model
from ..settings import Settings
from ..team import Team
from .dubins import TURNS, dubins, sampled, traced
from .guidance import Course, Targets
from .lookout import lookout
from .ways import grown

SPARE = 1.15
"""Paths turn on circles larger than the tightest by this: what is left corrects errors."""

STEP = 0.05
"""Distance of two points of a path, as a share of the turning radius."""

CARROT = 0.4
"""Distance ahead on the path at which a robot aims, as a share of the turning radius."""

FAR = 3.0
"""The same for who turns aside: the way in which it wants to go on in the long run."""

OFF = 0.3
"""Distance from its path at which a robot makes another, as a share of the turning radius."""

GOAL_MOVED, GOAL_TURNED = 0.15, 0.1
"""Change of a goal that calls for another path, m and rad."""

ANY = np.linspace(-np.pi, np.pi, 36, endpoint=False)
"""Headings tried at a goal that may be taken at any."""

BACKING = np.arange(1, 9) * 0.25
"""Distances a path may begin with in reverse, as shares of the turning radius."""

OUT = 1.0
"""Who is stuck backs up so far at least, as a share of the turning radius."""

BACKING_COST = 2.0
"""A metre in reverse counts as so many forward ones."""

BLOCKED_COST = 20.0
"""A metre where an area is too near counts as so many free ones."""

GRAZING = 0.05
"""Distance paths keep from where the safety rows would slow a robot to a halt, m."""

BATCH, SAMPLES = 128, 64
"""Where areas are near, so many paths are looked at together, at so many poses each."""

STUCK = 4.0
"""Time after which a robot that is held back makes another path, backing if it may, s."""

SLOWEST = 0.2
"""Least share of the cruising speed on the way: the end of a path must be reached."""

STILL = 0.05
"""A goal that moves faster than this, m/s, is not approached at a heading."""


@dataclass
class _Plan:
    """A path, and how far its robot has come.

    Attributes:
        goal: Goal it leads to: x, y (m), heading (rad, NaN: any), shape (3,).
        poses: Poses of the axle on it, shape (P, 3).
        backing: How many of them, at the start, are taken in reverse.
        spacing: Length of the path up to each pose, m, shape (P,).
        at: Where its robot is.
        age: How long ago it was made, s.
    """

    goal: np.ndarray
    poses: np.ndarray
    backing: int
    spacing: np.ndarray
    at: int = 0
    age: float = 0.0

    @property
    def gear(self) -> int:
        """1 forward, −1 in reverse."""
        return -1 if self.at < self.backing - 1 else 1

    @property
    def last(self) -> int:
        """Index of the last pose in the present gear."""
        return self.backing - 1 if self.gear < 0 else len(self.poses) - 1

    @property
    def left(self) -> float:
        """Length of the rest, m."""
        return float(self.spacing[-1] - self.spacing[self.at])

    def follow(self, here: np.ndarray, window: float) -> float:
        """Go on to the nearest pose at most ``window`` m ahead; give how far off it is, m."""
        end = np.searchsorted(self.spacing, self.spacing[self.at] + window)
        near = self.poses[self.at : min(int(end), self.last) + 1, :2]
        away = np.hypot(*(near - here[:2]).T)
        self.at += int(away.argmin())
        return float(away.min())

    def carrot(self, ahead: float) -> np.ndarray:
        """Give the point (2,) so far ahead on the path, straight on beyond its end."""
        wanted = self.spacing[self.at] + ahead
        index = min(int(np.searchsorted(self.spacing, wanted)), self.last)
        x, y, heading = self.poses[index]
        beyond = self.gear * max(wanted - self.spacing[index], 0.0)
        return np.array([x + beyond * np.cos(heading), y + beyond * np.sin(heading)])


class Steering:
    """Makes and follows the paths of a team's steered robots.

    A path is the shortest of bounded curvature (:mod:`.dubins`) from where the axle
    is: to the heading a goal demands, or to the best of many where it demands none.
    It stays clear of the site's areas where one of the shortest does. A robot that
    may reverse begins with a piece backwards where that is shorter in all. Robots
    follow by pure pursuit (Coulter, "Implementation of the pure pursuit path tracking
    algorithm", CMU-RI-TR-92-01, 1992). A path is kept until its goal moves, its robot
    is far off it, has come to its end in vain, or is held back for long.

    Attributes:
        gear: 1 where a steered robot drives forward, −1 in reverse, 0 for other
            robots, shape (N,).
    """

    def __init__(self, team: Team, model: Model, clearance: np.ndarray) -> None:
        """Look at the site.

        Args:
            team: The team; its boundary and keep-out areas are used.
            model: The team as arrays.
            clearance: Distance each control point keeps from an edge, m, shape (N,).
        """
        fleet = model.fleet
        self.gear = fleet.steered.astype(int)
        self._robots = np.flatnonzero(fleet.steered)
        self._clearance = clearance
        self._plans: dict[int, _Plan] = {}
        areas = [shapely.Polygon(area.polygon) for area in team.keep_out]
        boundary = shapely.Polygon(team.boundary) if team.boundary else None
        self._blocked = {}
        if areas or boundary is not None:
            for i in self._robots:
                self._blocked[i] = grown(areas, boundary, clearance[i] + GRAZING)
                shapely.prepare(self._blocked[i])

    def course(
        self,
        course: Course,
        model: Model,
        targets: Targets,
        *,
        poses: np.ndarray,
        points: np.ndarray,
        velocities: np.ndarray,
        known: np.ndarray,
        held: np.ndarray,
        aside: np.ndarray,
        settings: Settings,
        dt: float,
    ) -> Course:
        """Give the course with what steered robots do to get where it leads.

        A robot's task row is chosen so that its least-effort answer is the command
        wanted: with share u = v / limit, n ∝ (vx, ω / (k² L)) for k = the highest
        curvature and L = the look-ahead.

        Args:
            course: What each robot should do, were it free to turn.
            model: The team.
            targets: Goals of the robots' own tasks.
            poses: Poses, shape (N, 4).
            points: Control points, m, shape (N, 3).
            velocities: Velocities, m/s, shape (N, 4).
            known: Robots ever heard, shape (N,).
            held: How long each robot has been held back, s, shape (N,).
            aside: Angle by which each turns aside for others, rad, shape (N,).
            settings: Weights and times.
            dt: Time since the last period, s.
        """
        fleet = model.fleet
        away, demand = course.away.copy(), course.demand.copy()
        for i in self._robots:
            if not targets.busy[i] or course.demand[i] <= 0:
                self._plans.pop(i, None)
                self.gear[i] = 1
                continue
            corner = points[i, :2] + course.to_corner[i] * course.to_goal[i, :2]
            beyond = max(course.distance[i] - course.to_corner[i], 0.0)
            still = np.linalg.norm(targets.velocities[i]) <= STILL
            facing = targets.facing[i] if still and beyond < 1e-3 else np.nan
            curvature = fleet.limits[i, 3] / fleet.limits[i, 0]
            here = poses[i, [0, 1, 3]]
            plan = self._plan(
                i, here, np.array([*corner, facing]), 1 / curvature, fleet, held[i], dt
            )
            carrot, avoid = plan.carrot(CARROT / curvature), 0.0
            if plan.gear > 0:
                others = known & level(
                    points[:, 2] - points[i, 2], fleet.flies | fleet.flies[i],
                    settings.height_clearance,
                )  # fmt: skip
                others[i] = False
                keep = self._clearance[i] + self._clearance - settings.margin
                pace = targets.pace[i] * fleet.cruise[i]
                far = plan.carrot(FAR / curvature)
                way = np.arctan2(*(far - here[:2])[::-1])
                avoid = lookout(i, way, pace, points, velocities, keep, others)
                avoid = aside[i] if abs(aside[i]) > abs(avoid) else avoid
                if avoid:
                    # Away from the path, which would pull it back.
                    carrot = here[:2] + CARROT / curvature * np.array([
                        np.cos(way - avoid), np.sin(way - avoid)
                    ])
            turn = _pursuit(here, carrot)
            turn = np.clip(turn, -curvature, curvature)
            cruise = fleet.cruise[i]
            speed = max(min(settings.gamma * (plan.left + beyond), cruise), SLOWEST * cruise)
            keeps_up = max(float(course.to_goal[i] @ targets.velocities[i]), 0.0)
            speed = min(targets.pace[i] * speed + keeps_up, fleet.limits[i, 0])
            self.gear[i] = plan.gear
            vx = plan.gear * speed
            row = np.array([vx, turn * vx / (curvature**2 * fleet.ahead[i])])
            row /= np.linalg.norm(row)
            demand[i] = row @ (vx, fleet.ahead[i] * turn * vx)
            cos, sin = np.cos(here[2]), np.sin(here[2])
            away[i] = row[1] * sin - row[0] * cos, -row[0] * sin - row[1] * cos, 0.0
        exact = course.exact & ~fleet.steered
        preferred = np.where(fleet.steered[:, None], 0.0, course.preferred)
        return replace(course, away=away, demand=demand, preferred=preferred, exact=exact)

    def _plan(
        self,
        i: int,
        here: np.ndarray,
        goal: np.ndarray,
        radius: float,
        fleet: Fleet,
        held: float,
        dt: float,
    ) -> _Plan:
        """Give the path of robot i, an old one or another."""
        plan = self._plans.get(i)
        stuck = False
        if plan is not None:
            plan.age += dt
            off = plan.follow(here, 1.5 * radius)
            stuck = min(held, plan.age) > STUCK
            turned = np.angle(np.exp(1j * (plan.goal[2] - goal[2])))
            same = (
                np.hypot(*(plan.goal - goal)[:2]) <= GOAL_MOVED
                and np.isnan(plan.goal[2]) == np.isnan(goal[2])
                and not abs(turned) > GOAL_TURNED
            )
            if same and not stuck and off <= OFF * radius and plan.at < len(plan.poses) - 1:
                return plan
        backing = BACKING * radius if fleet.reverses[i] else BACKING[:0]
        plan = _planned(
            here, goal, SPARE * radius, fleet.ahead[i], backing, stuck, self._blocked.get(i)
        )
        self._plans[i] = plan
        return plan


def _pursuit(here: np.ndarray, carrot: np.ndarray) -> float:
    """Give the curvature of the arc from a pose (3,) to a point (2,), 1/m."""
    x, y = carrot - here[:2]
    across = np.cos(here[2]) * y - np.sin(here[2]) * x
    return float(2 * across / max(x * x + y * y, 1e-6))


def _planned(
    here: np.ndarray,
    goal: np.ndarray,
    radius: float,
    ahead: float,
    backing: np.ndarray,
    must_back: bool,
    blocked: shapely.Geometry | None,
) -> _Plan:
    """Find a path from a pose (3,) that brings the point ahead of the axle to a goal (3,)."""
    headings = ANY if np.isnan(goal[2]) else goal[2:]
    ends = np.column_stack([
        goal[0] - ahead * np.cos(headings), goal[1] - ahead * np.sin(headings), headings
    ])
    begins: list[tuple[float, float]] = [(0.0, 0.0)]
    if len(backing):
        far = backing[backing >= OUT * radius] if must_back else backing
        starts = [(side / radius, -length) for side in (0, 1, -1) for length in far]
        begins = starts if must_back else begins + starts
    backed = [traced(here, [piece], STEP * radius) for piece in begins]
    starts = np.array([path[-1] for path in backed])
    pieces = dubins(starts[:, None], ends[None], radius)
    cost = pieces.sum(axis=-1) + BACKING_COST * np.abs([b for _, b in begins])[:, None, None]
    b, e, w = _best(cost, starts, backed, pieces, radius, ahead, blocked)
    parts = list(zip(TURNS[w] / radius, pieces[b, e, w], strict=True))
    poses = np.concatenate([backed[b][:-1], traced(starts[b], parts, STEP * radius)])
    steps = np.hypot(*np.diff(poses[:, :2], axis=0).T)
    count = len(backed[b]) if len(backed[b]) > 1 else 0
    return _Plan(goal, poses, count, np.concatenate([[0.0], np.cumsum(steps)]))


def _best(
    cost: np.ndarray,
    starts: np.ndarray,
    backed: list[np.ndarray],
    pieces: np.ndarray,
    radius: float,
    ahead: float,
    blocked: shapely.Geometry | None,
) -> tuple[int, int, int]:
    """Give begin, end and word of the path that is shortest with what is blocked counted.

    Args:
        cost: Lengths as they count, m, shape (B, E, 6).
        starts: Poses after backing, shape (B, 3).
        backed: The way there, each (P, 3).
        pieces: Lengths of the pieces, m, shape (B, E, 6, 3).
        radius: Turning radius, m.
        ahead: Distance of the control point ahead of the axle, m.
        blocked: What control points keep out of.
    """
    order = np.argsort(cost, axis=None)
    if blocked is None:
        return np.unravel_index(order[0], cost.shape)
    backing = np.array([STEP * radius * _inside(blocked, p[:-1], ahead).sum() for p in backed])
    least, chosen = np.inf, order[0]
    for batch in np.split(order, range(BATCH, len(order), BATCH)):
        if cost.flat[batch[0]] >= least:
            break
        b, e, w = np.unravel_index(batch, cost.shape)
        lengths = np.where(np.isfinite(pieces[b, e, w]), pieces[b, e, w], 0.0)
        path = sampled(starts[b], TURNS[w] / radius, lengths, SAMPLES)
        within = _inside(blocked, path, ahead).mean(axis=1) * lengths.sum(axis=1)
        total = cost.flat[batch] + BLOCKED_COST * (within + backing[b])
        if total.min() < least:
            least, chosen = total.min(), batch[total.argmin()]
    return np.unravel_index(chosen, cost.shape)


def _inside(blocked: shapely.Geometry, poses: np.ndarray, ahead: float) -> np.ndarray:
    """Tell at which poses (..., 3) of the axle the control point is blocked, shape (...)."""
    x = poses[..., 0] + ahead * np.cos(poses[..., 2])
    y = poses[..., 1] + ahead * np.sin(poses[..., 2])
    return shapely.contains_xy(blocked, x.ravel(), y.ravel()).reshape(x.shape)
