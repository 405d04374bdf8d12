"""The lifecycle node on real topics: how it starts, refuses, stops and remembers."""

from __future__ import annotations

import json
import math
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

pytest.importorskip("rclpy", reason="needs ROS 2: rclpy is not installed")

from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus  # noqa: E402
from geometry_msgs.msg import PoseStamped, TwistStamped  # noqa: E402
from lifecycle_msgs.msg import Transition  # noqa: E402
from rclpy.qos import QoSProfile, ReliabilityPolicy  # noqa: E402
from ros_bench import (  # noqa: E402
    CAMERA,
    LATE,
    TEAM,
    Rovers,
    bench,
    busy,
    moving,
    standing,
    until,
)
from std_msgs.msg import String  # noqa: E402
from std_srvs.srv import SetBool  # noqa: E402

from allocator_node.allocator import Allocator  # noqa: E402
from allocator_node.recording import read_run  # noqa: E402

pytestmark = pytest.mark.ros

ROOT = Path(__file__).parents[1]


class Unreliable(Allocator):
    """An allocator that fails when told to."""

    broken = False

    def step(self, *args, **kwargs):
        """Raise, or decide."""
        if Unreliable.broken:
            raise RuntimeError("a solver ran away")
        return super().step(*args, **kwargs)


def test_an_exception_in_the_loop_stops_robots_and_is_told(tmp_path: Path) -> None:
    """Zero commands every period, the traceback in the log, ERROR in diagnostics; it goes on."""
    with bench(tmp_path, make_allocator=Unreliable) as made:
        rovers = made.start()
        diagnostics = made.probe.listen("/diagnostics", DiagnosticArray)
        until(lambda: busy(rovers), "a rover drives")
        try:
            Unreliable.broken = True
            until(lambda: standing(rovers), "all stand")
            until(lambda: "a solver ran away" in made.probe.log(), "a log entry")
            until(lambda: made.probe.log().count("a solver ran away") > 1, "it fails again")
            assert made.probe.log().count("Traceback") == 1, "once is enough"
            until(lambda: "the loop failed: RuntimeError: a solver ran away" in told(diagnostics),
                  "an ERROR")  # fmt: skip
        finally:
            Unreliable.broken = False
        until(lambda: busy(rovers), "a rover drives again")
        assert made.probe.state() == "active"


class Dizzy(Allocator):
    """An allocator whose commands for rover_1 are not numbers when told so."""

    dizzy = False

    def step(self, *args, **kwargs):
        """Decide, and spoil the command of rover_1."""
        decision = super().step(*args, **kwargs)
        if Dizzy.dizzy:
            decision.commands[0] = np.nan
            decision.commands[1] = (0.25, 0.0, 0.0, 0.0)
        return decision


def test_a_command_that_is_no_number_never_leaves(tmp_path: Path) -> None:
    """That robot stands, the other goes on, and diagnostics say so."""
    with bench(tmp_path, make_allocator=Dizzy) as made:
        rovers = made.start()
        diagnostics = made.probe.listen("/diagnostics", DiagnosticArray)
        until(lambda: busy(rovers), "a rover drives")
        try:
            Dizzy.dizzy = True
            until(lambda: busy(rovers) == ["rover_2"], "rover_1 stands")
            until(lambda: "not finite for rover_1" in told(diagnostics), "an ERROR")
        finally:
            Dizzy.dizzy = False
        assert not [
            m for r in rovers.commands.values() for _, m in r if math.isnan(m.twist.linear.x)
        ]


def told(diagnostics: list) -> str:
    """Give the text of all ERRORs of the node's own diagnostics."""
    return "; ".join(
        status.message
        for _, message in diagnostics
        for status in message.status
        if status.name.startswith("allocator: ") and status.level == DiagnosticStatus.ERROR
    )


