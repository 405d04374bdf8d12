"""What is known in one period, before anything is decided."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from .belief.poses import Places


@dataclass(frozen=True)
class View:
    """The beliefs of one period; N robots, M tasks, F features, K capabilities.

    Attributes:
        now: Time, s.
        dt: Time since the last step, s.
        places: Where the robots are.
        poses, points: Poses (N, 4) and control points (N, 3), m and rad; zeros for
            robots never heard.
        jacobians: G_i, shape (N, 3, 4).
        health: φ, shape (N, F).
        capability: c, shape (N, K).
        suitability: a, shape (N, M).
        topics: Pose topics that tasks keep to: pose and velocity by name.
    """

    now: float
    dt: float
    places: Places
    poses: np.ndarray
    points: np.ndarray
    jacobians: np.ndarray
    health: np.ndarray
    capability: np.ndarray
    suitability: np.ndarray
    topics: Mapping[str, tuple[np.ndarray, np.ndarray]]
