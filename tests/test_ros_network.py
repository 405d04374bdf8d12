"""A team on two hosts with a bad link between them: loss, delay, and a partition."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import time
from collections import Counter
from collections.abc import Iterator
from contextlib import contextmanager
from itertools import combinations
from pathlib import Path

import numpy as np
import pytest

pytest.importorskip("rclpy", reason="needs ROS 2: rclpy is not installed")

from hosts import missing, two_hosts  # noqa: E402
from ros_bench import until  # noqa: E402

pytestmark = [pytest.mark.ros, pytest.mark.skipif(missing() is not None, reason=str(missing()))]

TESTS = Path(__file__).parent

RADIUS = 0.4
NEAR, FAR = ("near_1", "near_2"), ("far_1", "far_2")

SITE = """
frame: site
boundary: [[-5, -5], [45, -5], [45, 25], [-5, 25]]
capabilities: {look: [{with: [camera]}]}
"""

TASKS = """
tasks:
  north:
    {kind: patrol, waypoints: [[2, 6], [22, 6], [22, 10], [2, 10]], needs: {look: 1.0},
     robots: {min: 2, max: 2}, priority: 3}
  south:
    {kind: patrol, waypoints: [[18, 1], [2, 1], [2, 8], [18, 8]], needs: {look: 1.0},
     robots: {min: 1, max: 1}, priority: 2}
