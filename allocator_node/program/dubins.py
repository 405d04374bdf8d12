"""Shortest paths of bounded curvature between poses in the plane."""

from __future__ import annotations

import numpy as np

WORDS = ("LSL", "RSR", "LSR", "RSL", "LRL", "RLR")
"""Kinds of paths: left turns, right turns and straight pieces."""

SIDES = {"L": 1.0, "S": 0.0, "R": -1.0}
"""Curvature of a piece, times the turning radius."""

TURNS = np.array([[SIDES[letter] for letter in word] for word in WORDS])
"""The same for the pieces of every word, shape (6, 3)."""

FULL = 2 * np.pi
ROUND = 1e-7
"""Turns short of a full one by less than this are none, rad."""


def dubins(starts: np.ndarray, ends: np.ndarray, radius: float) -> np.ndarray:
    """Give the pieces of the six kinds of paths that hold the shortest one.

    Dubins, "On curves of minimal length with a constraint on average curvature",
    American J. of Mathematics 79(3), 1957; in closed form: Shkel and Lumelsky,
    "Classification of the Dubins set", Robotics and Autonomous Systems 34(4), 2001.

    Args:
        starts: x, y (m), heading (rad), shape (..., 3).
        ends: The same at the other end, shape (..., 3).
        radius: Turning radius, m.

    Returns:
        Lengths of the three pieces in the order of :data:`WORDS`, m, shape
        (..., 6, 3); inf where there is no such path.
    """
    offset = (ends - starts)[..., :2] / radius
    d = np.hypot(offset[..., 0], offset[..., 1])
    bearing = np.arctan2(offset[..., 1], offset[..., 0])
    a, b = starts[..., 2] - bearing, ends[..., 2] - bearing
    # Mirrored at the line from start to end, left is right.
    pieces = [part for kind in (_lsl, _lsr, _lrl) for part in (kind(d, a, b), kind(d, -a, -b))]
    return radius * np.stack(pieces, axis=-2)


def _turn(angle: np.ndarray) -> np.ndarray:
    angle = np.mod(angle, FULL)
    return np.where(angle > FULL - ROUND, 0.0, angle)


def _pieces(first: np.ndarray, second: np.ndarray, third: np.ndarray) -> np.ndarray:
    pieces = np.stack([_turn(first), second, _turn(third)], axis=-1)
    return np.where(np.isfinite(pieces.sum(axis=-1, keepdims=True)), pieces, np.inf)


def _lsl(d: np.ndarray, a: np.ndarray, b: np.ndarray) -> np.ndarray:
    x, y = d + np.sin(a) - np.sin(b), np.cos(b) - np.cos(a)
    along = np.arctan2(y, x)
    return _pieces(along - a, np.hypot(x, y), b - along)


def _lsr(d: np.ndarray, a: np.ndarray, b: np.ndarray) -> np.ndarray:
    x, y = d + np.sin(a) + np.sin(b), -np.cos(a) - np.cos(b)
    with np.errstate(invalid="ignore"):
        straight = np.sqrt(x**2 + y**2 - 4)
    along = np.arctan2(y, x) + np.arctan2(2.0, straight)
    return _pieces(along - a, straight, along - b)


def _lrl(d: np.ndarray, a: np.ndarray, b: np.ndarray) -> np.ndarray:
    x, y = d + np.sin(a) - np.sin(b), np.cos(b) - np.cos(a)
    with np.errstate(invalid="ignore"):
        middle = FULL - 2 * np.arcsin(np.hypot(x, y) / 4)
    first = np.arctan2(y, x) - a + middle / 2
    return _pieces(first, middle, b - a - first + middle)


def traced(
    start: np.ndarray, pieces: list[tuple[float, float]], step: float
) -> np.ndarray:
    """Give poses along arcs and straight pieces.

    Args:
        start: x, y (m), heading (rad), shape (3,).
        pieces: Curvature, 1/m, and length, m, of each; a negative length backwards.
        step: Greatest distance of two poses, m.

    Returns:
        Poses, start and end included, shape (P, 3).
    """
    here = np.asarray(start, dtype=float)
    path = [here[None]]
    for curvature, length in pieces:
        count = int(np.ceil(abs(length) / step))
        if count == 0:
            continue
        s = length * np.arange(1, count + 1) / count
        half = 0.5 * curvature * s
        chord = s * np.sinc(half / np.pi)
        poses = np.column_stack([
            here[0] + chord * np.cos(here[2] + half),
            here[1] + chord * np.sin(here[2] + half),
            here[2] + curvature * s,
        ])
        path.append(poses)
        here = poses[-1]
    return np.concatenate(path)


def sampled(
    starts: np.ndarray, curvatures: np.ndarray, lengths: np.ndarray, count: int
) -> np.ndarray:
    """Give poses at equal distances along many paths at once.

    Args:
        starts: x, y (m), heading (rad), shape (n, 3).
        curvatures: Curvatures of the pieces, 1/m, shape (n, k).
        lengths: Their lengths, m, shape (n, k).
        count: Poses on each path, its end included.

    Returns:
        Poses, shape (n, count, 3).
    """
    left = lengths.sum(axis=1)[:, None] * np.arange(1, count + 1) / count
    x, y, heading = (np.repeat(part[:, None], count, axis=1) for part in starts.T)
    for curvature, length in zip(curvatures.T[..., None], lengths.T[..., None], strict=True):
        s = np.minimum(left, length)
        left = left - s
        half = 0.5 * curvature * s
        chord = s * np.sinc(half / np.pi)
        x, y = x + chord * np.cos(heading + half), y + chord * np.sin(heading + half)
        heading = heading + 2 * half
    return np.stack([x, y, heading], axis=-1)
