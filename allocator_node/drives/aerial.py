"""Flies: every direction, and height within a band."""

from dataclasses import dataclass

import numpy as np

from ..team import NonNegative, Positive
from .base import Drive


@dataclass(frozen=True, kw_only=True)
class Aerial(Drive):
    """v = (vx, vy, vz, ω). Take-off and landing are the flight controller's.

    Attributes:
        max_climb: Highest vertical speed, m/s.
        max_turn_rate: Highest turn rate, rad/s.
        height: Lowest and highest height in the site frame, m. A goal without
            a height is flown to in the middle of the band.
    """

    model = "aerial"
    round_limit = True

    max_climb: Positive = 1.0
    max_turn_rate: Positive = 1.5
    height: tuple[NonNegative, Positive] = (4.0, 8.0)

    @property
    def height_band(self) -> tuple[float, float]:
        """Lowest and highest height, m."""
        return self.height

    def limits(self) -> np.ndarray:
        """Give the limits of (vx, vy, vz, ω), shape (4,)."""
        return np.array([self.max_speed, self.max_speed, self.max_climb, self.max_turn_rate])