@pytest.mark.parametrize("sign", [signal.SIGINT, signal.SIGTERM])
def test_a_signal_ends_the_node_after_zero_commands(sign: signal.Signals, tmp_path: Path) -> None:
    """The process of the command ``allocator``: the last command is zero, exit status 0."""
    team = tmp_path / "team.yaml"
    team.write_text(TEAM)
    state = tmp_path / "state.json"
    with bench(tmp_path) as made:  # its own node stays unconfigured
        rovers = Rovers(made.probe)
        process = subprocess.Popen(
            [sys.executable, "-m", "allocator_node.commands.allocator", "--team", str(team)]
            + ["--autostart", "--ros-args", "-r", "__node:=allocator_2"]
            + ["-p", f"state_file:={state}"],
            cwd=ROOT,
            env=os.environ | {"PYTHONPATH": f"{ROOT}:{os.environ.get('PYTHONPATH', '')}"},
        )
        try:
            until(lambda: busy(rovers), "a rover drives", 30)
            time.sleep(0.3)
            process.send_signal(sign)
            assert process.wait(10) == 0
            assert standing(rovers)
        finally:
            process.kill()
            process.wait()
    assert json.loads(state.read_text())["version"] == 1


def test_activate_refuses_where_another_node_commands_a_robot(tmp_path: Path) -> None:
    """It names the node and the topic, and sends nothing; without the other it activates."""
    with bench(tmp_path) as made:
        other = made.probe.node.create_publisher(TwistStamped, "/rover_2/cmd_vel", 1)
        assert made.configure()
        assert not made.activate()
        assert made.probe.state() == "inactive"
        until(lambda: "/probe publishes on /rover_2/cmd_vel" in made.probe.log(), "a log entry")
        assert [
            e.node_name for e in made.probe.node.get_publishers_info_by_topic("/rover_2/cmd_vel")
        ] == ["probe"]
        assert made.probe.set(command_robots=False).successful
        assert made.activate()
        result = made.probe.set(command_robots=True)
        assert not result.successful
        assert "/probe" in result.reason
        made.probe.node.destroy_publisher(other)
        until(lambda: made.probe.set(command_robots=True).successful, "nobody else commands")
        assert made.probe.node.count_publishers("/rover_2/cmd_vel") == 1
        diagnostics = made.probe.listen("/diagnostics", DiagnosticArray)
        made.probe.node.create_publisher(TwistStamped, "/rover_1/cmd_vel", 1)
        until(lambda: "/probe publishes on /rover_1/cmd_vel" in told(diagnostics), "an ERROR")


def test_without_command_robots_it_decides_and_drives_nobody(tmp_path: Path) -> None:
    """Decisions are published; there is not even a publisher on a command topic."""
    with bench(tmp_path, command_robots=False) as made:
        rovers = made.start()
        told = [made.probe.listen(f"/{robot}/assigned_task", String, LATE) for robot in CAMERA]
        until(lambda: "gate" in [r[-1][1].data for r in told if r], "a decision")
        assert made.node.loop.allocator.orders.driving is False
        assert made.probe.node.count_publishers("/rover_1/cmd_vel") == 0
        assert made.probe.set(command_robots=True).successful
        until(lambda: busy(rovers), "a rover drives")
        assert made.probe.set(command_robots=False).successful
        until(lambda: standing(rovers), "all stand")


def test_configure_fails_with_everything_that_is_wrong(tmp_path: Path) -> None:
    """Each error is logged, nothing is started, and a mended file can be configured."""
    with bench(tmp_path, "robots: {}\nfrme: site\n") as made:
        assert not made.configure()
        assert made.probe.state() == "unconfigured"
        until(lambda: "frme" in made.probe.log(), "the errors")
        assert made.probe.node.count_publishers("/allocator/assignments") == 0
        made.team_file.write_text(TEAM.replace("rover_1:\n", "'rover 1':\n", 1))
        assert not made.configure()
        until(lambda: '"rover 1"' in made.probe.log(), "a name no topic can have")
        made.team_file.write_text(TEAM.replace("topic: rover_1/pose, type: ", "tf: base, type: "))
        if not _has_tf2():
            assert not made.configure()
            until(lambda: "tf2_ros" in made.probe.log(), "what is missing")
        made.team_file.write_text(TEAM)
        assert made.probe.set(kappa=-1.0).successful is False
        assert made.configure()


def _has_tf2() -> bool:
    try:
        import tf2_ros  # noqa: F401
    except ImportError:
        return False
    return True


def test_cycles_of_the_lifecycle_leave_nothing_behind(tmp_path: Path) -> None:
    """Configure to cleanup, ten times: topics, handles and threads are given back."""
    import threading

    with bench(tmp_path, state_file=str(tmp_path / "state.json"), command_robots=False) as made:
        counts = []
        for _ in range(10):
            assert made.configure() and made.activate()
            assert made.deactivate() and made.cleanup()
            counts.append(
                (
                    len(os.listdir("/proc/self/fd")) if Path("/proc/self/fd").exists() else 0,
                    threading.active_count(),
                    len(list(made.node.subscriptions)),
                    len(list(made.node.publishers)),
                    len(list(made.node.timers)),
                )
            )
        assert counts[-1] == counts[2]
        assert made.probe.transition(Transition.TRANSITION_UNCONFIGURED_SHUTDOWN)


