"""Recordings: written and read without ROS, and the same story as a rehearsal's."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from rosbags.rosbag2 import StoragePlugin, Writer

from allocator_node.commands.team_report import main
from allocator_node.decision import Level
from allocator_node.recording import Bag, NotARecording, read_run
from allocator_node.recording.bag import TYPES
from allocator_node.recording.meeting import nearest_rows
from allocator_node.sim.record import Rehearsal
from allocator_node.sim.rehearsal import rehearse
from allocator_node.sim.world_file import parse_world
from allocator_node.team_file import parse_team

ROOT = Path(__file__).parents[1]

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
    pose: {topic: rover_1/odom, frame: rover_1/odom, offset: [2, 1, 1.57]}
  rover_2:
    drive: {model: differential, max_speed: 1.0, max_turn_rate: 1.5, lookahead: 0.25}
    features: [wheels, thermal_camera]
    start: [0, 4, 0]
tasks:
  gate: {kind: watch, at: [20, 2], needs: {thermal_scan: 1.0}}
  pump: {kind: visit, at: [0, 8], dwell: 1.0, priority: 1}
"""

WORLD = """
events:
  - {at: 4.05, robot: rover_1, feature: thermal_camera, level: error}
  - {at: 8.05, robot: rover_2, pose: silent}
  - {at: 12.05, robot: rover_2, pose: resumed}
"""
SECONDS = 16.0


def message(kind: str, **values: Any) -> Any:
    """Give a message of the standard definitions."""
    return TYPES.types[kind](**values)


def stamp_of(t: float) -> Any:
    return message(
        "builtin_interfaces/msg/Time", sec=int(t), nanosec=int(round((t - int(t)) * 1e9))
    )


def status(name: str, level: int, text: str, values: dict[str, Any]) -> Any:
    return message(
        "diagnostic_msgs/msg/DiagnosticStatus", level=level, name=name, message=text,
        hardware_id="",
        values=[message("diagnostic_msgs/msg/KeyValue", key=k, value=str(v))
                for k, v in values.items()],
    )  # fmt: skip


def array(t: float, statuses: list[Any]) -> Any:
    header = message("std_msgs/msg/Header", stamp=stamp_of(t), frame_id="")
    return message("diagnostic_msgs/msg/DiagnosticArray", header=header, status=statuses)


def odometry(t: float, frame: str, x: float, y: float, yaw: float) -> Any:
    point = message("geometry_msgs/msg/Point", x=x, y=y, z=0.0)
    turn = message("geometry_msgs/msg/Quaternion", x=0.0, y=0.0, z=np.sin(yaw / 2),
                   w=np.cos(yaw / 2))  # fmt: skip
    zero = message("geometry_msgs/msg/Vector3", x=0.0, y=0.0, z=0.0)
    return message(
        "nav_msgs/msg/Odometry",
        header=message("std_msgs/msg/Header", stamp=stamp_of(t), frame_id=frame),
        child_frame_id="",
        pose=message(
            "geometry_msgs/msg/PoseWithCovariance", covariance=np.zeros(36),
            pose=message("geometry_msgs/msg/Pose", position=point, orientation=turn),
        ),
        twist=message(
            "geometry_msgs/msg/TwistWithCovariance", covariance=np.zeros(36),
            twist=message("geometry_msgs/msg/Twist", linear=zero, angular=zero),
        ),
    )  # fmt: skip


