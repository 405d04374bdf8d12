"""Robots without a task make way for those that have one."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from scipy.spatial import cKDTree

from ..drives import level
from .guidance import Course

AHEAD = 4.0
"""How far ahead of a working robot others make way, m."""

SPARE = 0.3
"""Distance left beside its way, beyond what the pair must keep, m."""

HURRY = 0.5
"""Share of its cruising speed at which a robot steps aside."""


def make_way(
    course: Course,
    points: np.ndarray,
    idle: np.ndarray,
    cruise: np.ndarray,
    keep: np.ndarray,
    flies: np.ndarray,
    clearance: float,
) -> Course:
    """Let idle robots that stand in somebody's way step aside, square to that way.

    Args:
        course: What each robot should do.
        points: Control points, m, shape (N, 3).
        idle: Robots that may be asked to move, shape (N,).
        cruise: Cruising speeds, m/s, shape (N,).
        keep: Half the distance two robots must keep, by robot, m, shape (N,).
        flies: Which robots fly, shape (N,).
        clearance: Height difference from which those and others ignore each other, m.

    Returns:
        The course with a way to go for those who step aside.
    """
    moving = np.flatnonzero(course.demand > 0)
    standers = np.flatnonzero(idle)
    if not len(moving) or not len(standers):
        return course
    near = cKDTree(points[moving, :2]).query_ball_point(
        points[standers, :2], AHEAD + 2 * keep.max()
    )
    stander = np.repeat(standers, [len(found) for found in near])
    mover = moving[np.concatenate([np.array(found, dtype=int) for found in near])]
    apart, fly = points[stander, 2] - points[mover, 2], flies[stander] | flies[mover]
    meet = level(apart, fly, clearance)
    stander, mover = stander[meet], mover[meet]
    if not len(stander):
        return course

    heading = course.to_goal[mover, :2]
    reach = np.minimum(course.to_corner[mover], AHEAD)
    offset = points[stander, :2] - points[mover, :2]
    along = np.clip((offset * heading).sum(axis=1), 0.0, reach)
    beside = offset - along[:, None] * heading
    distance = np.linalg.norm(beside, axis=1)
    short = keep[stander] + keep[mover] + SPARE - distance
    right = np.column_stack([heading[:, 1], -heading[:, 0]])
    # Whoever stands right in the way steps to the way's right-hand side.
    middle = distance < 1e-3
    side = np.where(middle[:, None], right, beside / np.maximum(distance, 1e-9)[:, None])

    away, demand = course.away.copy(), course.demand.copy()
    order = np.argsort(short, kind="stable")
    for one in order[short[order] > 0]:
        away[stander[one], :2] = -side[one]
        away[stander[one], 2] = 0.0
        demand[stander[one]] = min(short[one], HURRY * cruise[stander[one]])
    return replace(course, away=away, demand=demand)
