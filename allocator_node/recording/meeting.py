"""How near robots came to each other, from poses that were told at times of their own."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..drives import Fleet, level
from ..settings import Settings
from ..sim.record import TRACE_PERIOD
from ..sim.site import Site
from ..team import Team

GRID = 0.2
"""Time between two looks, s."""

LONGEST_GAP = 2.0
"""Between two poses further apart in time a robot is nowhere, s."""

Rows = dict[str, list[tuple[float, ...]]]


def nearest_rows(
    poses: Rows, team: Team | None, seconds: float
) -> tuple[list[list[Any]], dict[str, list[list[float]]], int | None]:
    """Put all poses on one time grid.

    Args:
        poses: Robot to rows of time (s), x, y, z (m), heading (rad).
        team: The team; None: bodies are taken for points, bounds are not known.
        seconds: Length of the run, s.

    Returns:
        The rows ``nearest`` and ``paths`` of run.json, and how often a robot was out of
        bounds on the grid (None: not known).
    """
    names = [name for name in (team.robots if team else poses) if poses.get(name)]
    times = np.arange(0.0, max(seconds, GRID), GRID)
    placed = np.stack([_placed(poses[name], times) for name in names]) if names else (
        np.zeros((0, len(times), 4))
    )
    every = round(TRACE_PERIOD / GRID)
    paths = {
        name: [
            [round(float(t), 3), *np.round(pose, 4).tolist()]
            for t, pose in zip(times[::every], rows[::every], strict=True)
            if np.isfinite(pose).all()
        ]
        for name, rows in zip(names, placed, strict=True)
    }
    nearest = _nearest(names, placed, times, team, every)
    return nearest, paths, _outside(names, placed, team)


def _placed(rows: list[tuple[float, ...]], times: np.ndarray) -> np.ndarray:
    """Give the poses at times, (T, 4), between the told ones; NaN in gaps."""
    told = np.array(rows)
    told = told[np.argsort(told[:, 0], kind="stable")]
    after = np.searchsorted(told[:, 0], times)
    before = np.clip(after - 1, 0, len(told) - 1)
    after = np.clip(after, 0, len(told) - 1)
    gap = told[after, 0] - told[before, 0]
    poses = np.stack([np.interp(times, told[:, 0], told[:, c]) for c in range(1, 4)], axis=1)
    heading = np.interp(times, told[:, 0], np.unwrap(told[:, 4]))
    poses = np.column_stack([poses, np.angle(np.exp(1j * heading))])
    outside = (times < told[0, 0] - GRID) | (times > told[-1, 0] + LONGEST_GAP)
    poses[outside | (gap > LONGEST_GAP)] = np.nan
    return poses


def _nearest(
    names: list[str], placed: np.ndarray, times: np.ndarray, team: Team | None, every: int
) -> list[list[Any]]:
    if len(names) < 2:
        return []
    radii = np.array([team.robots[name].radius if team else 0.0 for name in names])
    first, second = np.triu_indices(len(names), 1)
    reach = radii[first] + radii[second]
    flies = np.ones(len(names), dtype=bool)
    if team:
        flies = Fleet([team.robots[name].drive for name in names]).flies
    fly = flies[first] | flies[second]
    clearance = Settings().height_clearance
    best: list[list[Any]] = []
    for begin in range(0, len(times), every):
        block = placed[:, begin : begin + every]
        apart = block[first] - block[second]
        gaps = np.hypot(apart[..., 0], apart[..., 1]) - reach[:, None]
        meet = level(apart[..., 2], fly[:, None], clearance)
        gaps[~np.isfinite(gaps) | ~meet] = np.inf
        pair, step = np.unravel_index(int(np.argmin(gaps)), gaps.shape)
        if np.isfinite(gaps[pair, step]):
            i, j = int(first[pair]), int(second[pair])
            middle = (block[i, step, :2] + block[j, step, :2]) / 2
            best.append([
                round(float(times[begin + step]), 3), round(float(gaps[pair, step]), 4),
                *sorted((names[i], names[j])), *np.round(middle, 3).tolist(),
            ])  # fmt: skip
    return best


def _outside(names: list[str], placed: np.ndarray, team: Team | None) -> int | None:
    if team is None or list(team.robots) != names:
        return None
    site = Site(team, Settings().height_clearance)
    known = np.isfinite(placed[..., 0])
    count = 0
    for step in range(placed.shape[1]):
        here = known[:, step]
        if here.any():
            poses = np.where(here[:, None], placed[:, step], 0.0)
            count += int(np.count_nonzero(site.outside(poses)[0] & here))
    return count