def messages_of(run: Rehearsal, base: float) -> list[tuple[float, str, str, Any]]:
    """Give what would have been published in a rehearsal: time, topic, type, message."""
    out: list[tuple[float, str, str, Any]] = []
    doing: dict[str, str] = {}
    able: dict[tuple[str, str], float] = {}
    for t in np.arange(0.0, run.seconds, 1.0):
        for row in run.assignments:
            if row["t"] <= t:
                doing[row["robot"]] = row["task"] or ""
        for row in run.specialization:
            if row["t"] <= t:
                able[row["robot"], row["task"]] = row["value"]
        silent = {s["robot"] for s in run.silent if s["t"] <= t < s["until"]}
        out.append((t, "/allocator/assignments", "diagnostic_msgs/msg/DiagnosticArray", array(
            base + t,
            [status(robot, 2 if robot in silent else 0,
                    f"{robot} does it" + (", not heard from" if robot in silent else ""),
                    {"task": doing.get(robot, ""),
                     **{f"specialization.{task}": able.get((robot, task), 0.0)
                        for task in run.tasks}})
             for robot in run.robots])))  # fmt: skip
        short = [s["text"] for s in run.shortfalls if s["t"] <= t < s["until"]]
        lacking = ", ".join(text.split(" lacks ")[0] for text in short)
        out.append((t, "/diagnostics", "diagnostic_msgs/msg/DiagnosticArray", array(base + t, [
            status("allocator: coverage", 2 if short else 0,
                   "; ".join(short) or "every active task has what it needs",
                   {"uncovered": lacking}),
            status("allocator: period", 0, "kept",
                   {"work_ms.median": "2.0", "work_ms.max": "5.0"}),
        ])))  # fmt: skip
    for event in run.events:
        out.append((event["t"], "/allocator/reallocations", "diagnostic_msgs/msg/DiagnosticStatus",
                    status(event["task"], Level.OK.value, event["detail"], {
                        "task": event["task"], "from": ", ".join(event["from"]),
                        "to": ", ".join(event["to"]), "cause": event["cause"],
                        "detail": event["detail"],
                        "stamp": f"{base + event['t']:.3f}"})))  # fmt: skip
    for robot, rows in run.paths.items():
        for t, x, y, _, yaw in rows:
            frame = "site"
            if robot == "rover_1":  # told in its own frame, which lies at [2, 1, 1.57]
                cos, sin = np.cos(1.57), np.sin(1.57)
                dx, dy = x - 2, y - 1
                x, y, yaw, frame = cos * dx + sin * dy, -sin * dx + cos * dy, yaw - 1.57, (
                    "rover_1/odom")  # fmt: skip
            out.append((t, f"/{robot}/odom", "nav_msgs/msg/Odometry",
                        odometry(base + t, frame, x, y, yaw)))  # fmt: skip
    return sorted(out, key=lambda row: row[0])


BASE = 1.7e9
APART = 5.0
"""The recorder's clock is this much ahead of the allocator's, s."""


@pytest.fixture(scope="module")
def rehearsed() -> Rehearsal:
    team = parse_team(TEAM)
    return rehearse(team, parse_world(WORLD, team), SECONDS, seed=2)


