"""From the goal of each robot to the row that takes it there."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..model import Model
from ..settings import Settings
from .ways import Lead

TURN_GAIN = 2.0
"""Turn rate for each radian off the heading demanded, 1/s."""

FACING_DEADBAND = 0.05
"""Heading error that is left alone, rad."""

FACING, STAYS_FACING = 0.1, 0.2
"""Heading error at which a robot that cannot turn on the spot stands, and stays, rad."""

HELD_BELOW = 0.6
"""Share of the closing speed demanded below which a robot counts as held back."""

PATIENCE = 0.3
"""How long a robot is held back before it turns aside, s."""

TURN_ASIDE = np.radians(90)
"""How fast it turns aside then, rad/s."""

MOST_ASIDE = np.radians(100)

LONG_ASIDE = 6.0
"""How long a robot that is still held back stays turned that far before it tries the
other side, s; if it moves, then only once the straight way is free. Twice as long each
time: out of a narrow way two must back far enough to pass."""

MOST_TRIES = 4.0
"""It becomes no longer than after so many."""

SLOW = 0.05
"""Share of the cruising speed below which nobody is held back."""

FORGIVEN = 10.0
"""Time on its way after which a robot begins with the right-hand side again, s."""

TURN_BACK = 1.5
"""Time constant with which it turns back once it moves, s."""

MOVING = 0.1
"""Speed from which a goal is kept up with; slower ones are caught up with, m/s."""

HORIZON = 2.0
"""A robot that keeps up with a goal needs its way free for so long, s."""


@dataclass(frozen=True)
class Targets:
    """Goal of each robot's own task; robots without one have ``busy`` False.

    Attributes:
        busy: Robots with a task, shape (N,).
        points: Goal points, m, shape (N, 3); NaN heights mean "any".
        velocities: Their velocities, m/s, shape (N, 3).
        facing: Headings to take, rad, shape (N,); NaN: any.
        pace: Share of the cruising speed, shape (N,).
        tolerance: Distance at which a robot stands, m, shape (N,).
    """

    busy: np.ndarray
    points: np.ndarray
    velocities: np.ndarray
    facing: np.ndarray
    pace: np.ndarray
    tolerance: np.ndarray


@dataclass(frozen=True)
class Course:
    """What the safe-control QP is asked for.

    Attributes:
        away: Unit vector from where to steer to the robot, shape (N, 3).
        demand: Closing speed demanded, m/s, shape (N,); 0: no task row.
        preferred: Preferred commands, shape (N, 4).
        to_goal: Unit vector from the robot along its way to the goal, shape (N, 3).
        to_corner: Distance to where to steer now, m, shape (N,).
        distance: Way to the goal, m, shape (N,); 0 without one.
        exact: Robots that keep up with a moving goal, shape (N,): their preferred
            commands already are the way demanded, so no task row is needed.
    """

    away: np.ndarray
    demand: np.ndarray
    preferred: np.ndarray
    to_goal: np.ndarray
    to_corner: np.ndarray
    distance: np.ndarray
    exact: np.ndarray


def offsets(model: Model, poses: np.ndarray, points: np.ndarray, goals: np.ndarray) -> np.ndarray:
    """Give vectors from robots to goals; the height counts only for robots that fly.

    Args:
        model: The team.
        poses: Poses, shape (N, 4).
        points: Control points, m, shape (N, 3).
        goals: Goal points, m, shape (N, 3) or (N, M, 3); NaN height: any.

    Returns:
        Offsets, m, of the shape of ``goals``.
    """
    wide = goals.ndim == 3
    offset = goals - (points[:, None] if wide else points)
    if not model.fleet.flies.any():
        offset[..., 2] = 0.0
        return offset
    low, high = model.fleet.height_band.T
    z, middle = poses[:, 2], (low + high) / 2
    if wide:
        low, high, z, middle = (part[:, None] for part in (low, high, z, middle))
    height = goals[..., 2]
    height = np.where(np.isnan(height), middle, np.clip(height, low, high))
    flies = model.fleet.flies[:, None] if wide else model.fleet.flies
    offset[..., 2] = np.where(flies, height - z, 0.0)
    return offset


class Guidance:
    """Keeps who stands at its goal, and who is held back and turns aside.

    A robot that has reached its goal stands until it is clearly away from it
    again. One that rows hold back for long turns the way it prefers to the
    right-hand side, more the longer it lasts, and back when it moves again:
    two that meet head-on pass each other on the same side. Where that does not help,
    it begins anew, then with the left-hand side.

    Attributes:
        standing: Robots that stand at their goals, shape (N,).
        held: Time each has been held back, s, shape (N,).
        aside: Angle by which each turns aside, to the right, rad, shape (N,).
    """

    def __init__(self, robots: int) -> None:
        self.standing = np.zeros(robots, dtype=bool)
        self.held = np.zeros(robots)
        self.aside = np.zeros(robots)
        self._side = np.ones(robots)
        self._tries = np.zeros(robots)
        self._turned = np.zeros(robots)
        self._free = np.zeros(robots)

    def restart(self, robots: np.ndarray) -> None:
        """Begin anew for robots (n,) that got another goal."""
        self.standing[robots] = False
        self.held[robots] = 0.0
        self.aside[robots] = 0.0
        self._side[robots], self._tries[robots], self._turned[robots] = 1.0, 0.0, 0.0

    def course(
        self,
        model: Model,
        targets: Targets,
        poses: np.ndarray,
        points: np.ndarray,
        lead: Lead,
        settings: Settings,
    ) -> Course:
        """Give what each robot should do now, safety aside; ``lead`` of shape (N, 1)."""
        fleet = model.fleet
        offset = offsets(model, poses, points, lead.steer[:, 0])
        offset[~targets.busy] = 0.0
        distance = np.where(targets.busy, np.hypot(lead.length[:, 0], offset[:, 2]), 0.0)
        to_corner = np.linalg.norm(offset, axis=1)
        to_goal = offset / np.maximum(to_corner, 1e-9)[:, None]

        stood = self.standing
        turning = np.where(np.isfinite(targets.facing) & ~fleet.steered, 2 * fleet.ahead, 0.0)
        limit = np.where(self.standing, 1.5 * targets.tolerance + turning, targets.tolerance)
        self.standing = targets.busy & (distance <= limit) & (targets.tolerance > 0)
        # Who cannot turn on the spot must arrive as it is to stand.
        off = np.abs(np.angle(np.exp(1j * (targets.facing - poses[:, 3]))))
        self.standing &= ~(fleet.steered & (off > np.where(stood, STAYS_FACING, FACING)))

        closing = targets.pace * np.minimum(settings.gamma * distance, fleet.cruise)
        demand = closing + (to_goal * targets.velocities).sum(axis=1)
        # What no command can reach must not look as if somebody stood in the way.
        demand = np.clip(demand, 0.0, fleet.max_speed)
        demand[~targets.busy | self.standing] = 0.0

        exact = self.standing & (np.linalg.norm(targets.velocities, axis=1) > MOVING)
        if exact.any():
            wanted = targets.velocities[exact] + settings.gamma * offset[exact]
            wanted[:, 2] *= fleet.flies[exact]
            speed = np.linalg.norm(wanted, axis=1)
            to_goal[exact] = wanted / np.maximum(speed, 1e-9)[:, None]
            demand[exact] = np.minimum(speed, fleet.max_speed[exact])
            to_corner[exact] = HORIZON * demand[exact]

        away = -_turned(to_goal, -self.aside)
        preferred = self._turning(model, targets, poses)
        low, high = fleet.height_band.T
        out = np.clip(poses[:, 2], low, high) - poses[:, 2]
        # Who stands lower or higher than it may fly goes on to its band.
        climb = np.clip(settings.gamma * out, -fleet.limits[:, 2], fleet.limits[:, 2])
        preferred[:, 2] = np.where(targets.busy & fleet.flies, climb, 0.0)
        if exact.any():
            preferred[exact] = _commands(
                fleet.jacobians(poses)[exact],
                fleet.limits[exact],
                -demand[exact, None] * away[exact],
                preferred[exact],
            )
        return Course(away, demand, preferred, to_goal, to_corner, distance, exact)

    def _turning(self, model: Model, targets: Targets, poses: np.ndarray) -> np.ndarray:
        """Prefer to turn to the facing demanded, standing or able to while moving."""
        preferred = np.zeros((len(poses), 4))
        off = np.angle(np.exp(1j * (targets.facing - poses[:, 3])))
        may = targets.busy & ~model.fleet.steered & (self.standing | (model.fleet.ahead == 0))
        turn = may & (np.abs(off) > FACING_DEADBAND)
        preferred[turn, 3] = np.clip(
            TURN_GAIN * off[turn], -model.fleet.limits[turn, 3], model.fleet.limits[turn, 3]
        )
        return preferred

    def notice(
        self,
        course: Course,
        velocities: np.ndarray,
        free: np.ndarray,
        blocked: np.ndarray,
        cruise: np.ndarray,
        dt: float,
    ) -> None:
        """Learn who is held back.

        Args:
            course: What each robot should do.
            velocities: What was allowed, m/s, shape (N, 3).
            free: What robots that get up to speed slowly, must turn first, or keep up
                with a moving goal would do alone, m/s, shape (N, 3); NaN for others.
            blocked: Robots that could not go straight on now, shape (N,).
            cruise: Cruising speeds, m/s, shape (N,).
            dt: Length of the period, s.
        """
        closing = -(course.away * velocities).sum(axis=1)
        able = np.fmin(course.demand, -(course.away * free).sum(axis=1))
        held = (course.demand > SLOW * cruise) & (closing < HELD_BELOW * able)
        self.held = np.where(held, self.held + dt, 0.0)
        impatient = self.held > PATIENCE
        turn = self._side[impatient] * TURN_ASIDE * dt
        self.aside[impatient] = np.clip(self.aside[impatient] + turn, -MOST_ASIDE, MOST_ASIDE)
        self.aside[~held] *= np.exp(-dt / TURN_BACK)
        most = np.abs(self.aside) >= MOST_ASIDE - 1e-9
        self._turned = np.where(held & most, self._turned + dt, 0.0)
        stands = np.linalg.norm(velocities, axis=1) < SLOW * cruise
        long = self._turned > LONG_ASIDE * 2.0 ** np.minimum(self._tries, MOST_TRIES)
        in_vain = long & (stands | ~blocked)
        self._side[in_vain] *= -1.0
        self._tries[in_vain] += 1.0
        self.aside[in_vain] = self._turned[in_vain] = 0.0
        # Who was on its way for a while begins with the agreed side the next time.
        self._free = np.where(held, 0.0, self._free + dt)
        forgiven = self._free > FORGIVEN
        self._side[forgiven], self._tries[forgiven] = 1.0, 0.0


def _commands(
    jacobians: np.ndarray, limits: np.ndarray, wanted: np.ndarray, turning: np.ndarray
) -> np.ndarray:
    """Give the commands of least effort with G v = wanted, slower where limits demand it.

    With R = diag(1/limit²), v = R⁻¹ Gᵀ (G R⁻¹ Gᵀ)⁺ wanted. Axes that do not
    move the control point turn as asked.

    Args:
        jacobians: G, shape (n, 3, 4).
        limits: Greatest size of each command axis, shape (n, 4).
        wanted: Velocities, m/s, shape (n, 3).
        turning: Commands for the other axes, shape (n, 4).
    """
    speed = jacobians * limits[:, None, :]
    shares = np.matmul(np.linalg.pinv(speed), wanted[:, :, None])[:, :, 0]
    # All axes slow down alike: the direction stays.
    shares /= np.maximum(np.abs(shares).max(axis=1, keepdims=True), 1.0)
    return np.where(np.abs(speed).max(axis=1) > 0, shares * limits, turning)


def _turned(vectors: np.ndarray, angles: np.ndarray) -> np.ndarray:
    """Turn vectors (N, 3) by angles (N,) about the vertical, counter-clockwise."""
    cos, sin = np.cos(angles), np.sin(angles)
    x, y = vectors[:, 0], vectors[:, 1]
    return np.column_stack([cos * x - sin * y, sin * x + cos * y, vectors[:, 2]])
