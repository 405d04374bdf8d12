"""A simple navigation of its own, for simulated robots that are sent goals."""

from __future__ import annotations

from math import atan2, cos, hypot, sin

import numpy as np

from ..drives import Drive

GAIN = 1.0
"""Speed for each metre to go, 1/s."""

NEAR, STEERED_NEAR = 0.1, 0.3
"""Distance at which a robot stands; the same for one that cannot turn on the spot, m."""

AIM = 0.5
"""A robot that can turn on the spot aims this well before it drives, rad."""


def steer(drive: Drive, pose: np.ndarray, goal: np.ndarray) -> np.ndarray:
    """Give the body velocity (4,) from a pose to a goal: x, y, z (m), heading (rad), both (4,)."""
    limits = drive.limits()
    x, y, z = (goal - pose)[:3]
    away = hypot(x, y)
    climb = GAIN * z
    if away <= (STEERED_NEAR if drive.steered else NEAR):
        turn = 0.0 if drive.steered else GAIN * _wrapped(goal[3] - pose[3])
        command = np.array([0.0, 0.0, climb, turn])
    else:
        aim = _wrapped(atan2(y, x) - pose[3])
        speed = min(GAIN * away, drive.cruise)
        if drive.steered:
            command = np.array([speed, 0.0, 0.0, _steered_turn(drive, away, aim, speed)])
        elif limits[1] > 0:
            command = np.array([speed * cos(aim), speed * sin(aim), climb, 2 * GAIN * aim])
        else:
            ahead = speed * cos(aim) if abs(aim) < AIM else 0.0
            command = np.array([ahead, 0.0, climb, 2 * GAIN * aim])
    return np.clip(command, -limits, limits)


def _steered_turn(drive: Drive, away: float, aim: float, speed: float) -> float:
    """Give the turn rate, rad/s, of a robot that turns only as it drives.

    Away from a goal inside its turning circle it drives straight on.
    """
    fastest, _, _, turn = drive.limits()
    # The arc through the goal; behind the robot, the tightest one.
    curvature = 2 * sin(aim) / away
    radius = fastest / turn
    if abs(curvature) * radius > 1:
        return 0.0
    if abs(aim) > np.pi / 2:
        curvature = np.copysign(1 / radius, aim)
    return float(curvature * speed)


def _wrapped(angle: float) -> float:
    return atan2(sin(angle), cos(angle))
