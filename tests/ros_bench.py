"""A bench for the lifecycle node: it runs in a thread, a probe node stands opposite."""

from __future__ import annotations

import gc
import os
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import rclpy
from geometry_msgs.msg import PoseStamped, TwistStamped
from lifecycle_msgs.msg import Transition
from lifecycle_msgs.srv import ChangeState, GetState
from rcl_interfaces.msg import Log, SetParametersResult
from rcl_interfaces.srv import SetParameters
from rclpy.context import Context
from rclpy.executors import ExternalShutdownException, SingleThreadedExecutor
from rclpy.node import Node
from rclpy.parameter import Parameter
from rclpy.qos import DurabilityPolicy, QoSProfile, ReliabilityPolicy
from rclpy.signals import SignalHandlerOptions

from allocator_node.ros.allocator_node import AllocatorNode

ROOT = Path(__file__).parents[1]

PATIENCE = 15.0
"""How long anything may take before a test gives up, s."""

TEAM = """
frame: site
boundary: [[-5, -5], [60, -5], [60, 20], [-5, 20]]
keep_out: [{name: shed, polygon: [[10, 15], [12, 15], [12, 17]]}]
capabilities: {thermal_scan: [{with: [thermal_camera]}]}
robots:
  rover_1:
    drive: {model: holonomic, max_speed: 1.0}
    features: [wheels, thermal_camera]
    start: [0, 0, 0]
    pose: {topic: rover_1/pose, type: geometry_msgs/msg/PoseStamped}
  rover_2:
    drive: {model: holonomic, max_speed: 1.0}
    features: [wheels, thermal_camera]
    start: [0, 4, 0]
    pose: {topic: rover_2/pose, type: geometry_msgs/msg/PoseStamped}
tasks:
  gate: {kind: watch, at: [50, 2], needs: {thermal_scan: 1.0}}
"""
"""Two equal rovers, far from the one place that has to be watched."""

CAMERA = {robot: f"{robot}: thermal camera" for robot in ("rover_1", "rover_2")}
"""The names under which diagnostics speak of the cameras."""

LATE = QoSProfile(
    depth=200,
    durability=DurabilityPolicy.TRANSIENT_LOCAL,
    reliability=ReliabilityPolicy.RELIABLE,
)
"""Asks for what was published before."""


class Spinning:
    """An executor in a thread."""

    def __init__(self, context: Context, *nodes: Node) -> None:
        self.executor = SingleThreadedExecutor(context=context)
        for node in nodes:
            self.executor.add_node(node)
        self._thread = threading.Thread(target=self._spin, daemon=True)
        self._thread.start()

    def _spin(self) -> None:
        try:
            self.executor.spin()
        except ExternalShutdownException:
            pass

    def stop(self) -> None:
        """End the thread."""
        self.executor.shutdown(timeout_sec=2.0)
        self._thread.join(5.0)


class Probe:
    """What stands opposite the allocator: it publishes, listens and asks.

    Attributes:
        node: Its node.
        heard: Topic to (monotonic time, message) in the order of arrival.
    """

    def __init__(self, context: Context) -> None:
        self.node = rclpy.create_node("probe", context=context)
        self.heard: dict[str, list[tuple[float, Any]]] = {}
        self.listen("/rosout", Log, LATE)
        self._spinning = Spinning(context, self.node)
        self._clients: dict[str, Any] = {}

    def listen(self, topic: str, kind: type, qos: QoSProfile | int = 50, raw: bool = False) -> list:
        """Record a topic; give the record."""
        record = self.heard.setdefault(topic, [])
        self.node.create_subscription(
            kind, topic, lambda message: record.append((time.monotonic(), message)), qos, raw=raw
        )
        return record

    def call(self, kind: type, service: str, request: Any) -> Any:
        """Call a service and give its answer."""
        if service not in self._clients:
            self._clients[service] = self.node.create_client(kind, service)
        client = self._clients[service]
        assert client.wait_for_service(PATIENCE), f"{service} is not there"
        future = client.call_async(request)
        until(future.done, f"{service} answers")
        return future.result()

    def transition(self, number: int) -> bool:
        """Ask the allocator for a transition; tell whether it succeeded."""
        request = ChangeState.Request(transition=Transition(id=number))
        return self.call(ChangeState, "/allocator/change_state", request).success

    def state(self) -> str:
        """Give the label of the allocator's lifecycle state."""
        answer = self.call(GetState, "/allocator/get_state", GetState.Request())
        return answer.current_state.label

    def set(self, **values: Any) -> SetParametersResult:
        """Set parameters of the allocator one by one; give the last result."""
        request = SetParameters.Request(
            parameters=[Parameter(name, value=value).to_parameter_msg()
                        for name, value in values.items()]
        )
        return self.call(SetParameters, "/allocator/set_parameters", request).results[-1]

    def log(self) -> str:
        """Give all that was logged."""
        return "\n".join(message.msg for _, message in self.heard["/rosout"])

    def close(self) -> None:
        """Stop and go."""
        self._spinning.stop()
        self.node.destroy_node()


