"""All drives of a team as arrays, so that no period loops over robots."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from .base import AXES, Drive


def level(apart: np.ndarray, fly: np.ndarray, clearance: float) -> np.ndarray:
    """Tell which pairs of robots are at heights at which they can meet.

    On the ground all are: heights there are what two localizations make of them.

    Args:
        apart: Height differences, m.
        fly: Whether one of the pair flies.
        clearance: Height difference from which flying robots and others do not meet, m.
    """
    return (np.abs(apart) < clearance) | ~fly


class Fleet:
    """Drives of N robots as arrays.

    Attributes:
        limits: Greatest size of each command axis, shape (N, 4).
        cruise: Cruising speed c_i, m/s, shape (N,).
        max_speed: Highest speed over ground, m/s, shape (N,).
        fastest: Highest speed in space, m/s, and turn rate, rad/s, shape (N, 2).
        ahead: Distance of the control point ahead of the axle, m, shape (N,).
        round_limit: Where the length of (vx, vy) is bounded, shape (N,).
        steered: Which turn only as they drive, shape (N,).
        reverses: Which may drive backwards, shape (N,).
        speed_up: Highest acceleration, m/s², inf where unlimited, shape (N,).
        height_band: Lowest and highest height, m, shape (N, 2); NaN on the ground.
        flies: Which fly, shape (N,).
    """

    def __init__(self, drives: Sequence[Drive]) -> None:
        self.limits = np.array([drive.limits() for drive in drives]).reshape(-1, len(AXES))
        self.cruise = np.array([drive.cruise for drive in drives])
        self.max_speed = np.array([drive.max_speed for drive in drives])
        self.fastest = np.column_stack(
            [np.hypot(self.max_speed, self.limits[:, 2]), self.limits[:, 3]]
        )
        self.ahead = np.array([drive.ahead for drive in drives])
        self.round_limit = np.array([drive.round_limit for drive in drives], dtype=bool)
        self.steered = np.array([drive.steered for drive in drives], dtype=bool)
        self.reverses = np.array([drive.reverses for drive in drives], dtype=bool)
        self.speed_up = np.array([drive.max_acceleration or np.inf for drive in drives])
        self.height_band = np.array(
            [drive.height_band or (np.nan, np.nan) for drive in drives]
        ).reshape(-1, 2)
        self.flies = np.isfinite(self.height_band[:, 0])

    def control_points(self, poses: np.ndarray) -> np.ndarray:
        """Give the control points p of poses (N, 4) = x, y, z, heading; shape (N, 3)."""
        points = poses[:, :3].copy()
        points[:, 0] += self.ahead * np.cos(poses[:, 3])
        points[:, 1] += self.ahead * np.sin(poses[:, 3])
        return points

    def jacobians(self, poses: np.ndarray) -> np.ndarray:
        """Give G with ṗ = G v for poses (N, 4); shape (N, 3, 4)."""
        cos, sin = np.cos(poses[:, 3]), np.sin(poses[:, 3])
        jacobians = np.zeros((len(poses), 3, 4))
        jacobians[:, 0, 0] = jacobians[:, 1, 1] = cos
        jacobians[:, 1, 0], jacobians[:, 0, 1] = sin, -sin
        jacobians[:, 0, 3], jacobians[:, 1, 3] = -self.ahead * sin, self.ahead * cos
        jacobians[:, 2, 2] = 1.0
        return jacobians

    def command_box(
        self,
        last: np.ndarray,
        dt: float,
        heights: np.ndarray,
        gain: float,
        gear: np.ndarray,
    ) -> tuple[np.ndarray, np.ndarray]:
        """Give the lowest and highest command of this period, each (N, 4).

        Speeding up is bounded by ``speed_up``, slowing down is free, and a
        flying robot's climb is bounded so that the height band's barrier
        ḣ ≥ −gain · h holds. Both boxes hold v = 0.

        Args:
            last: Commands of the period before, shape (N, 4).
            dt: Time since then, s.
            heights: z of the robots, m, shape (N,).
            gain: Barrier gain γ_s, 1/s.
            gear: 1 where a steered robot is to drive forward, −1 backward, shape (N,).
        """
        highest, lowest = self.limits.copy(), -self.limits
        step = (self.speed_up * dt)[:, None]
        moving = slice(0, 3)
        np.minimum(
            highest[:, moving], np.maximum(last[:, moving], 0) + step, out=highest[:, moving]
        )
        np.maximum(lowest[:, moving], np.minimum(last[:, moving], 0) - step, out=lowest[:, moving])
        if self.flies.any():
            low, high = self.height_band[self.flies].T
            z = heights[self.flies]
            lowest[self.flies, 2] = np.maximum(
                lowest[self.flies, 2], np.minimum(0.0, -gain * (z - low))
            )
            highest[self.flies, 2] = np.minimum(
                highest[self.flies, 2], np.maximum(0.0, gain * (high - z))
            )
        lowest[gear > 0, 0] = 0.0
        highest[gear < 0, 0] = 0.0
        return lowest, highest

    def clipped(self, commands: np.ndarray) -> np.ndarray:
        """Give what robots make of commands (N, 4) beyond what they can do, (N, 4)."""
        speed = np.hypot(commands[:, 0], commands[:, 1])
        share = self.max_speed / np.maximum(speed, self.max_speed)
        commands = commands.copy()
        commands[self.round_limit, :2] *= share[self.round_limit, None]
        commands = np.clip(commands, -self.limits, self.limits)
        ahead_only = self.steered & ~self.reverses
        commands[ahead_only, 0] = np.maximum(commands[ahead_only, 0], 0.0)
        turn = self.turn_limits(commands[:, 0])
        commands[:, 3] = np.clip(commands[:, 3], -turn, turn)
        return commands

    def turn_limits(self, speed: np.ndarray) -> np.ndarray:
        """Give the highest turn rate at forward speeds (N,), rad/s, shape (N,)."""
        share = np.where(self.steered, np.abs(speed) / self.limits[:, 0], 1.0)
        return share * self.limits[:, 3]
