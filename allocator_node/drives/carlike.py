"""Steers like a car: turns only as it drives, never sideways."""

from dataclasses import dataclass

import numpy as np

from ..team import Positive
from .base import Drive


@dataclass(frozen=True, kw_only=True)
class Carlike(Drive):
    """v = (vx, ω) with |ω| ≤ |vx| / min_turn_radius; vx ≥ 0 unless it may reverse.

    The car of Dubins ("On curves of minimal length with a constraint on average
    curvature", American J. of Mathematics 79(3), 1957).

    Attributes:
        min_turn_radius: Radius of the axle's tightest turn, m.
        lookahead: Distance of the control point ahead of the axle, m.
        reverse: Whether it may drive backwards.
    """

    model = "carlike"
    steered = True

    min_turn_radius: Positive = 2.0
    lookahead: Positive = 0.5
    reverse: bool = False

    @property
    def ahead(self) -> float:
        """Distance of the control point ahead of the axle, m."""
        return self.lookahead

    @property
    def reverses(self) -> bool:
        """Whether it may drive backwards."""
        return self.reverse

    def limits(self) -> np.ndarray:
        """Give the limits of (vx, –, –, ω), shape (4,); their ratio is the turning radius."""
        return np.array([self.max_speed, 0.0, 0.0, self.max_speed / self.min_turn_radius])