class Rovers:
    """Two robots that move as they are told and say where they are, 20 times a second.

    Attributes:
        places: Where they are, m.
        silent: Those that say nothing.
        commands: The commands each of them got: (monotonic time, message).
    """

    def __init__(self, probe: Probe, qos: QoSProfile | int = 10) -> None:
        self.places = {"rover_1": [0.0, 0.0], "rover_2": [0.0, 4.0]}
        self.silent: set[str] = set()
        self._probe = probe
        self._publishers = {
            robot: probe.node.create_publisher(PoseStamped, f"/{robot}/pose", qos)
            for robot in self.places
        }
        self.commands = {
            robot: probe.listen(f"/{robot}/cmd_vel", TwistStamped) for robot in self.places
        }
        self._timer = probe.node.create_timer(0.05, self._step)

    def _step(self) -> None:
        for robot, place in self.places.items():
            record = self.commands[robot]
            if record and time.monotonic() - record[-1][0] < 0.5:
                linear = record[-1][1].twist.linear
                place[0] += 0.05 * linear.x
                place[1] += 0.05 * linear.y
            if robot not in self.silent:
                self._publishers[robot].publish(self.pose(*place))

    def pose(self, x: float, y: float) -> PoseStamped:
        """Give the message of a place, heading along x."""
        message = PoseStamped()
        message.header.frame_id = "site"
        message.header.stamp = self._probe.node.get_clock().now().to_msg()
        message.pose.position.x, message.pose.position.y = x, y
        return message


class Bench:
    """The allocator's node and a probe, in one process and on real topics."""

    def __init__(self, directory: Path, team: str = TEAM, **parameters: Any) -> None:
        self.make_allocator: Callable | None = parameters.pop("make_allocator", None)
        self.team_file = directory / "team.yaml"
        self.team_file.write_text(team)
        self._context = Context()
        rclpy.init(context=self._context, signal_handler_options=SignalHandlerOptions.NO)
        overrides = {"team_file": str(self.team_file)} | parameters
        more = {} if self.make_allocator is None else {"make_allocator": self.make_allocator}
        self.node = AllocatorNode(
            context=self._context,
            parameter_overrides=[Parameter(name, value=value) for name, value in overrides.items()],
            **more,
        )
        self.probe = Probe(self._context)
        self._spinning = Spinning(self._context, self.node)

    def configure(self) -> bool:
        """Configure; tell whether it succeeded."""
        return self.probe.transition(Transition.TRANSITION_CONFIGURE)

    def activate(self) -> bool:
        """Activate; tell whether it succeeded."""
        return self.probe.transition(Transition.TRANSITION_ACTIVATE)

    def deactivate(self) -> bool:
        """Deactivate; tell whether it succeeded."""
        return self.probe.transition(Transition.TRANSITION_DEACTIVATE)

    def cleanup(self) -> bool:
        """Clean up; tell whether it succeeded."""
        return self.probe.transition(Transition.TRANSITION_CLEANUP)

    def start(self) -> Rovers:
        """Configure and activate, and give rovers that obey."""
        rovers = Rovers(self.probe)
        assert self.configure() and self.activate(), self.probe.log()
        return rovers

    def close(self) -> None:
        """End everything."""
        self._spinning.stop()
        self.node.destroy_node()
        self.probe.close()
        self._context.try_shutdown()
        # A node that lingers would take the log topic of the next one of its name with it.
        del self.node, self.probe, self._spinning
        gc.collect()


@contextmanager
def bench(directory: Path, team: str = TEAM, **parameters: Any) -> Iterator[Bench]:
    """Give a bench and end it afterwards."""
    made = Bench(directory, team, **parameters)
    try:
        yield made
    finally:
        made.close()


@contextmanager
def allocator(team: Path, name: str, *arguments: str) -> Iterator[subprocess.Popen]:
    """Start the command ``allocator`` in a process of its own; end it afterwards."""
    process = subprocess.Popen(
        [sys.executable, "-m", "allocator_node.commands.allocator", "--team", str(team)]
        + ["--autostart", "--ros-args", "-r", f"__node:={name}", *arguments],
        cwd=ROOT,
        env=os.environ | {"PYTHONPATH": f"{ROOT}:{os.environ.get('PYTHONPATH', '')}"},
        stderr=subprocess.PIPE,
        text=True,
    )
    try:
        yield process
    finally:
        process.kill()
        process.communicate()


def until(condition: Callable[[], Any], what: str, patience: float = PATIENCE) -> Any:
    """Wait for a condition and give its value."""
    end = time.monotonic() + patience
    while not (value := condition()):
        assert time.monotonic() < end, f"waited in vain: {what}"
        time.sleep(0.005)
    return value


def moving(message: TwistStamped) -> bool:
    """Tell whether a command moves the robot."""
    linear, angular = message.twist.linear, message.twist.angular
    return any((linear.x, linear.y, linear.z, angular.z))


def values_of(status: Any) -> dict[str, str]:
    """Give the values of a status as a dictionary."""
    return {pair.key: pair.value for pair in status.values}


def busy(rovers: Rovers) -> list[str]:
    """Give the rovers whose last command moves them."""
    return [r for r, record in rovers.commands.items() if record and moving(record[-1][1])]


def standing(rovers: Rovers) -> bool:
    """Tell whether the last command of every rover is zero."""
    return all(record and not moving(record[-1][1]) for record in rovers.commands.values())