"""
"""Two loops that cross; they want three robots, so that somebody of each host is needed."""

PLACES = {"near_1": (0, 0), "near_2": (0, 4), "far_1": (20, 0), "far_2": (20, 4)}

LOSS, DELAY, PARTITION = 0.2, 0.3, 30.0
"""What the link does to frames both ways, s."""

PATIENT = ["--ros-args", "-p", "health_timeout:=10.0"]
"""One report a second, of which a fifth is lost: five in a row are lost once an hour."""


def team_file(robots: tuple[str, ...]) -> str:
    """Give the team file of some of the robots."""
    crew = "".join(
        f"  {name}: {{drive: {{model: holonomic, max_speed: 1.0}}, radius: {RADIUS}, "
        f"features: [camera], start: [{PLACES[name][0]}, {PLACES[name][1]}, 0]}}\n"
        for name in robots
    )
    return f"{SITE}robots:\n{crew}{TASKS}"


class Record:
    """What was heard on one host, in the order of arrival."""

    def __init__(self, path: Path) -> None:
        self._path = path

    def of(self, kind: str, **wanted: str) -> list[dict]:
        """Give what was heard of a kind, where all the wanted values are as said."""
        lines = self._path.read_text().splitlines() if self._path.exists() else []
        heard = [json.loads(line) for line in lines if line.startswith("{") and line[-1] == "}"]
        return [
            entry for entry in heard
            if entry["kind"] == kind and all(entry[key] == wanted[key] for key in wanted)
        ]  # fmt: skip

    def changes(self, since: float) -> list[dict]:
        """Give the reallocations since a time."""
        return [change for change in self.of("change") if change["t"] > since]

    def path(self, robot: str) -> np.ndarray:
        """Give times and places of a robot, shape (n, 3)."""
        return np.array([[e["t"], e["x"], e["y"]] for e in self.of("pose", robot=robot)])


@contextmanager
def team_on_two_hosts(out: Path) -> Iterator[tuple[Record, Record, object]]:
    """Start the allocator and two robots here, two more there; give what is heard, and the link."""
    commands = "allocator_node.commands."
    files = {"near": NEAR, "far": FAR, "team": NEAR + FAR}
    for name, robots in files.items():
        (out / f"{name}.yaml").write_text(team_file(robots))
    environment = {
        "ROS_AUTOMATIC_DISCOVERY_RANGE": "SUBNET",
        # Namespaces share the memory of the machine: hosts do not.
        "FASTDDS_BUILTIN_TRANSPORTS": "UDPv4",
        "PYTHONPATH": f"{TESTS.parent}:{os.environ.get('PYTHONPATH', '')}",
    }
    processes: list[subprocess.Popen] = []
    with two_hosts() as (near, far, link):
        link.loss, link.delay = LOSS, DELAY
        try:
            for host, name, command in (
                (near, "near.jsonl", [str(TESTS / "overheard.py"), *NEAR]),
                (far, "far.jsonl", [str(TESTS / "overheard.py"), *FAR]),
                (near, "near.log", ["-m", f"{commands}team_sim", str(out / "near.yaml")]),
                (far, "far.log", ["-m", f"{commands}team_sim", str(out / "far.yaml")]),
                (near, "allocator.log", ["-m", f"{commands}allocator", "--autostart",
                                         "--team", str(out / "team.yaml"), *PATIENT]),
            ):  # fmt: skip
                processes.append(
                    host.start(*command, log=out / name, environment=environment)
                )
            yield Record(out / "near.jsonl"), Record(out / "far.jsonl"), link
        finally:
            for process in processes:
                process.send_signal(signal.SIGINT)
            for process in processes:
                try:
                    process.wait(10)
                except subprocess.TimeoutExpired:
                    process.kill()
                    process.wait()


def on(changes: list[dict], task: str) -> str:
    """Give who is on a task after some changes."""
    groups = [change["to"] for change in changes if change["task"] == task]
    return groups[-1] if groups else ""


def joins(changes: list[dict]) -> Counter:
    """Count how often each robot joined each task in the course of some changes."""
    count: Counter = Counter()
    for change in changes:
        before, after = (set(change[key].split(", ")) - {""} for key in ("from", "to"))
        count.update((robot, change["task"]) for robot in after - before)
    return count


def moved(path: np.ndarray, since: float, until: float) -> float:
    """Give how far a path goes between two times, m."""
    part = path[(path[:, 0] >= since) & (path[:, 0] <= until), 1:]
    return float(np.hypot(*np.diff(part, axis=0).T).sum())


def nearest(paths: list[np.ndarray]) -> float:
    """Give the smallest distance between bodies, m."""
    times = np.arange(max(p[0, 0] for p in paths), min(p[-1, 0] for p in paths), 0.05)
    places = [np.column_stack([np.interp(times, p[:, 0], p[:, k]) for k in (1, 2)]) for p in paths]
    apart = min(np.hypot(*(a - b).T).min() for a, b in combinations(places, 2))
    return float(apart) - 2 * RADIUS


def test_a_lossy_slow_link_and_a_partition_of_half_a_minute(tmp_path: Path) -> None:
    """20% loss and 300 ms delay each way, then nothing for 30 s, then as before.

    The team works over the bad link; robots on the far side of the partition are silent
    and stand by their own timeout; afterwards they come back without a fight.
    """
    with team_on_two_hosts(tmp_path) as (near, far, link):
        def covered() -> bool:
            changes = near.changes(0.0)
            return len(on(changes, "north").split(", ")) == 2 and bool(on(changes, "south"))

        until(covered, "both tasks have their robots", 60)
        until(lambda: any(c["speed"] > 0.5 for c in far.of("command")), "a far robot drives", 20)
        time.sleep(15)
        link.cut, cut = True, time.monotonic()
        time.sleep(PARTITION)
        link.cut, healed = False, time.monotonic()
        until(lambda: covered() and near.changes(healed), "all is covered again", 30)
        time.sleep(12)
        end = time.monotonic()

    before = [c for c in near.changes(0.0) if c["t"] < cut]
    assert not [c for c in before if c["cause"] in ("silent", "feature")], before
    assert moved(far.path(on_far(before)), cut - 10, cut) > 3.0, "driven as if nothing were"

    during = [c for c in near.changes(cut) if c["t"] < healed]
    assert {c["cause"] for c in during} == {"silent"}, during
    assert during[0]["t"] - cut < 2.0
    for robot in FAR:
        assert moved(far.path(robot), cut + 1.5, healed) < 0.05, "they stand by themselves"

    after = near.changes(healed)
    assert after[0]["t"] - healed < 25.0
    assert max(joins(after).values()) == 1, f"a fight: {after}"
    assert moved(far.path(on_far(after)), end - 8, end) > 3.0, "driven again"
    assert nearest([near.path(r) for r in NEAR] + [far.path(r) for r in FAR]) > 0.0


def on_far(changes: list[dict]) -> str:
    """Give a far robot that has a task after some changes."""
    busy = f"{on(changes, 'north')}, {on(changes, 'south')}"
    return next(robot for robot in FAR if robot in busy)