# Memory


def test_what_was_learned_survives_a_restart(tmp_path: Path) -> None:
    """The state file is taken up; a damaged one is set aside with a warning."""
    state = tmp_path / "state.json"
    with bench(tmp_path, state_file=str(state)) as made:
        rovers = made.start()
        until(lambda: busy(rovers), "a rover drives")
        assert made.deactivate()
        memory = made.node.loop.allocator.memory()
    assert json.loads(state.read_text()) == {"version": 1, "memory": json.loads(json.dumps(memory))}
    with bench(tmp_path, state_file=str(state)) as made:
        assert made.configure()
        assert json.loads(json.dumps(made.node.loop.allocator.memory())) == json.loads(
            json.dumps(memory)
        )
    damages = ("{", '{"version": 99, "memory": {}}', '{"version": 1, "memory": {"a": 3}}', "[]")
    for damage in damages:
        state.write_text(damage)
        with bench(tmp_path, state_file=str(state)) as made:
            assert made.configure()
            until(lambda: "is damaged" in made.probe.log(), "a warning")  # noqa: B023
        aside = tmp_path / "state.json.damaged"
        assert aside.read_text() == damage
        aside.unlink()


def test_an_activation_leaves_a_recording_that_can_be_reported(tmp_path: Path) -> None:
    """``record_to``: closed and readable after deactivate, one for each activation."""
    with bench(tmp_path, record_to=str(tmp_path / "recordings")) as made:
        rovers = made.start()
        until(lambda: busy(rovers), "a rover drives")
        listening = made.probe.node.count_subscribers
        until(lambda: listening("/allocator/assignments"), "the recorder listens")
        time.sleep(2.5)  # the allocator announces itself every second
        assert made.deactivate()
        (path,) = tmp_path.glob("recordings/*")
    run = read_run(path)
    assert [event["cause"] for event in run["events"]] == ["start"]
    assert run["paths"]["rover_1"] and set(run["robots"]) == {"rover_1", "rover_2"}


# What comes in


def test_best_effort_publishers_that_come_late_are_heard(tmp_path: Path) -> None:
    """A robot whose driver starts after us, with best effort, is taken up."""
    with bench(tmp_path) as made:
        assert made.configure() and made.activate()
        assignments = made.probe.listen("/allocator/assignments", DiagnosticArray)
        until(lambda: assignments, "assignments")
        assert {s.level for s in assignments[-1][1].status} == {DiagnosticStatus.ERROR}
        rovers = Rovers(
            made.probe, QoSProfile(depth=5, reliability=ReliabilityPolicy.BEST_EFFORT)
        )
        until(lambda: busy(rovers), "a rover drives")
        rovers.silent = set(CAMERA)
        until(lambda: standing(rovers), "robots that fell silent are told to stand")


def test_a_clock_that_is_set_stops_robots_and_the_loop_goes_on(tmp_path: Path) -> None:
    """Simulated time jumps from 100 s back to 20 s, then ahead; it stops, and runs fast."""
    from rosgraph_msgs.msg import Clock

    with bench(tmp_path, use_sim_time=True) as made:
        clock = made.probe.node.create_publisher(Clock, "/clock", 10)
        now, going, rate = [100.0], [True], [1.0]

        def tick() -> None:
            now[0] += 0.05 * rate[0] * going[0]
            message = Clock()
            message.clock.sec = int(now[0])
            message.clock.nanosec = int(now[0] % 1 * 1e9)
            clock.publish(message)

        made.probe.node.create_timer(0.05, tick)
        rovers = Rovers(made.probe)
        rovers.pose = lambda x, y, pose=rovers.pose: _unstamped(pose(x, y))
        assert made.configure() and made.activate()
        until(lambda: busy(rovers), "a rover drives")
        record = rovers.commands[busy(rovers)[0]]
        before = len(record)
        now[0] = 20.0
        until(lambda: "the clock was set back" in made.probe.log(), "a warning")
        until(lambda: not all(moving(m) for _, m in record[before:]), "it stands for a moment")
        until(lambda: busy(rovers), "it goes on")
        assert record[-1][1].header.stamp.sec < 60
        history = made.probe.listen("/allocator/reallocations", DiagnosticStatus, LATE)
        until(lambda: history, "the start")
        before, known = len(record), len(history)
        now[0] += 500.0
        until(lambda: "the clock was set ahead by 50" in made.probe.log(), "a warning")
        until(lambda: not all(moving(m) for _, m in record[before:]), "it stands for a moment")
        until(lambda: busy(rovers), "it goes on")
        until(lambda: len(record) > before + 10, "more commands")
        going[0] = False  # paused
        time.sleep(0.5)
        paused = len(record)
        time.sleep(0.5)
        assert len(record) <= paused + 1, "no time goes by, nothing is decided"
        assert len(history) == known, [m.message for _, m in history]
        going[0], rate[0] = True, 10.0
        until(lambda: len(record) > paused + 20, "ten times as fast")
        assert made.node.loop._health.failures == 0
        until(lambda: busy(rovers), "a rover drives again")


