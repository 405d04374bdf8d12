"""An hour of the node on real topics, with everything bad at once.

python3 tests/benchmarks/hour.py [--seconds 3600] [--seed 1] [--out DIRECTORY]

Needs ROS 2. Starts ``team_sim`` with random faults and ``allocator`` as processes; beside
them a vandal sends what nobody should send, every few seconds. Prints the faults, the
histogram of the periods, the memory of the node and the lines of its log by severity.
Exit status 1: a gap of more than one missed period, memory grown by 2% or more, or an
exception in the log.
"""

from __future__ import annotations

import argparse
import os
import re
import sys
import tempfile
import time
from collections import Counter
from collections.abc import Callable
from pathlib import Path

import numpy as np
import paths  # noqa: F401
import rclpy
from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus
from geometry_msgs.msg import PoseStamped, TwistStamped
from nav_msgs.msg import Odometry
from rcl_interfaces.srv import SetParameters
from rclpy.context import Context
from rclpy.node import Node
from rclpy.parameter import Parameter
from rclpy.qos import qos_profile_sensor_data
from sensor_msgs.msg import BatteryState
from std_msgs.msg import Float32, String
from std_srvs.srv import SetBool, Trigger
from watching import Usage, histogram

from allocator_node.commands.children import Child
from allocator_node.commands.examples import example_files
from allocator_node.team_file import read_team

PERIOD = 0.1

WARM_UP = 60.0
"""Time before memory and periods count: discovery, and every kind of fault once, s."""

VANDALISM_EVERY = 3.0
"""Mean time between two acts of the vandal, s."""

MEMORY_EVERY = 600.0
"""Time between two figures of memory that are printed, s."""

WORLD = """
noise: {position_m: 0.02, heading_rad: 0.01}
ground:
  - {name: washout, circle: [66, 35, 4], keeps: 0.05, affects: [wheels]}
faults:
  {feature_mtbf_h: 1, feature_mttr_h: 0.05, robot_mtbf_h: 1, robot_mttr_h: 0.01,
   stall_mtbf_h: 2, stall_mttr_h: 0.02}
"""
"""Failures about every two minutes somewhere in the team of seven."""


