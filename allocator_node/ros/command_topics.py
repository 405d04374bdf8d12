"""Commands out: what makes robots move, and what makes them stand."""

from __future__ import annotations

import time
from dataclasses import dataclass

import numpy as np
from builtin_interfaces.msg import Time
from geometry_msgs.msg import PoseStamped, Twist, TwistStamped
from rclpy.duration import Duration
from rclpy.node import Node
from rclpy.publisher import Publisher
from std_msgs.msg import Header

from ..decision import Decision, goal_pose
from ..team import Team
from .conversions import pose_message, stamp_of, twist_of
from .qos import COMMANDS

COMMAND_TYPES: dict[str, type] = {
    "geometry_msgs/msg/TwistStamped": TwistStamped,
    "geometry_msgs/msg/Twist": Twist,
    "geometry_msgs/msg/PoseStamped": PoseStamped,
}

DELIVERY = 0.3
"""How long to wait for the last commands to be delivered, s."""


class CommandTopics:
    """Publishers of the command topics of a team; they exist only while it may drive."""

    def __init__(self, node: Node, team: Team) -> None:
        """Start to publish; check with :func:`other_publishers` first."""
        self._node = node
        self._frame = team.frame
        self._robots = tuple(team.robots)
        self._makers = [_MAKERS[robot.command.type] for robot in team.robots.values()]
        self._publishers: list[Publisher] = [
            node.create_publisher(
                COMMAND_TYPES[robot.command.type], robot.command.topic, COMMANDS
            )
            for robot in team.robots.values()
        ]
        count = len(self._robots)
        self._poses, self._goals = np.full((count, 4), np.nan), np.full((count, 3), np.nan)
        self._facing = np.full(count, np.nan)

    def send(self, decision: Decision, hold: bool = False) -> list[str]:
        """Send the commands of a decision.

        With ``hold``, robots that navigate by themselves are sent to where they are;
        silent ones to where they were when they fell silent. Those whose pose jumped keep
        the goal they have: neither of their places can be told from the other.

        Returns:
            Robots whose command was not finite; they were told to stand.
        """
        steady = decision.steady
        self._poses[steady] = decision.poses[steady]
        self._goals[steady | ~decision.heard] = decision.goals[steady | ~decision.heard]
        self._facing[steady] = decision.facing[steady]
        broken = ~np.isfinite(decision.commands).all(axis=1)
        commands = np.where(broken[:, None], 0.0, decision.commands)
        goals = self._goals
        if hold or broken.any():
            goals = np.where((broken | hold)[:, None], np.nan, goals)
        self._publish(commands, goals, self._facing, decision.time)
        return [decision.robots[i] for i in np.flatnonzero(broken)]

    def stand(self) -> None:
        """Tell every robot to stand."""
        count = len(self._robots)
        now = self._node.get_clock().now().nanoseconds * 1e-9
        nowhere = np.full((count, 3), np.nan)
        self._publish(np.zeros((count, 4)), nowhere, nowhere[:, 0], now)

    def _publish(
        self, commands: np.ndarray, goals: np.ndarray, facing: np.ndarray, now: float
    ) -> None:
        stamp = stamp_of(now)
        for i, (robot, make) in enumerate(zip(self._robots, self._makers, strict=True)):
            order = Order(stamp, commands[i], goals[i], facing[i], self._poses[i])
            message = make(order, robot, self._frame)
            if message is not None:
                self._publishers[i].publish(message)

    def deliver(self) -> None:
        """Wait until the commands sent have arrived, at most :data:`DELIVERY` s in all."""
        end = time.monotonic() + DELIVERY
        for publisher in self._publishers:
            left = max(end - time.monotonic(), 0.001)
            publisher.wait_for_all_acked(Duration(seconds=left))

    def close(self) -> None:
        """Stop publishing."""
        for publisher in self._publishers:
            self._node.destroy_publisher(publisher)


def other_publishers(node: Node, team: Team, own: int) -> list[str]:
    """Tell who publishes on the command topics of a team beside this node.

    Args:
        node: The node that asks.
        team: The team.
        own: Publishers this node itself has on each of the topics.
    """
    found = []
    for robot in team.robots.values():
        topic = node.resolve_topic_name(robot.command.topic)
        publishers = node.get_publishers_info_by_topic(topic)
        if len(publishers) > own:
            me = (node.get_name(), node.get_namespace())
            names = [
                f"{info.node_namespace.rstrip('/')}/{info.node_name}"
                for info in publishers
                if not own or (info.node_name, info.node_namespace) != me
            ] or [f"another node named {node.get_fully_qualified_name()}"]
            found.append(f"{', '.join(sorted(names))} publishes on {topic}")
    return found


@dataclass(frozen=True)
class Order:
    """What one robot is told.

    Attributes:
        stamp: When.
        command: Body velocity, shape (4,).
        goal: Goal point, m, shape (3,); NaN: stand.
        facing: Heading to take there, rad; NaN: any.
        pose: Where it is, shape (4,).
    """

    stamp: Time
    command: np.ndarray
    goal: np.ndarray
    facing: float
    pose: np.ndarray


def _twist_stamped(order: Order, robot: str, frame: str) -> TwistStamped:
    header = Header(stamp=order.stamp, frame_id=f"{robot}/base_link")
    return TwistStamped(header=header, twist=twist_of(order.command))


def _twist(order: Order, robot: str, frame: str) -> Twist:
    return twist_of(order.command)


def _goal(order: Order, robot: str, frame: str) -> PoseStamped | None:
    """Give the goal; a robot with its own navigation stands by being sent to where it is."""
    if np.isnan(order.pose).any():
        return None
    target = goal_pose(order.pose, order.goal, order.facing)
    return PoseStamped(
        header=Header(stamp=order.stamp, frame_id=frame), pose=pose_message(target)
    )


_MAKERS = {
    "geometry_msgs/msg/TwistStamped": _twist_stamped,
    "geometry_msgs/msg/Twist": _twist,
    "geometry_msgs/msg/PoseStamped": _goal,
}