@pytest.fixture(scope="module")
def recorded(rehearsed: Rehearsal, tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("recorded") / "recording"
    with Bag(path, TEAM) as bag:
        for t, topic, kind, content in messages_of(rehearsed, BASE):
            stamp = round((BASE + APART + t) * 1e9)
            bag.write(topic, kind, stamp, TYPES.serialize_cdr(content, kind))
    return path


def test_a_recording_tells_the_story_of_its_rehearsal(rehearsed, recorded) -> None:
    run = read_run(recorded)
    assert len(rehearsed.events) >= 6  # the scenario is worth comparing
    keys = ("task", "from", "to", "cause", "detail")
    assert [[e[k] for k in keys] for e in run["events"]] == (
        [[e[k] for k in keys] for e in rehearsed.events]
    )
    assert [e["t"] for e in run["events"]] == pytest.approx([e["t"] for e in rehearsed.events])
    assert run["robots"] == rehearsed.robots and run["tasks"] == rehearsed.tasks
    assert run["finished"] == pytest.approx(rehearsed.finished)
    # Coverage is told once a second, and so is known to a second or two.
    for task, share in rehearsed.coverage.items():
        active = rehearsed.active_s[task]
        assert run["active_s"][task] == pytest.approx(active, abs=1.5)
        assert abs(run["coverage"][task] - share) * active <= 2.0
    for robot, rows in rehearsed.paths.items():
        known = {round(t): (x, y) for t, x, y, *_ in run["paths"][robot]}
        for t, x, y, *_ in rows[2:-1]:
            assert known[round(t)] == pytest.approx((x, y), abs=0.25)
    assert [s["robot"] for s in run["silent"]] == ["rover_2"]
    assert run["site"]["keep_out"][0]["name"] == "shed"


@pytest.mark.parametrize("plugin", list(StoragePlugin))
def test_a_recording_without_a_team_file_is_read_by_names_and_types(
    plugin, rehearsed, tmp_path
) -> None:
    """As ``ros2 bag record`` leaves it: sqlite3 or mcap, no custom data."""
    path = tmp_path / "bag"
    with Writer(path, version=9, storage_plugin=plugin) as writer:
        connections = {}
        for t, topic, kind, content in messages_of(rehearsed, BASE):
            if topic not in connections:
                connections[topic] = writer.add_connection(topic, kind, typestore=TYPES)
            raw = TYPES.serialize_cdr(content, kind)
            writer.write(connections[topic], round((BASE + t) * 1e9), raw)
    run = read_run(path)
    assert [e["cause"] for e in run["events"]] == [e["cause"] for e in rehearsed.events]
    assert run["paths"]["rover_2"] and run["boundary_violations"] is None
    out = tmp_path / "out"
    assert main([str(path), "--out", str(out)]) == 0
    assert (out / "report.html").is_file()
    (file,) = (f for f in path.iterdir() if f.suffix in (".mcap", ".db3"))
    assert len(read_run(file)["events"]) == len(run["events"])


def test_what_is_no_recording_is_refused(tmp_path, capsys, recorded) -> None:
    text = tmp_path / "text.mcap"
    text.write_text("no recording")
    empty = tmp_path / "empty"
    empty.mkdir()
    other = tmp_path / "other"
    with Bag(other) as bag:
        raw = TYPES.serialize_cdr(odometry(0.0, "site", 0.0, 0.0, 0.0), "nav_msgs/msg/Odometry")
        bag.write("/r/odom", "nav_msgs/msg/Odometry", 1, raw)
    for path in (text, empty, other, tmp_path / "missing"):
        with pytest.raises(NotARecording):
            read_run(path)
        assert main([str(path), "--out", str(tmp_path / "out")]) == 2
        said = capsys.readouterr().err
        assert str(path) in said and "Traceback" not in said
    with pytest.raises(FileExistsError):
        Bag(other)


def test_a_closed_recording_drops_what_comes_later(tmp_path) -> None:
    bag = Bag(tmp_path / "bag", TEAM)
    bag.close()
    bag.write("/late", "nav_msgs/msg/Odometry", 1, b"")
    bag.close()


def test_distances_by_hand() -> None:
    """Two bodies of 0.4 m radius pass each other at 1 m: 0.2 m of air, half-way."""
    team = parse_team(TEAM)
    poses = {
        "rover_1": [(float(t), float(t), 0.0, 0.0, 0.0) for t in range(11)],
        "rover_2": [(float(t), 10.0 - t, 1.0, 0.0, 0.0) for t in range(11)],
    }
    nearest, paths, outside = nearest_rows(poses, team, 10.0)
    least = min(nearest, key=lambda row: row[1])
    assert least[0] == pytest.approx(5.0) and least[1] == pytest.approx(0.2)
    assert least[2:4] == ["rover_1", "rover_2"] and least[4:] == pytest.approx([5.0, 0.5])
    assert paths["rover_1"][3][:3] == pytest.approx([3.0, 3.0, 0.0])
    assert outside == 0


@pytest.mark.ros
@pytest.mark.slow
def test_the_demo_and_a_rehearsal_of_the_same_scenario_tell_the_same_story(
    tmp_path, ros_domain
) -> None:
    """The live allocator on real topics, recorded, against the rehearsal without ROS."""
    pytest.importorskip("rclpy")
    files = [tmp_path / "team.yaml", tmp_path / "world.yaml"]
    for file, text in zip(files, (TEAM, WORLD), strict=True):
        file.write_text(text, "utf-8")
    out = tmp_path / "out"
    demo = subprocess.run(
        [sys.executable, "-m", "allocator_node.commands.team_demo", *map(str, files),
         "--seconds", str(SECONDS), "--out", str(out)],
        capture_output=True, text=True, timeout=120,
        env=os.environ | {"PYTHONPATH": f"{ROOT}:{os.environ.get('PYTHONPATH', '')}"},
    )  # fmt: skip
    assert demo.returncode == 0, demo.stdout + demo.stderr
    assert (out / "report.html").is_file()
    live = read_run(out / "recording")
    team = parse_team(TEAM)
    rehearsed = rehearse(team, parse_world(WORLD, team), SECONDS)

    def told(events: list[dict]) -> list[tuple[str, str]]:
        return [(event["task"], event["cause"]) for event in events]

    assert told(live["events"]) == told(rehearsed.events)
    assert json.dumps(live, allow_nan=False)
    # The demo was watched from its first decision on, a little after the simulation began.
    assert live["seconds"] == pytest.approx(SECONDS, abs=4.0)
    assert live["energy_wh"]["rover_2"] > 0 and live["min_separation_m"] > 0
