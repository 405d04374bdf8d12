"""Moves in every direction without turning first."""

from dataclasses import dataclass

import numpy as np

from ..team import Positive
from .base import Drive


@dataclass(frozen=True, kw_only=True)
class Holonomic(Drive):
    """v = (vx, vy, ω); the control point is the middle of the robot.

    Attributes:
        max_turn_rate: Highest turn rate, rad/s.
    """

    model = "holonomic"
    round_limit = True

    max_turn_rate: Positive = 1.5

    def limits(self) -> np.ndarray:
        """Give the limits of (vx, vy, –, ω), shape (4,)."""
        return np.array([self.max_speed, self.max_speed, 0.0, self.max_turn_rate])
