"""Places of a group around one point, and who takes which."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from scipy.optimize import linear_sum_assignment

KEEP = 1.0
"""Metres of way a robot must save before it changes its place: damps changes."""


def ring(centre: np.ndarray, count: int, spacing: float) -> np.ndarray:
    """Give ``count`` points ``spacing`` apart on a circle around a centre; (count, 3).

    One robot takes the centre itself.
    """
    places = np.repeat(centre[None, :], count, axis=0)
    if count > 1:
        radius = spacing / (2 * np.sin(np.pi / count))
        angles = 2 * np.pi * np.arange(count) / count
        places[:, 0] += radius * np.cos(angles)
        places[:, 1] += radius * np.sin(angles)
    return places


def share_out(
    places: np.ndarray, members: np.ndarray, points: np.ndarray, before: Mapping[int, int]
) -> dict[int, int]:
    """Give each member the place that makes the total way shortest.

    Args:
        places: Places, m, shape (n, 3).
        members: Indices of n robots.
        points: Control points of all robots, m, shape (N, 3).
        before: Robot to place so far; keeping it is worth :data:`KEEP` metres.

    Returns:
        Robot index to place index.
    """
    apart = points[members][:, None, :2] - places[None, :, :2]
    way = np.nan_to_num(np.linalg.norm(apart, axis=-1))
    for row, robot in enumerate(members):
        if before.get(int(robot), len(places)) < len(places):
            way[row, before[int(robot)]] -= KEEP
    rows, columns = linear_sum_assignment(way)
    return {int(members[row]): int(column) for row, column in zip(rows, columns, strict=True)}
