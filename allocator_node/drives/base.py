"""What a drive model must give."""

from __future__ import annotations

import abc
from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from ..team import Checked, Positive

AXES = ("vx", "vy", "vz", "wz")
"""Every command is a body-frame velocity in these axes (REP 103): m/s, m/s, m/s, rad/s."""


@dataclass(frozen=True, kw_only=True)
class Drive(Checked, abc.ABC):
    r"""Base of the drive models.

    A model says which of the four :data:`AXES` it can move in and how fast,
    and how far ahead of the axle its control point lies. With heading θ and
    look-ahead L the control point moves as ṗ = G(θ) v,

    .. math::

        G(θ) = \begin{bmatrix}
            \cos θ & -\sin θ & 0 & -L \sin θ \\
            \sin θ &  \cos θ & 0 &  L \cos θ \\
            0 & 0 & 1 & 0 \end{bmatrix}

    which is exact for each of them; an axis a model lacks has the limit zero.

    Attributes:
        max_speed: Highest speed over ground, m/s.
        cruise_speed: Speed of travel towards a goal, m/s; default ``max_speed``.
        max_acceleration: Highest speed-up, m/s²; None: as fast as it goes.
            Slowing down is never delayed.
    """

    model: ClassVar[str]
    """Name of the model in a team file."""

    round_limit: ClassVar[bool] = False
    """True where ``max_speed`` bounds the length of (vx, vy), not each of them."""

    steered: ClassVar[bool] = False
    """True where it turns only as it drives: |ω| / limit ≤ |vx| / limit."""

    max_speed: Positive
    cruise_speed: Positive | None = None
    max_acceleration: Positive | None = None

    @property
    def cruise(self) -> float:
        """Speed c of travel towards a goal, m/s, never above ``max_speed``."""
        return min(self.cruise_speed or self.max_speed, self.max_speed)

    @property
    def ahead(self) -> float:
        """Distance L of the control point ahead of the axle, m."""
        return 0.0

    @property
    def reverses(self) -> bool:
        """Whether it may drive backwards."""
        return True

    @property
    def height_band(self) -> tuple[float, float] | None:
        """Lowest and highest height it may fly at, m; None for ground robots."""
        return None

    @abc.abstractmethod
    def limits(self) -> np.ndarray:
        """Give the greatest size of each command axis, shape (4,), m/s and rad/s.

        The box −limits ≤ v ≤ limits holds v = 0, so standing is always allowed.
        """
