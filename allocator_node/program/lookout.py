"""Cars see early whom they will meet: they need room to turn aside."""

from __future__ import annotations

import numpy as np

AHEAD = 6.0
"""How far a car looks ahead, s."""

SPARE = 0.3
"""Distance left beside the one it meets, beyond what the pair must keep, m."""

LEFT = 0.4
"""One met further to the right than this share of the distance kept is passed on its right."""

MOST = np.radians(70)
"""Most it turns aside."""


def lookout(
    car: int,
    way: float,
    speed: float,
    points: np.ndarray,
    velocities: np.ndarray,
    keep: np.ndarray,
    others: np.ndarray,
) -> float:
    """Give the angle by which a car turns aside for the next robot it would meet, rad.

    Where both go on as they do, they come nearest after t = −Δp·Δv / |Δv|². If that is
    too near and the other comes towards the car or stands, the car turns aside until it
    would pass: to the right-hand side, or to the left of one that is well to the right.
    Seen from the other one it is the same side, so two cars that meet agree.

    Args:
        car: Its index.
        way: Direction in which it wants to go on, rad.
        speed: Its speed, m/s.
        points: Control points, m, shape (N, 3).
        velocities: Velocities of all robots, m/s, shape (N, 3).
        keep: Distance the car keeps from each other robot, m, shape (N,).
        others: Robots that matter: known, at its height, not itself, shape (N,).

    Returns:
        Positive to the right; 0 where nobody is met.
    """
    forward = np.array([np.cos(way), np.sin(way)])
    left = np.array([-forward[1], forward[0]])
    offset = points[:, :2] - points[car, :2]
    relative = velocities[:, :2] - speed * forward
    square = np.maximum((relative**2).sum(axis=1), 1e-9)
    when = np.clip(-(offset * relative).sum(axis=1) / square, 0.0, AHEAD)
    nearest = offset + when[:, None] * relative
    met = (
        others
        & (when > 0)
        & (np.hypot(*nearest.T) < keep + SPARE)
        & (velocities[:, :2] @ forward < 0.3 * speed)
        & (offset @ forward > 0)
    )
    if not met.any():
        return 0.0
    other = np.flatnonzero(met)[when[met].argmin()]
    beside = float(nearest[other] @ left)
    room = keep[other] + SPARE
    shift = room - beside if beside > -LEFT * room else -room - beside
    return float(np.clip(np.arctan2(shift, offset[other] @ forward), -MOST, MOST))