class Vandal:
    """Sends what nobody should send, and asks for what people may ask for."""

    def __init__(self, node: Node, team_file: Path, seed: int) -> None:
        """Stand beside the team; ``node`` is what it speaks with."""
        self.node, self.random = node, np.random.default_rng(seed)
        team = read_team(team_file)
        self.robots, self.tasks = list(team.robots), list(team.tasks)
        self.done: Counter = Counter()
        self._lasting: tuple[float, Callable[[], None]] = (0.0, lambda: None)
        # All publishers at once: what a new one sends at first reaches nobody yet.
        topics = {"/diagnostics": DiagnosticArray}
        for robot in self.robots:
            topics[f"/{robot}/odom"] = Odometry
            topics[f"/{robot}/battery_state"] = BatteryState
            for task in self.tasks:
                topics[f"/allocator/quality/{robot}/{task}"] = Float32
        for task in self.tasks:
            topics[f"/allocator/tasks/{task}/goal"] = PoseStamped
        self._publishers = {
            topic: node.create_publisher(kind, topic, 10) for topic, kind in topics.items()
        }
        # One participant cannot have two types on a topic.
        self._elsewhere = Context()
        rclpy.init(context=self._elsewhere)
        stranger = rclpy.create_node("stranger", context=self._elsewhere)
        self._strangers = [
            stranger.create_publisher(String, topic, 10)
            for topic in (f"/{self.robots[0]}/odom", f"/{self.robots[1]}/battery_state")
        ]
        self._set = node.create_client(SetParameters, "/allocator/set_parameters")
        self._hold = node.create_client(SetBool, "/allocator/hold")
        self._forget = node.create_client(Trigger, "/allocator/forget")
        self._held_until = 0.0

    def close(self) -> None:
        """Go."""
        self._elsewhere.shutdown()

    def act(self) -> None:
        """Do one thing of :data:`ACTS`."""
        kind = str(self.random.choice(list(ACTS)))
        self.done[kind] += 1
        ACTS[kind](self)

    def tend(self, now: float) -> None:
        """Go on with what lasts, a hundred times a second."""
        until, send = self._lasting
        if now < until:
            send()
        if self._held_until and now > self._held_until:
            self._held_until = 0.0
            self._hold.call_async(SetBool.Request(data=False))

    def _robot(self) -> str:
        return str(self.random.choice(self.robots))

    def _task(self) -> str:
        return str(self.random.choice(self.tasks))

    def _send(self, topic: str, message: object) -> None:
        self._publishers[topic].publish(message)

    def _odometry(self, robot: str, change: Callable[[Odometry], None], times: int = 1) -> None:
        """Send odometry of the middle of the site, changed, for up to three seconds."""

        def send() -> None:
            for _ in range(times):
                message = Odometry()
                message.header.frame_id = "site"
                message.header.stamp = self.node.get_clock().now().to_msg()
                message.pose.pose.position.x, message.pose.pose.position.y = 40.0, 20.0
                message.pose.pose.orientation.w = 1.0
                change(message)
                self._publishers[f"/{robot}/odom"].publish(message)

        self._lasting = (time.monotonic() + self.random.uniform(0, 3), send)

    def _placed(self, x: float, times: int = 1) -> None:
        def change(message: Odometry) -> None:
            message.pose.pose.position.x = float(x)

        self._odometry(self._robot(), change, times)

    def pose_not_a_number(self) -> None:
        self._placed(self.random.choice([np.nan, np.inf, -np.inf]))

    def pose_absurd(self) -> None:
        self._placed(1e9)

    def pose_elsewhere(self) -> None:
        self._placed(self.random.uniform(0, 80))

    def thousand_a_second(self) -> None:
        self._placed(self.random.uniform(0, 80), times=10)

    def wrong_frame(self) -> None:
        self._odometry(self._robot(), lambda message: setattr(message.header, "frame_id", "moon"))

    def no_rotation(self) -> None:
        self._odometry(
            self._robot(), lambda message: setattr(message.pose.pose.orientation, "w", 0.0)
        )

    def stamp_far_off(self) -> None:
        by = int(self.random.choice([-3600, -5, 5, 3600]))

        def change(message: Odometry) -> None:
            message.header.stamp.sec += by

        self._odometry(self._robot(), change)

    def stamp_zero(self) -> None:
        self._odometry(self._robot(), lambda message: setattr(message.header.stamp, "sec", 0))

    def battery(self) -> None:
        charge = float(self.random.choice([np.nan, -1.0, 1.7, 80.0, 0.3]))
        self._send(f"/{self._robot()}/battery_state", BatteryState(percentage=charge))

    def strangers_in_diagnostics(self) -> None:
        some = [
            DiagnosticStatus(name=f"stranger {self.random.integers(10**6)}", level=b"\x02")
            for _ in range(2000)
        ]
        self._send("/diagnostics", DiagnosticArray(status=some))

    def level_out_of_range(self) -> None:
        status = DiagnosticStatus(name=f"{self._robot()}: camera", level=b"\x09")
        self._send("/diagnostics", DiagnosticArray(status=[status]))

    def wrong_type(self) -> None:
        for publisher in self._strangers:
            publisher.publish(String(data="hello"))

    def goal(self) -> None:
        message = PoseStamped()
        message.header.frame_id = str(self.random.choice(["site", "moon"]))
        x, y = self.random.uniform([5, 5], [75, 20])
        message.pose.position.x, message.pose.position.y = float(x), float(y)
        message.pose.orientation.w = 1.0
        if self.random.random() < 0.3:
            message.pose.position.x = np.nan
        self._send(f"/allocator/tasks/{self._task()}/goal", message)

    def quality(self) -> None:
        value = float(self.random.choice([np.nan, -3.0, 0.5, 1.0, 7.0]))
        self._send(f"/allocator/quality/{self._robot()}/{self._task()}", Float32(data=value))

    def hold(self) -> None:
        self._held_until = time.monotonic() + float(self.random.uniform(0.5, 4.0))
        self._hold.call_async(SetBool.Request(data=True))

    def forget(self) -> None:
        self._forget.call_async(Trigger.Request())

    def pins_and_bans(self) -> None:
        pairs = [f"{self._robot()}={self._task()}" for _ in range(self.random.integers(0, 3))]
        self._parameter(str(self.random.choice(["pins", "bans"])), pairs or [""])

    def weights(self) -> None:
        self._parameter("kappa", float(10 ** self.random.uniform(-3, 0)))
        self._parameter("swap_distance", float(self.random.uniform(-1, 20)))

    def task_edit(self) -> None:
        x, y = self.random.uniform([5, 5], [75, 20])
        text = str(
            self.random.choice(
                [
                    f"{self._task()}: {{priority: {self.random.integers(0, 7)}}}",
                    f"extra: {{kind: visit, at: [{x:.2f}, {y:.2f}], dwell: 5}}",
                    f"extra: {{kind: watch, at: [{x:.2f}, {y:.2f}], robots: {{max: 1}}}}",
                    f"{self._task()}: {{active: false}}",
                    f"{self._task()}: {{active: true}}",
                    "extra: null",
                    "[[[[",
                    "a: &a [*a]",
                ]
            )
        )
        self._parameter("task_edit", text)

    def _parameter(self, name: str, value: object) -> None:
        message = Parameter(name, value=value).to_parameter_msg()
        self._set.call_async(SetParameters.Request(parameters=[message]))


