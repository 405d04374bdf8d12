"""Where something is that a task keeps to, and how it carries what is beside it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..team import Point


@dataclass(frozen=True)
class Located:
    """Where a target is now.

    Attributes:
        at: x, y, z, m, shape (3,); a NaN height means "any".
        heading: Heading, rad.
        velocity: m/s three times, rad/s, shape (4,).
    """

    at: np.ndarray
    heading: float
    velocity: np.ndarray

    @classmethod
    def fixed(cls, point: Point) -> Located:
        """Give a point of the site, with the axes of the site."""
        return cls(np.array([*point, np.nan]), 0.0, np.zeros(4))

    def carried(self, offset: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Give where points of the target's frame are, and how they move.

        A point at r from the origin of a frame that turns at ω moves at
        ṗ + ω × r (Lynch and Park, "Modern Robotics", 2017, section 3.3.2).

        Args:
            offset: Points in the target's frame, m, shape (..., 2).

        Returns:
            Points, m, and velocities, m/s, each of shape (..., 3).
        """
        cos, sin = np.cos(self.heading), np.sin(self.heading)
        arm = offset @ np.array([[cos, sin], [-sin, cos]])
        points = np.empty((*offset.shape[:-1], 3))
        points[..., :2], points[..., 2] = self.at[:2] + arm, self.at[2]
        velocities = np.zeros_like(points)
        velocities[..., 0] = self.velocity[0] - self.velocity[3] * arm[..., 1]
        velocities[..., 1] = self.velocity[1] + self.velocity[3] * arm[..., 0]
        return points, velocities
