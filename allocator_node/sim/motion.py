"""Exact motion of rigid bodies under constant body-frame velocities."""

from __future__ import annotations

import numpy as np


def advance(poses: np.ndarray, body: np.ndarray, dt: float) -> np.ndarray:
    r"""Give the poses after a time dt of constant body velocities.

    With a = ω dt, the planar displacement in the frame of the start pose is

    .. math::

        dt \begin{bmatrix} \frac{\sin a}{a} & -\frac{1-\cos a}{a} \\
                           \frac{1-\cos a}{a} & \frac{\sin a}{a} \end{bmatrix}
        \begin{bmatrix} v_x \\ v_y \end{bmatrix}

    the exponential map of SE(2) (Lynch and Park, "Modern Robotics", 2017,
    section 3.3); a straight line for ω = 0, an arc otherwise.

    Args:
        poses: x, y, z (m), heading (rad), shape (N, 4).
        body: vx, vy, vz (m/s), ω (rad/s) in the body frame (REP 103), shape (N, 4).
        dt: Time, s.

    Returns:
        Poses, shape (N, 4); the heading lies in (−π, π].
    """
    half = 0.5 * body[:, 3] * dt
    along = np.sinc(2 * half / np.pi)
    across = np.sin(half) * np.sinc(half / np.pi)
    moved = np.column_stack([
        body[:, 0] * along - body[:, 1] * across,
        body[:, 0] * across + body[:, 1] * along,
        body[:, 2],
        body[:, 3],
    ]) * dt
    after = poses.copy()
    after[:, :2] += turned(moved[:, :2], poses[:, 3])
    after[:, 2:] += moved[:, 2:]
    after[:, 3] = wrapped(after[:, 3])
    return after


def turned(vectors: np.ndarray, angles: np.ndarray) -> np.ndarray:
    """Turn plane vectors (N, 2) counter-clockwise by angles (N,), rad."""
    cos, sin = np.cos(angles), np.sin(angles)
    x, y = vectors.T
    return np.column_stack([cos * x - sin * y, sin * x + cos * y])


def wrapped(angles: np.ndarray) -> np.ndarray:
    """Give angles in (−π, π]."""
    return np.pi - np.mod(np.pi - angles, 2 * np.pi)
