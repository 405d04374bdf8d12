"""What the launch descriptions under test share: a node that looks on from outside."""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from pathlib import Path

import rclpy
import yaml
from launch.actions import IncludeLaunchDescription
from launch.substitutions import PathJoinSubstitution
from launch_ros.substitutions import FindPackageShare
from lifecycle_msgs.srv import GetState
from nav_msgs.msg import Odometry
from rcl_interfaces.msg import ParameterValue
from rcl_interfaces.srv import GetParameters
from rclpy.executors import SingleThreadedExecutor
from rclpy.qos import DurabilityPolicy, QoSProfile
from std_msgs.msg import String

TEAM_FILE = Path(__file__).parents[2] / "config" / "solar_farm.yaml"
PATIENCE = 45.0
"""Time that processes on a busy machine get to start and find each other, s."""


def included(launch_file: str, arguments: dict[str, str]) -> IncludeLaunchDescription:
    """Include a launch file of the installed package, with the example team."""
    path = PathJoinSubstitution([FindPackageShare("allocator_node"), "launch", launch_file])
    given = {"team_file": str(TEAM_FILE), **arguments}
    return IncludeLaunchDescription(path, launch_arguments=given.items())


class Watcher:
    """Asks a lifecycle node how it is, and follows the robots' tasks and poses."""

    def __init__(self, allocator: str) -> None:
        self._context = rclpy.Context()
        rclpy.init(context=self._context)
        self._node = rclpy.create_node("watcher", context=self._context)
        self._executor = SingleThreadedExecutor(context=self._context)
        self._executor.add_node(self._node)
        self._state = self._node.create_client(GetState, f"{allocator}/get_state")
        self._parameters = self._node.create_client(GetParameters, f"{allocator}/get_parameters")
        self._task: dict[str, str] = {}
        self._path: dict[str, list[tuple[float, float]]] = {}
        latched = QoSProfile(depth=1, durability=DurabilityPolicy.TRANSIENT_LOCAL)
        for robot in yaml.safe_load(TEAM_FILE.read_text())["robots"]:
            self._node.create_subscription(
                String,
                f"{robot}/assigned_task",
                lambda message, robot=robot: self._task.update({robot: message.data}),
                latched,
            )
            self._node.create_subscription(
                Odometry,
                f"{robot}/odom",
                lambda message, robot=robot: self._follow(robot, message),
                1,
            )

    def __enter__(self) -> Watcher:
        return self

    def __exit__(self, *_) -> None:
        self._executor.shutdown()
        self._node.destroy_node()
        rclpy.shutdown(context=self._context)

    def _follow(self, robot: str, message: Odometry) -> None:
        at = message.pose.pose.position
        self._path.setdefault(robot, []).append((at.x, at.y))

    def _ask(self, client, request):
        assert client.wait_for_service(PATIENCE), f"nobody serves {client.srv_name}"
        answer = client.call_async(request)
        self._executor.spin_until_future_complete(answer, PATIENCE)
        assert answer.done(), f"no answer from {client.srv_name}"
        return answer.result()

    def wait_for(self, condition: Callable[[], bool]) -> None:
        """Return once the condition holds; AssertionError if it does not in time."""
        end = time.monotonic() + PATIENCE
        while not condition():
            assert time.monotonic() < end, f"not within {PATIENCE} s; tasks were {self._task}"
            self._executor.spin_once(0.1)

    def state(self) -> str:
        """Give the lifecycle state's label."""
        return self._ask(self._state, GetState.Request()).current_state.label

    def state_after(self, seconds: float) -> str:
        """Give the lifecycle state's label once that time has passed."""
        time.sleep(seconds)
        return self.state()

    def parameter(self, name: str) -> ParameterValue:
        """Give a parameter of the node."""
        return self._ask(self._parameters, GetParameters.Request(names=[name])).values[0]

    def busy_robots(self) -> list[str]:
        """Give the robots that were last told to do a task."""
        return sorted(robot for robot, task in self._task.items() if task)

    def travelled(self, robot: str) -> float:
        """Give the distance from the first pose seen to the last, m."""
        path = self._path.get(robot)
        return math.dist(path[0], path[-1]) if path else 0.0
