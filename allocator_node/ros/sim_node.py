"""The simulated team on real topics: what robots would publish, and how they obey."""

from __future__ import annotations

import time
from collections.abc import Callable
from functools import partial

import numpy as np
import rclpy
from diagnostic_msgs.msg import DiagnosticArray
from geometry_msgs.msg import (
    PoseStamped,
    PoseWithCovariance,
    PoseWithCovarianceStamped,
    Quaternion,
    Twist,
    TwistStamped,
    TwistWithCovariance,
)
from nav_msgs.msg import Odometry
from rcl_interfaces.msg import Parameter, ParameterType, ParameterValue
from rcl_interfaces.srv import SetParameters
from rclpy.executors import SingleThreadedExecutor
from rclpy.node import Node
from rclpy.publisher import Publisher
from rclpy.signals import SignalHandlerOptions
from sensor_msgs.msg import BatteryState
from std_msgs.msg import Header

from ..sim.navigation import steer
from ..sim.world import SimulatedTeam
from ..sim.world_file import TaskEvent, World
from ..team import Robot, Team
from .command_topics import COMMAND_TYPES
from .conversions import (
    pose_message,
    pose_of,
    seen_from,
    status_of,
    turned,
    twist_of,
    velocity_of,
)
from .ending import LISTEN, Ending
from .poses import POSE_TYPES
from .qos import COMMANDS

STEP = 0.05
"""Period of the simulation, s."""

OBEY = 0.5
"""A robot stops when no command came for so long, s."""

HEALTH_EVERY, BATTERY_EVERY = 0.5, 1.0
"""Periods of diagnostics and batteries, s; changed diagnostics come at once."""


class SimNode(Node):
    """Publishes what the simulated robots see of themselves, and obeys their commands."""

    def __init__(
        self,
        team: Team,
        world: World,
        seed: int = 0,
        speed: float = 1.0,
        allocator: str = "allocator",
    ) -> None:
        """Set the team up at its start.

        Args:
            team: The team.
            world: Ground, noise and events.
            seed: Seed of the noise.
            speed: Simulated seconds in a second.
            allocator: Name of the node that events about tasks go to.
        """
        super().__init__("team_sim")
        self._team, self._speed, self._allocator = team, speed, allocator
        self._sim = SimulatedTeam(team, world, seed)
        robots = list(team.robots.values())
        self._robots = robots
        self._obedience = [Obedience(robot, team.frame) for robot in robots]
        self._poses = [self._publisher(POSE_TYPES[r.pose.type], r.pose.topic) for r in robots]
        self._batteries = [self._publisher(BatteryState, r.battery_topic) for r in robots]
        self._diagnostics = self._publisher(DiagnosticArray, "/diagnostics")
        self._goals: dict[str, Publisher] = {
            task: self._publisher(PoseStamped, f"{allocator}/tasks/{task}/goal")
            for task in team.tasks
        }
        self._targets = {
            target.topic: self._publisher(PoseStamped, target.topic) for target in world.targets
        }
        self._parameters = self.create_client(SetParameters, f"{allocator}/set_parameters")
        for robot, obedience in zip(robots, self._obedience, strict=True):
            kind = COMMAND_TYPES[robot.command.type]
            self.create_subscription(kind, robot.command.topic, obedience.hear, COMMANDS)
        self._levels: dict[str, int] = {}
        self._due = {"health": 0.0, "battery": 0.0}
        self._stepped = time.monotonic()
        self._tell_events()
        self.create_timer(STEP, self._step)

    def _publisher(self, kind: type, topic: str) -> Publisher:
        return self.create_publisher(kind, topic, 10)

    def _step(self) -> None:
        now = time.monotonic()
        elapsed, self._stepped = now - self._stepped, now
        poses = self._sim.poses()
        commands = np.array([
            obedience.command(now, pose)
            for obedience, pose in zip(self._obedience, poses, strict=True)
        ])
        # A stalled computer must not let robots leap.
        self._sim.step(commands, min(elapsed, 4 * STEP) * self._speed)
        self._publish_poses()
        self._publish_health(now)
        if self._is_due("battery", now, BATTERY_EVERY):
            self._publish_batteries()
        self._tell_events()

    def _is_due(self, what: str, now: float, every: float) -> bool:
        if now < self._due[what]:
            return False
        self._due[what] = now + every
        return True

    def _publish_poses(self) -> None:
        stamp = self.get_clock().now().to_msg()
        poses, velocities = self._sim.poses(), self._sim.velocities()
        for i, robot in enumerate(self._robots):
            if self._sim.reporting[i]:
                source = robot.pose
                header = Header(stamp=stamp, frame_id=source.frame or self._team.frame)
                pose = seen_from(poses[i], source.offset) if source.frame else poses[i]
                # Odometry's twist is in the body frame (REP 105).
                body = turned(velocities[i], -poses[i][3])
                message = pose_report(source.type, header, robot.name, pose, body)
                self._poses[i].publish(message)
        header = Header(stamp=stamp, frame_id=self._team.frame)
        for topic, pose in self._sim.target_poses().items():
            self._targets[topic].publish(PoseStamped(header=header, pose=pose_message(pose)))

    def _publish_health(self, now: float) -> None:
        reports = self._sim.health()
        levels = {report.name: report.level for report in reports}
        if self._is_due("health", now, HEALTH_EVERY) or levels != self._levels:
            self._levels = levels
            array = DiagnosticArray(header=Header(stamp=self.get_clock().now().to_msg()))
            array.status = [
                status_of(report.name, report.level, report.message or "working", {})
                for report in reports
            ]
            self._diagnostics.publish(array)

    def _publish_batteries(self) -> None:
        stamp = self.get_clock().now().to_msg()
        for publisher, charge, robot in zip(
            self._batteries, self._sim.charges(), self._robots, strict=True
        ):
            publisher.publish(battery_report(Header(stamp=stamp), float(charge), robot))

    def _tell_events(self) -> None:
        """Do to the allocator what the world file says about tasks."""
        for event in self._sim.task_events:
            if event.move is not None:
                self._move(event)
            if event.active is not None:
                self._switch(event)

    def _move(self, event: TaskEvent) -> None:
        message = PoseStamped(
            header=Header(stamp=self.get_clock().now().to_msg(), frame_id=self._team.frame)
        )
        message.pose = pose_message((*event.move, _height_of(self._team, event.task), 0.0))
        # No rotation at all: the heading stays as it is.
        message.pose.orientation = Quaternion(w=0.0)
        self._goals[event.task].publish(message)

    def _switch(self, event: TaskEvent) -> None:
        if not self._parameters.service_is_ready():
            self.get_logger().warning(f"{self._allocator} is not there to hear of {event}")
            return
        value = ParameterValue(
            type=ParameterType.PARAMETER_STRING,
            string_value=f"{event.task}: {{active: {str(event.active).lower()}}}",
        )
        request = SetParameters.Request(parameters=[Parameter(name="task_edit", value=value)])
        self._parameters.call_async(request).add_done_callback(partial(self._answered, event))

    def _answered(self, event: TaskEvent, answer: rclpy.task.Future) -> None:
        for result in answer.result().results:
            if not result.successful:
                self.get_logger().error(f"{event} was refused: {result.reason}")


