"""Write down what is heard: python3 overheard.py ROBOT … > lines of JSON.

Each line has the time (monotonic, s) and one of: ``pose`` (robot, x, y), ``command``
(robot, speed) and ``change`` (task, before, after, cause).
"""

from __future__ import annotations

import json
import math
import sys
import time

import rclpy
from diagnostic_msgs.msg import DiagnosticStatus
from geometry_msgs.msg import TwistStamped
from nav_msgs.msg import Odometry
from rclpy.qos import DurabilityPolicy, QoSProfile, qos_profile_sensor_data


def say(kind: str, **what: object) -> None:
    """Write a line."""
    print(json.dumps({"t": time.monotonic(), "kind": kind, **what}), flush=True)


def main() -> None:
    """Listen until killed."""
    rclpy.init()
    node = rclpy.create_node("overheard")

    def listen(robot: str) -> None:
        def pose(message: Odometry) -> None:
            place = message.pose.pose.position
            say("pose", robot=robot, x=place.x, y=place.y)

        def command(message: TwistStamped) -> None:
            linear = message.twist.linear
            say("command", robot=robot, speed=math.hypot(linear.x, linear.y))

        node.create_subscription(Odometry, f"/{robot}/odom", pose, qos_profile_sensor_data)
        node.create_subscription(
            TwistStamped, f"/{robot}/cmd_vel", command, qos_profile_sensor_data
        )

    def changed(status: DiagnosticStatus) -> None:
        say("change", **{pair.key: pair.value for pair in status.values})

    for robot in sys.argv[1:]:
        listen(robot)
    late = QoSProfile(depth=100, durability=DurabilityPolicy.TRANSIENT_LOCAL)
    node.create_subscription(DiagnosticStatus, "/allocator/reallocations", changed, late)
    rclpy.spin(node)


if __name__ == "__main__":
    main()
