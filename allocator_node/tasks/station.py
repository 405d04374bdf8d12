"""Common part of the kinds whose group stands around one point."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from .base import Scene
from .places import ring, share_out


def centre_of(at: tuple[float, ...]) -> np.ndarray:
    """Give a goal point of two or three numbers as (3,); without a height it is NaN."""
    return np.array([at[0], at[1], at[2] if len(at) > 2 else np.nan])


def places_of(centre: np.ndarray, scene: Scene, before: Mapping[int, int]) -> dict[int, int]:
    """Share out the places around a centre; a group that stays the same keeps its places."""
    if len(scene.members) < 2:
        return dict.fromkeys(map(int, scene.members), 0)
    if before.keys() == set(map(int, scene.members)):
        return dict(before)
    places = ring(centre, len(scene.members), scene.spacing)
    return share_out(places, scene.members, scene.points, before)


def points_of(centre: np.ndarray, scene: Scene, taken: Mapping[int, int]) -> np.ndarray:
    """Give goal points: members their places, everybody else the centre; (3,) or (N, 3)."""
    if len(taken) < 2:
        return centre
    points = np.repeat(centre[None, :], len(scene.points), axis=0)
    places = ring(centre, len(taken), scene.spacing)
    points[list(taken)] = places[list(taken.values())]
    return points