ACTS: dict[str, Callable[[Vandal], None]] = {
    name.replace("_", " "): act
    for name, act in vars(Vandal).items()
    if callable(act) and not name.startswith("_") and name not in ("act", "tend", "close")
}
"""What the vandal does, by name."""


def measure(
    seconds: float, seed: int, out: Path
) -> tuple[np.ndarray, Usage, Counter]:
    """Run it all; give the periods of the commands, s, what the node used, and the faults."""
    stamps: list[float] = []

    def heard(message: TwistStamped) -> None:
        stamps.append(message.header.stamp.sec + 1e-9 * message.header.stamp.nanosec)

    team_file, _ = example_files()
    world_file = out / "world.yaml"
    world_file.write_text(WORLD)
    rclpy.init()
    node = rclpy.create_node("vandal")
    node.create_subscription(TwistStamped, "/rover_1/cmd_vel", heard, qos_profile_sensor_data)
    vandal = Vandal(node, team_file, seed)
    simulated = [str(team_file), str(world_file), "--seed", str(seed)]
    children = []
    try:
        children.append(Child("team_sim", simulated, out / "team_sim.log", os.environ))
        arguments = ["--team", str(team_file), "--autostart"]
        arguments += ["--ros-args", "-p", f"state_file:={out / 'state.json'}"]
        children.append(Child("allocator", arguments, out / "allocator.log", os.environ))
        usage = Usage(children[1].pid)
        begun, counted, due, told = time.monotonic(), 0, 0.0, 0.0
        while not stamps:
            rclpy.spin_once(node, timeout_sec=0.2)
            if time.monotonic() > begun + 60:
                raise SystemExit(f"no command came; see {out}")
        begun = time.monotonic()
        while (t := time.monotonic() - begun) < WARM_UP + seconds:
            until = time.monotonic() + 0.01
            while (left := until - time.monotonic()) > 0:
                rclpy.spin_once(node, timeout_sec=left)
            vandal.tend(time.monotonic())
            if t > due:
                due = t + vandal.random.exponential(VANDALISM_EVERY)
                vandal.act()
            if children[0].status is not None:
                raise SystemExit(f"team_sim ended; see {out}")
            if children[1].status is not None:
                raise SystemExit(f"the node ended with {children[1].status}; see {out}")
            if t > WARM_UP and (not usage.times or time.monotonic() > usage.times[-1] + 1.0):
                counted = counted or len(stamps)
                usage.look()
                if t > told:
                    told = t + MEMORY_EVERY
                    print(f"{t:6.0f} s: {usage.memory[-1]:.1f} MB", flush=True)
    finally:
        for child in reversed(children):
            child.stop()
        vandal.close()
        node.destroy_node()
        rclpy.try_shutdown()
    return np.diff(stamps[counted:]), usage, vandal.done


def main() -> int:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--seconds", type=float, default=3600.0)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--out", type=Path, help="directory of the logs")
    options = parser.parse_args()
    os.environ.setdefault("ROS_AUTOMATIC_DISCOVERY_RANGE", "LOCALHOST")
    out = options.out or Path(tempfile.mkdtemp(prefix="hour-"))
    out.mkdir(parents=True, exist_ok=True)
    periods, usage, done = measure(options.seconds, options.seed, out)
    print(f"acts of the vandal {done.total()}: {dict(sorted(done.items()))}")
    print(histogram(periods))
    p50, p99 = 1e3 * np.percentile(periods, [50, 99])
    print(f"{len(periods)} periods: median {p50:.1f} ms, p99 {p99:.1f} ms, "
          f"longest {1e3 * periods.max():.1f} ms")
    gaps = int((periods > 2.5 * PERIOD).sum())
    print(f"gaps of more than one missed period: {gaps}")
    minute = max(min(60, len(usage.memory) // 10), 1)
    first, last = np.mean(usage.memory[:minute]), np.mean(usage.memory[-minute:])
    grown = last / first - 1
    print(f"memory {first:.1f} MB in the first minute, {last:.1f} MB in the last: {grown:+.2%}")
    print(f"the node kept {usage.cores:.2f} cores busy")
    log = (out / "allocator.log").read_text()
    exceptions = len(re.findall("Traceback", log))
    lines = dict(Counter(re.findall(r"\[(INFO|WARN|ERROR|FATAL)\]", log)))
    print(f"lines in the log {lines}, exceptions {exceptions}; in {out}")
    return int(gaps > 0 or grown >= 0.02 or exceptions > 0)


if __name__ == "__main__":
    sys.exit(main())
