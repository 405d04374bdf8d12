"""Two allocators for one team: the second gives way."""

from __future__ import annotations

import time
from pathlib import Path

import pytest

pytest.importorskip("rclpy", reason="needs ROS 2: rclpy is not installed")

from ros_bench import Rovers, allocator, bench, busy, until  # noqa: E402

from allocator_node.ros import loop  # noqa: E402

pytestmark = pytest.mark.ros


@pytest.mark.parametrize("name", ["second", "first"])
def test_a_second_allocator_on_the_team_refuses(tmp_path: Path, name: str) -> None:
    """Also one of the same name; the first goes on undisturbed."""
    with bench(tmp_path) as made:
        rovers = Rovers(made.probe)
        with allocator(made.team_file, "first"):
            until(lambda: busy(rovers), "a rover drives", 30)
            with allocator(made.team_file, name) as second:
                assert second.wait(30) == 1
                assert "publishes on /rover_1/cmd_vel" in second.stderr.read()
            assert busy(rovers)


def test_a_node_that_discovers_another_one_late_gives_way(tmp_path: Path, monkeypatch) -> None:
    """As on a loaded machine, where discovery takes longer than activate waits."""
    monkeypatch.setattr(loop.Loop, "_refuse_if_occupied", lambda self: None)
    with bench(tmp_path) as made:
        rovers = Rovers(made.probe)
        with allocator(made.team_file, "first"):
            until(lambda: busy(rovers), "a rover drives", 30)
            time.sleep(loop.NEWCOMER + 1.0)
            assert made.configure() and made.activate()
            until(lambda: made.node.loop.occupied, "it notices")
            assert "/first publishes on /rover_1/cmd_vel" in made.node.loop.occupied
            until(
                lambda: made.probe.node.count_publishers("/rover_1/cmd_vel") == 1, "it lets go"
            )
            assert made.probe.set(kappa=0.003).successful
            assert made.probe.node.count_publishers("/rover_1/cmd_vel") == 1
            until(lambda: busy(rovers), "the first one drives on")
        monkeypatch.undo()
        assert made.probe.set(command_robots=False, kappa=0.002).successful
        until(lambda: made.probe.set(command_robots=True).successful, "nobody else commands", 30)
        until(lambda: busy(rovers), "now it drives")
