"""The node on real topics: 100 simulated robots at 20 Hz, 40 tasks, a loop of 10 Hz.

python3 tests/benchmarks/node_100.py [--seconds 300] [--robots 100] [--tasks 40]

Needs ROS 2. Starts ``team_sim`` and ``allocator`` as processes, listens to the stamps of one
robot's commands, and prints the histogram of the periods between them, the share of a core
and the memory of the node. Exit status 1: a period was missed by more than half.
"""

from __future__ import annotations

import argparse
import os
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import paths  # noqa: F401
import yaml
from cases import PERIOD, farm
from watching import Usage, histogram

from allocator_node.commands.children import Child
from allocator_node.tasks import Patrol, Task, Visit
from allocator_node.team import Team

WARM_UP = 10.0
"""Time before anything counts: discovery, the first proof, s."""



def written(team: Team) -> str:
    """Give the team file of a farm's team."""

    def of(task: Task) -> dict:
        common = {
            "kind": task.kind, "needs": dict(task.needs), "each": list(task.each),
            "robots": {"min": task.robots.min, "max": task.robots.max},
            "priority": task.priority,
        }  # fmt: skip
        if isinstance(task, Patrol):
            return common | {"waypoints": [list(point) for point in task.waypoints]}
        if isinstance(task, Visit):
            return common | {"at": list(task.at), "dwell": task.dwell}
        return common | {"at": list(task.at), "face": list(task.face)}

    document = {
        "frame": team.frame,
        "boundary": [list(corner) for corner in team.boundary],
        "capabilities": {
            name: [{"with": list(way.features), "grade": way.grade} for way in ways]
            for name, ways in team.capabilities.items()
        },
        "robots": {
            robot.name: {
                "drive": {"model": robot.drive.model, "max_speed": robot.drive.max_speed},
                "features": list(map(str, robot.features)),
                "dock": list(robot.dock),
                "start": list(robot.start),
            }
            for robot in team.robots.values()
        },
        "tasks": {task.name: of(task) for task in team.tasks.values()},
    }
    return yaml.safe_dump(document, sort_keys=False)


def measure(seconds: float, robots: int, tasks: int) -> tuple[np.ndarray, Usage, Usage]:
    """Run the node; give the periods of its commands, s, and what node and simulation use."""
    import rclpy
    from geometry_msgs.msg import TwistStamped
    from rclpy.qos import qos_profile_sensor_data

    stamps: list[float] = []

    def heard(message: TwistStamped) -> None:
        stamps.append(message.header.stamp.sec + 1e-9 * message.header.stamp.nanosec)

    with tempfile.TemporaryDirectory() as directory:
        team_file = Path(directory) / "team.yaml"
        team_file.write_text(written(farm(robots, tasks)))
        rclpy.init()
        node = rclpy.create_node("stopwatch")
        node.create_subscription(TwistStamped, "/r0/cmd_vel", heard, qos_profile_sensor_data)
        children = []
        try:
            for command, arguments in (
                ("team_sim", [str(team_file)]),
                ("allocator", ["--team", str(team_file), "--autostart"]),
            ):
                log = Path(directory) / f"{command}.log"
                children.append(Child(command, arguments, log, os.environ))
            sim, allocator = (Usage(child.pid) for child in children)
            begun = time.monotonic()
            while not stamps:
                rclpy.spin_once(node, timeout_sec=0.2)
                if time.monotonic() > begun + 60 or any(c.status is not None for c in children):
                    told = "\n".join(line for c in children for line in c.last_lines())
                    raise SystemExit(f"no command came:\n{told}")
            counted = 0
            begun = time.monotonic()
            while time.monotonic() < begun + WARM_UP + seconds:
                rclpy.spin_once(node, timeout_sec=0.2)
                warm = time.monotonic() > begun + WARM_UP
                counted = counted or (len(stamps) if warm else 0)
                if warm and (not sim.times or time.monotonic() > sim.times[-1] + 1.0):
                    sim.look()
                    allocator.look()
        finally:
            for child in reversed(children):
                child.stop()
            node.destroy_node()
            rclpy.try_shutdown()
    return np.diff(stamps[counted:]), allocator, sim


def main() -> int:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--seconds", type=float, default=300.0)
    parser.add_argument("--robots", type=int, default=100)
    parser.add_argument("--tasks", type=int, default=40)
    options = parser.parse_args()
    os.environ.setdefault("ROS_AUTOMATIC_DISCOVERY_RANGE", "LOCALHOST")
    load = os.getloadavg()[0]
    periods, node, sim = measure(options.seconds, options.robots, options.tasks)
    missed = int((periods > 1.5 * PERIOD).sum())
    print(f"{os.cpu_count()} cores, load {load:.1f} before and {os.getloadavg()[0]:.1f} after")
    print(f"{options.robots} robots, {options.tasks} tasks, {len(periods)} periods of 100 ms:")
    print(histogram(periods))
    p50, p99 = 1e3 * np.percentile(periods, [50, 99])
    print(f"median {p50:.1f} ms, p99 {p99:.1f} ms, longest {1e3 * periods.max():.1f} ms")
    print(f"missed by more than half: {missed}")
    print(f"the node keeps {node.cores:.2f} cores busy, the simulation {sim.cores:.2f}")
    tenth = max(len(node.memory) // 10, 1)
    first, last = np.mean(node.memory[:tenth]), np.mean(node.memory[-tenth:])
    print(f"memory of the node: {first:.1f} MB at first, {last:.1f} MB at last")
    return int(missed > 0)


if __name__ == "__main__":
    sys.exit(main())