class Obedience:
    """What one robot was told last, and what it does about it now."""

    def __init__(self, robot: Robot, frame: str) -> None:
        self._drive = robot.drive
        self._frame = frame
        self._heard = -np.inf
        self._command: Callable[[np.ndarray], np.ndarray] = _stand

    def hear(self, message: Twist | TwistStamped | PoseStamped) -> None:
        """Take a command."""
        self._heard = time.monotonic()
        if isinstance(message, PoseStamped):
            goal = pose_of(message.pose)
            self._command = lambda pose: steer(self._drive, pose, goal)
        else:
            twist = message.twist if isinstance(message, TwistStamped) else message
            velocity = np.array(velocity_of(twist))
            self._command = lambda pose: velocity

    def command(self, now: float, pose: np.ndarray) -> np.ndarray:
        """Give the body velocity (4,) to drive with now; zero when commands stopped."""
        return self._command(pose) if now - self._heard <= OBEY else _stand(pose)


def pose_report(
    kind: str, header: Header, robot: str, pose: np.ndarray, body: np.ndarray
) -> Odometry | PoseStamped | PoseWithCovarianceStamped:
    """Give the pose message of a type, from a pose (4,) and a body velocity (4,)."""
    where = pose_message(pose)
    if kind == "geometry_msgs/msg/PoseStamped":
        return PoseStamped(header=header, pose=where)
    if kind == "geometry_msgs/msg/PoseWithCovarianceStamped":
        return PoseWithCovarianceStamped(header=header, pose=PoseWithCovariance(pose=where))
    return Odometry(
        header=header,
        child_frame_id=f"{robot}/base_link",
        pose=PoseWithCovariance(pose=where),
        twist=TwistWithCovariance(twist=twist_of(body)),
    )


def battery_report(header: Header, charge: float, robot: Robot) -> BatteryState:
    """Give the BatteryState of a charge 0..1; what is not simulated is NaN ("unmeasured")."""
    nan = float("nan")
    return BatteryState(
        header=header,
        voltage=nan, temperature=nan, current=nan, charge=nan, capacity=nan, design_capacity=nan,
        percentage=charge,
        power_supply_status=BatteryState.POWER_SUPPLY_STATUS_DISCHARGING,
        present=True,
        location=robot.name,
    )


def _height_of(team: Team, task: str) -> float:
    at = getattr(team.tasks[task], "at", ())
    return at[2] if len(at) == 3 else 0.0


def _stand(pose: np.ndarray) -> np.ndarray:
    return np.zeros(4)


def run(
    team: Team, world: World, seed: int, speed: float, allocator: str, arguments: list[str]
) -> int:
    """Simulate until a signal ends the process; give its exit status."""
    rclpy.init(args=arguments, signal_handler_options=SignalHandlerOptions.NO)
    ending = Ending()
    executor = SingleThreadedExecutor()
    node = SimNode(team, world, seed, speed, allocator)
    try:
        executor.add_node(node)
        while not ending.asked:
            executor.spin_once(timeout_sec=LISTEN)
    finally:
        node.destroy_node()
        rclpy.try_shutdown()
    return 0
