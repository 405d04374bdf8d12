"""Stopping distance from speed, period and latency, against the configured margin."""

from __future__ import annotations

from dataclasses import dataclass
from math import sqrt

from ..settings import Settings
from ..team import Team


@dataclass(frozen=True)
class Stopping:
    """How far one robot goes on before it stands.

    Attributes:
        robot: Name.
        speed: Highest speed, m/s.
        reaction_m: Way until a new command takes effect, m.
        braking_m: Way from then on, m; 0 where the team file gives no acceleration.
        margin_m: What is kept free beside the bodies, m.
        safe_speed: Highest speed whose whole way stays within the margin, m/s.
    """

    robot: str
    speed: float
    reaction_m: float
    braking_m: float
    margin_m: float
    safe_speed: float

    @property
    def within(self) -> bool:
        """Whether the robot stands before the margin is used up."""
        return self.reaction_m + self.braking_m <= self.margin_m + 1e-9


def stopping(team: Team, settings: Settings, period: float, latency: float) -> list[Stopping]:
    """Give the stopping distance of each robot.

    The form is that of ISO 13855 (from memory): the way is speed times the time the
    whole chain takes to react, here one period and the latency, and then the braking
    distance v² / 2a, with ``max_acceleration`` taken for the deceleration too.

    Args:
        team: The team.
        settings: Gives the margin.
        period: Time between two decisions, s.
        latency: From a pose to the robot's answer: messages, drivers, actuators, s.
    """
    lag = period + latency
    found = []
    for robot in team.robots.values():
        speed, brake = robot.drive.max_speed, robot.drive.max_acceleration
        margin = settings.margin
        if brake is None:
            braking, safe = 0.0, margin / lag if lag > 0 else float("inf")
        else:
            braking = speed**2 / (2 * brake)
            # The positive root of v·lag + v²/2a = margin.
            safe = brake * (sqrt(lag**2 + 2 * margin / brake) - lag)
        found.append(
            Stopping(robot.name, speed, speed * lag, braking, margin, min(safe, speed))
        )
    return found
