"""The simulated team on real topics, alone and opposite the allocator."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np
import pytest

rclpy = pytest.importorskip("rclpy", reason="needs ROS 2: rclpy is not installed")

from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus  # noqa: E402
from geometry_msgs.msg import PoseStamped, Twist, TwistStamped  # noqa: E402
from nav_msgs.msg import Odometry  # noqa: E402
from rclpy.context import Context  # noqa: E402
from rclpy.signals import SignalHandlerOptions  # noqa: E402
from ros_bench import LATE, Probe, until, values_of  # noqa: E402
from sensor_msgs.msg import BatteryState  # noqa: E402
from std_msgs.msg import String  # noqa: E402

from allocator_node.ros import conversions  # noqa: E402
from allocator_node.team_file import parse_team  # noqa: E402

pytestmark = pytest.mark.ros

ROOT = Path(__file__).parents[1]

TEAM = """
frame: site
capabilities: {thermal_scan: [{with: [thermal_camera]}]}
robots:
  rover_1:
    drive: {model: differential, max_speed: 1.0}
    features: [wheels, thermal_camera]
    start: [0, 0, 0]
  rover_2:
    drive: {model: holonomic, max_speed: 1.0}
    features: [wheels, thermal_camera]
    start: [0, 5, 0]
    pose: {topic: rover_2/pose, type: geometry_msgs/msg/PoseStamped,
           frame: rover_2/odom, offset: [1.0, 2.0, 1.2]}
    command: {topic: rover_2/cmd_vel, type: geometry_msgs/msg/Twist}
  mule:
    drive: {model: differential, max_speed: 1.0}
    start: [0, 10, 0]
    command: {topic: mule/goal_pose, type: geometry_msgs/msg/PoseStamped}
tasks:
  gate: {kind: watch, at: [40, 2], needs: {thermal_scan: 1.0}}
  ring: {kind: watch, at: [40, 10], face: [40, 20], robots: {min: 1, max: 1}}
"""

WORLD = """
events:
  - {at: 5, robot: rover_1, feature: thermal_camera, level: error}
  - {at: 5, robot: rover_2, battery: 0.6}
  - {at: 7, task: gate, move: [40, 4]}
  - {at: 8, task: ring, active: false}
  - {at: 9, robot: rover_2, pose: silent}
