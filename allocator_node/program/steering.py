"""Steers robots that turn only as they drive, along paths they can follow."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import shapely

from ..drives import Fleet
from ..model import Model
from ..team import Team
from .dubins import SIDES, WORDS, dubins, traced
from .guidance import Course, Targets
from .ways import grown

SPARE = 1.15
"""Paths turn on circles larger than the tightest by this: what is left corrects errors."""

STEP = 0.05
"""Distance of two points of a path, as a share of the turning radius."""

CARROT = 0.4
"""Distance ahead on the path at which a robot aims, as a share of the turning radius."""

OFF = 0.3
"""Distance from its path at which a robot makes another, as a share of the turning radius."""

GOAL_MOVED, GOAL_TURNED = 0.15, 0.1
"""Change of a goal that calls for another path, m and rad."""

ANY = np.linspace(-np.pi, np.pi, 36, endpoint=False)
"""Headings tried at a goal that may be taken at any."""

BACKING = np.arange(1, 9) * 0.25
"""Distances a path may begin with in reverse, as shares of the turning radius."""

BACKING_COST = 2.0
"""A metre in reverse counts as so many forward ones."""

BLOCKED_COST = 20.0
"""A metre where an area is too near counts as so many free ones."""

GRAZING = 0.05
"""Distance paths keep from where the safety rows would slow a robot to a halt, m."""

COMPARED = 64
"""Shortest paths that are looked at when areas are near."""

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
        poses: np.ndarray,
        points: np.ndarray,
        held: np.ndarray,
        aside: np.ndarray,
        gamma: float,
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
            held: How long each robot has been held back, s, shape (N,).
            aside: Angle by which each turns aside for others, rad, shape (N,).
            gamma: Gain γ of the task rows, 1/s.
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
            turn = _pursuit(
                here, plan.carrot(CARROT / curvature), aside[i] if plan.gear > 0 else 0.0
            )
            turn = np.clip(turn, -curvature, curvature)
            cruise = fleet.cruise[i]
            speed = max(min(gamma * (plan.left + beyond), cruise), SLOWEST * cruise)
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


def _pursuit(here: np.ndarray, carrot: np.ndarray, aside: float) -> float:
    """Give the curvature of the arc from a pose (3,) to a point (2,), 1/m.

    The point is turned clockwise by ``aside``, rad, but not to behind the robot.
    """
    x, y = carrot - here[:2]
    bearing = np.angle(np.exp(1j * (np.arctan2(y, x) - here[2])))
    if aside > 0:
        bearing = max(bearing - aside, -np.pi / 2)
    return float(2 * np.sin(bearing) / max(np.hypot(x, y), 1e-3))


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
        starts = [(side / radius, -length) for side in (0, 1, -1) for length in backing]
        begins = starts if must_back else begins + starts
    starts = np.array([traced(here, [piece], radius)[-1] for piece in begins])
    pieces = dubins(starts[:, None], ends[None], radius)
    cost = pieces.sum(axis=-1) + BACKING_COST * np.abs([b for _, b in begins])[:, None, None]
    order = np.argsort(cost, axis=None)[: 1 if blocked is None else COMPARED]
    best: tuple[float, np.ndarray, int] | None = None
    for flat in order:
        if best is not None and cost.flat[flat] >= best[0]:
            break
        b, e, w = np.unravel_index(flat, cost.shape)
        word = [SIDES[letter] / radius for letter in WORDS[w]]
        parts = list(zip(word, pieces[b, e, w], strict=True))
        step = STEP * radius
        back = traced(here, [begins[b]], step)
        poses = np.concatenate([back[:-1], traced(back[-1], parts, step)])
        total = cost.flat[flat]
        if blocked is not None:
            x = poses[:, 0] + ahead * np.cos(poses[:, 2])
            y = poses[:, 1] + ahead * np.sin(poses[:, 2])
            total += BLOCKED_COST * step * shapely.contains_xy(blocked, x, y).sum()
        if best is None or total < best[0]:
            best = total, poses, len(back) if len(back) > 1 else 0
    _, poses, count = best
    steps = np.hypot(*np.diff(poses[:, :2], axis=0).T)
    return _Plan(goal, poses, count, np.concatenate([[0.0], np.cumsum(steps)]))
