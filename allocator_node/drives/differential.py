"""Two driven wheels or tracks on one axle: forward speed and turn rate."""

from dataclasses import dataclass

import numpy as np

from ..team import Positive
from .base import Drive


@dataclass(frozen=True, kw_only=True)
class Differential(Drive):
    """v = (vx, ω). The point ``lookahead`` ahead of the axle moves freely.

    Look-ahead (feedback) linearization of the unicycle: d'Andréa-Novel,
    Campion and Bastin, "Control of nonholonomic wheeled mobile robots by state
    feedback linearization", Int. J. Robotics Research 14(6), 1995.

    Attributes:
        max_turn_rate: Highest turn rate, rad/s.
        lookahead: Distance of the control point ahead of the axle, m.
    """

    model = "differential"

    max_turn_rate: Positive = 1.5
    lookahead: Positive = 0.25

    @property
    def ahead(self) -> float:
        """Distance of the control point ahead of the axle, m."""
        return self.lookahead

    def limits(self) -> np.ndarray:
        """Give the limits of (vx, –, –, ω), shape (4,)."""
        return np.array([self.max_speed, 0.0, 0.0, self.max_turn_rate])