"""


@contextmanager
def command(name: str, *arguments: object) -> Iterator[subprocess.Popen]:
    """Run a command of this package as a process; end it afterwards."""
    process = subprocess.Popen(
        [sys.executable, "-m", f"allocator_node.commands.{name}", *map(str, arguments)],
        env=os.environ | {"PYTHONPATH": f"{ROOT}:{os.environ.get('PYTHONPATH', '')}"},
    )
    try:
        yield process
    finally:
        # A keyboard interrupt reaches a launched process twice: from terminal and launch.
        for _ in range(2):
            process.send_signal(signal.SIGINT)
        try:
            assert process.wait(10) == 0
        finally:
            process.kill()


@pytest.fixture
def probe() -> Iterator[Probe]:
    context = Context()
    rclpy.init(context=context, signal_handler_options=SignalHandlerOptions.NO)
    made = Probe(context)
    yield made
    made.close()
    context.try_shutdown()


def test_robots_obey_until_commands_stop(probe: Probe, tmp_path: Path) -> None:
    """Poses, diagnostics and batteries come; a commanded robot moves, and stops by itself."""
    team = tmp_path / "team.yaml"
    team.write_text(TEAM)
    odometry = probe.listen("/rover_1/odom", Odometry)
    placed = probe.listen("/rover_2/pose", PoseStamped)
    diagnostics = probe.listen("/diagnostics", DiagnosticArray)
    batteries = probe.listen("/mule/battery_state", BatteryState)
    node = probe.node
    ahead = node.create_publisher(TwistStamped, "/rover_1/cmd_vel", 1)
    aside = node.create_publisher(Twist, "/rover_2/cmd_vel", 1)
    source = parse_team(TEAM).robots["rover_2"].pose
    with command("team_sim", team):
        until(lambda: odometry and placed and diagnostics and batteries, "reports")
        assert {s.name for s in diagnostics[-1][1].status} >= {"rover_1: thermal camera"}
        assert batteries[-1][1].percentage > 0.99
        assert (odometry[-1][1].header.frame_id, placed[-1][1].header.frame_id) == (
            "site", "rover_2/odom",
        )  # fmt: skip
        until(ahead.get_subscription_count, "a listener")
        until(aside.get_subscription_count, "a listener")
        forward, left = TwistStamped(), Twist()
        forward.twist.linear.x, left.linear.y = 1.0, 0.5
        for _ in range(20):
            ahead.publish(forward)
            aside.publish(left)
            time.sleep(0.05)
        until(lambda: odometry[-1][1].twist.twist.linear.x == 0.0, "it stops", 3)
        x = odometry[-1][1].pose.pose.position.x
        assert 0.9 < x < 2.2  # 1 m/s for a second, and half a second until it stops
        time.sleep(0.3)
        assert odometry[-1][1].pose.pose.position.x == pytest.approx(x)
    # By hand: rover_2 started at (0, 5) and went to its left, which is north.
    where = conversions.placed(conversions.pose_of(placed[-1][1].pose), source.offset)
    assert where[0] == pytest.approx(0.0, abs=1e-6)
    assert 5.4 < where[1] < 6.2
    assert where[3] == pytest.approx(0.0, abs=1e-6)


def test_the_two_commands_together(probe: Probe, tmp_path: Path) -> None:
    """Events of the world file reach the allocator, and it answers with the right reasons."""
    team, world = tmp_path / "team.yaml", tmp_path / "world.yaml"
    team.write_text(TEAM)
    world.write_text(WORLD)
    history = probe.listen("/allocator/reallocations", DiagnosticStatus, LATE)
    goals = probe.listen("/mule/goal_pose", PoseStamped)
    told = probe.listen("/mule/assigned_task", String, LATE)
    assignments = probe.listen("/allocator/assignments", DiagnosticArray, LATE)

    def change(task: str, cause: str) -> dict[str, str] | None:
        found = [values_of(m) for _, m in history]
        return next((v for v in found if (v["task"], v["cause"]) == (task, cause)), None)

    with (
        command("allocator", "--team", team, "--autostart") as node,
        command("team_sim", team, world),
    ):
        until(lambda: change("gate", "start") and change("ring", "start"), "a start")
        until(lambda: told and goals and told[-1][1].data == "ring", "a goal for the mule")
        assert goals[-1][1].pose.position.x == pytest.approx(40.0, abs=0.5)
        facing = conversions.yaw_of(goals[-1][1].pose.orientation)
        assert facing == pytest.approx(np.pi / 2, abs=0.05)
        failed = until(lambda: change("gate", "feature"), "a camera fails")
        assert (failed["from"], failed["to"]) == ("rover_1", "rover_2")
        ended = until(lambda: change("ring", "task"), "a task ends")
        assert (ended["from"], ended["to"]) == ("mule", "")
        silent = until(lambda: change("gate", "silent"), "a robot falls silent")
        assert (silent["from"], silent["to"]) == ("rover_2", "")

        def of(robot: str) -> DiagnosticStatus:
            return next(s for s in assignments[-1][1].status if s.name == robot)

        until(lambda: of("rover_2").level == DiagnosticStatus.ERROR, "it shows")
        assert float(values_of(of("rover_2"))["energy"]) == pytest.approx(0.6, abs=0.02)
        assert values_of(of("mule"))["safety"] == "left to its own navigation"
        assert "safety" not in values_of(of("rover_1"))
        assert node.poll() is None

        def stays() -> bool:
            """The mule, without a task, is sent to where it is."""
            return np.ptp([m.pose.position.x for _, m in goals[-20:]]) < 0.5

        until(stays, "the mule is told to stay")


def test_a_robot_seen_by_tf_cannot_be_simulated(tmp_path: Path) -> None:
    """Exit status 2 and what to change."""
    team = tmp_path / "team.yaml"
    team.write_text(
        "robots: {r: {drive: {model: holonomic, max_speed: 1}, pose: {tf: r/base_link}}}\n"
        "tasks: {gate: {kind: watch, at: [1, 1]}}\n"
    )
    ended = subprocess.run(
        [sys.executable, "-m", "allocator_node.commands.team_sim", str(team)],
        capture_output=True,
        text=True,
        timeout=30,
        env=os.environ | {"PYTHONPATH": f"{ROOT}:{os.environ.get('PYTHONPATH', '')}"},
    )
    assert ended.returncode == 2
    assert "robots.r.pose: a simulated robot publishes no tf" in ended.stderr
    assert "Traceback" not in ended.stderr


def test_a_wrong_team_file_ends_the_node_with_its_errors(tmp_path: Path) -> None:
    """``allocator --autostart``: exit status 1."""
    team = tmp_path / "team.yaml"
    team.write_text("robots: {}\n")
    ended = subprocess.run(
        [sys.executable, "-m", "allocator_node.commands.allocator", "--team", str(team)]
        + ["--autostart"],
        capture_output=True,
        text=True,
        timeout=30,
        env=os.environ | {"PYTHONPATH": f"{ROOT}:{os.environ.get('PYTHONPATH', '')}"},
    )
    assert ended.returncode == 1
    assert "must have at least one robot" in ended.stderr
    assert "Traceback" not in ended.stderr