def test_where_no_time_goes_by_robots_stand_and_it_is_told(tmp_path: Path) -> None:
    """use_sim_time, and whoever publishes /clock dies: no period comes any more."""
    from rosgraph_msgs.msg import Clock

    with bench(tmp_path, use_sim_time=True) as made:
        clock = made.probe.node.create_publisher(Clock, "/clock", 10)
        now, going = [100.0], [True]

        def tick() -> None:
            now[0] += 0.05 * going[0]
            message = Clock()
            message.clock.sec = int(now[0])
            message.clock.nanosec = int(now[0] % 1 * 1e9)
            clock.publish(message)

        timer = made.probe.node.create_timer(0.05, tick)
        rovers = Rovers(made.probe)
        rovers.pose = lambda x, y, pose=rovers.pose: _unstamped(pose(x, y))
        assert made.configure() and made.activate()
        until(lambda: busy(rovers), "a rover drives")
        timer.cancel()
        until(lambda: standing(rovers), "they are told to stand")
        until(lambda: "/clock must be published" in made.probe.log(), "a reason")
        reports = made.probe.listen("/diagnostics", DiagnosticArray, 10)
        until(
            lambda: any(
                "no time has gone by" in status.message
                for _, message in reports
                for status in message.status
            ),
            "an error in the diagnostics",
        )
        timer.reset()
        until(lambda: busy(rovers), "time goes by, and a rover drives again")


def test_hold_is_obeyed_at_once_and_through_a_restart(tmp_path: Path) -> None:
    """Also where no period comes; and the next node says why nobody moves."""
    state = tmp_path / "state.json"
    with bench(tmp_path, state_file=str(state), rate=0.2) as made:
        rovers = Rovers(made.probe)
        assert made.configure() and made.activate()
        until(lambda: busy(rovers), "a rover drives", 30)
        record = rovers.commands[busy(rovers)[0]]
        before = len(record)
        made.probe.call(SetBool, "/allocator/hold", SetBool.Request(data=True))
        until(lambda: len(record) > before and not moving(record[-1][1]), "it stands", 2)
        until(
            lambda: state.exists() and json.loads(state.read_text())["memory"]["hold"],
            "it is saved", 2,
        )  # fmt: skip
    with bench(tmp_path, state_file=str(state)) as made:
        rovers = made.start()
        until(lambda: "as before the restart" in made.probe.log(), "it is told")
        until(lambda: standing(rovers), "commands")
        assert made.probe.set(kappa=0.003).successful  # makes no new orders
        time.sleep(0.5)
        assert standing(rovers)
        made.probe.call(SetBool, "/allocator/hold", SetBool.Request(data=False))
        until(lambda: busy(rovers), "a rover drives")


def test_a_state_file_that_cannot_be_read_is_not_written_over(tmp_path: Path) -> None:
    state = tmp_path / "state.json"
    state.mkdir()  # not even root can read it
    with bench(tmp_path, state_file=str(state)) as made:
        made.start()
        until(lambda: "writing none over it" in made.probe.log(), "it is told")
        until(lambda: made.node.loop._decision is not None, "a decision")
        assert made.deactivate()
    assert state.is_dir()


def _unstamped(message: PoseStamped) -> PoseStamped:
    message.header.stamp.sec = message.header.stamp.nanosec = 0
    return message
