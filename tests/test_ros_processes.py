"""Processes that die and come back: the node, the drivers of its robots."""

from __future__ import annotations

import json
import signal
import time
from pathlib import Path

import pytest

pytest.importorskip("rclpy", reason="needs ROS 2: rclpy is not installed")

from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus  # noqa: E402
from geometry_msgs.msg import PoseStamped  # noqa: E402
from ros_bench import (  # noqa: E402
    CAMERA,
    LATE,
    Bench,
    Rovers,
    allocator,
    bench,
    busy,
    moving,
    until,
    values_of,
)

pytestmark = pytest.mark.ros


def test_after_a_kill_robots_stop_and_the_next_node_goes_on(tmp_path: Path) -> None:
    """No zero command is sent by a node that is killed: robots must stop by themselves.

    The node that is started then knows from its state file that the camera of the nearer
    rover is broken, though nobody says so again, and gives nobody another task.
    """
    with bench(tmp_path) as made:  # its own node stays unconfigured
        probe, rovers = made.probe, Rovers(made.probe)
        rovers.places["rover_1"][0] = 9.0
        state = tmp_path / "state.json"
        saves = ("-p", f"state_file:={state}", "-p", "health_timeout:=60.0")
        with allocator(made.team_file, "first", *saves) as first:
            until(lambda: busy(rovers) == ["rover_1"], "the nearer rover drives", 30)
            health = probe.node.create_publisher(DiagnosticArray, "/diagnostics", 10)
            until(health.get_subscription_count, "a listener")
            broken = DiagnosticStatus(name=CAMERA["rover_1"], level=DiagnosticStatus.ERROR)

            def taken_over() -> bool:
                # Heard best effort: what is said before the two have found each other is lost.
                health.publish(DiagnosticArray(status=[broken]))
                return busy(rovers) == ["rover_2"]

            until(taken_over, "the other rover takes over")
            until(
                lambda: json.loads(state.read_text())["memory"]["assignment"]
                == {"rover_2": "gate"},
                "it is saved",
            )
            first.send_signal(signal.SIGKILL)
            first.wait(5)
        time.sleep(0.6)  # the rovers' own command timeout is 0.5 s
        places = json.dumps(rovers.places)
        time.sleep(0.3)
        assert json.dumps(rovers.places) == places, "robots stop when commands stop"
        record = rovers.commands["rover_1"]
        before = len(record)
        changes = probe.listen("/second/reallocations", DiagnosticStatus, LATE)
        with allocator(made.team_file, "second", *saves):
            until(lambda: len(record) > before, "commands come again", 30)
            until(lambda: busy(rovers) == ["rover_2"], "the same rover goes on")
            time.sleep(1.5)
            assert not [message for _, message in record[before:] if moving(message)]
            assert [values_of(message) for _, message in changes] == []


def test_a_robot_whose_driver_restarts_is_taken_up_again(tmp_path: Path) -> None:
    """Its publisher goes, and comes back with a clock that began anew."""
    with bench(tmp_path) as made:
        rovers = made.start()
        until(lambda: busy(rovers), "a rover drives")
        (driving,) = busy(rovers)
        node = made.probe.node
        rovers.silent.add(driving)
        node.destroy_publisher(rovers._publishers[driving])
        until(lambda: busy(rovers) not in ([], [driving]), "the other takes over")
        rovers._publishers[driving] = node.create_publisher(PoseStamped, f"/{driving}/pose", 10)
        stamped = rovers.pose

        def pose(x: float, y: float) -> PoseStamped:
            message = stamped(x, y)
            message.header.stamp.sec -= 1_000_000_000
            return message

        rovers.pose = pose
        rovers.silent.clear()
        history = made.probe.listen("/allocator/assignments", DiagnosticArray, LATE)
        until(
            lambda: history
            and all("not heard" not in status.message for status in history[-1][1].status),
            "both are heard",
        )
        until(lambda: "the time of arrival is used instead" in made.probe.log(), "a warning")


def test_many_lives_leave_nothing_behind(tmp_path: Path, request: pytest.FixtureRequest) -> None:
    """Configure to cleanup, driving; 100 times with ``--whole``, then also by memory."""
    import threading

    lives = 100 if request.config.getoption("--whole") else 8
    with bench(tmp_path, state_file=str(tmp_path / "state.json")) as made:
        Rovers(made.probe)
        counts, resident = [], []
        for _ in range(lives):
            assert made.configure() and made.activate()
            until(lambda: made.node.loop._decision is not None, "a decision")
            assert made.deactivate() and made.cleanup()
            counts.append(_held(made, threading.active_count()))
            resident.append(_resident())
        assert counts[-1] == counts[2]
        if lives == 100:
            print(f"\nresident memory after 20 lives {resident[19]} kB, then {resident[-1]} kB")
            assert resident[-1] <= 1.02 * resident[19]


def _held(made: Bench, threads: int) -> tuple[int, ...]:
    """Give how many handles, threads and entities a process and its node hold."""
    handles = Path("/proc/self/fd")
    return (
        len(list(handles.iterdir())) if handles.exists() else 0,
        threads,
        *(len(list(getattr(made.node, kind))) for kind in
          ("subscriptions", "publishers", "timers", "services", "clients")),
    )  # fmt: skip


def _resident() -> int:
    """Give the resident memory of this process, kB."""
    status = Path("/proc/self/status")
    text = status.read_text() if status.exists() else "VmRSS: 0"
    return int(text.partition("VmRSS:")[2].split()[0])
