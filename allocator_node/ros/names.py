"""Names a team file holds, as names of topics."""

from __future__ import annotations

from rclpy.exceptions import NameValidationException
from rclpy.node import Node

from ..team import Team


def problems(node: Node, team: Team) -> list[str]:
    """Tell which names of a team ROS does not allow in a topic, and where they come from."""
    wanted = {f"{robot}/assigned_task": f"robot {robot!r}" for robot in team.robots}
    wanted |= {f"~/tasks/{task}/goal": f"task {task!r}" for task in team.tasks}
    for name, robot in team.robots.items():
        wanted[robot.command.topic] = f"command topic of {name}"
        wanted[robot.battery_topic] = f"battery_topic of {name}"
        if robot.pose.topic is not None:
            wanted[robot.pose.topic] = f"pose topic of {name}"
    found = []
    for topic, what in wanted.items():
        try:
            node.resolve_topic_name(topic)
        except (NameValidationException, ValueError) as error:
            reason = str(error).splitlines()[0].rstrip(":")
            found.append(
                f"{what}: ROS takes no topic named {topic!r} ({reason}); use letters, digits "
                "and underscores, and no digit first"
            )
    return found
