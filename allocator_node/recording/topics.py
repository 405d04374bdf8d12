"""Which topics a report needs."""

from __future__ import annotations

from dataclasses import dataclass

from ..team import Team

BATTERY = "sensor_msgs/msg/BatteryState"
DIAGNOSTICS = "diagnostic_msgs/msg/DiagnosticArray"
STATUS = "diagnostic_msgs/msg/DiagnosticStatus"


@dataclass(frozen=True)
class Recorded:
    """One topic to record.

    Attributes:
        topic: Its name; a relative one is resolved by whoever subscribes.
        type: Its message type.
        latched: Whether late joiners are given what was published before.
    """

    topic: str
    type: str
    latched: bool = False


def recorded_topics(team: Team, allocator: str) -> list[Recorded]:
    """Give the topics to record.

    Args:
        team: The team.
        allocator: Full name of the allocator's node.
    """
    topics = [
        Recorded(f"{allocator}/assignments", DIAGNOSTICS, latched=True),
        Recorded(f"{allocator}/reallocations", STATUS, latched=True),
        Recorded("/diagnostics", DIAGNOSTICS),
    ]
    for robot in team.robots.values():
        if robot.pose.topic is not None:
            topics.append(Recorded(robot.pose.topic, robot.pose.type))
        topics.append(Recorded(robot.command.topic, robot.command.type))
        topics.append(Recorded(robot.battery_topic, BATTERY))
    return topics
