"""What the messages of a recording say, as plain numbers and texts."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import yaml
from rosbags.highlevel import AnyReader, AnyReaderError
from rosbags.interfaces import Connection
from rosbags.typesys import Stores, get_typestore

from ..files.document import FileError
from ..team import Team
from ..team_file import parse_team
from .bag import TEAM
from .topics import BATTERY, DIAGNOSTICS

POSES = (
    "nav_msgs/msg/Odometry",
    "geometry_msgs/msg/PoseWithCovarianceStamped",
    "geometry_msgs/msg/PoseStamped",
)
"""Pose types, the likeliest first where no team file tells which topic is a robot's pose."""

POSE_GAP, BATTERY_GAP = int(0.19e9), int(0.9e9)
"""Messages on one topic closer together than this are passed over unread, ns."""


class NotARecording(ValueError):
    """The file is no recording a report can be made of; says why."""


@dataclass
class Samples:
    """What was recorded; times are those of the recorder's clock, s.

    Attributes:
        team: The team file, where the recording or the user gives one.
        node: Name of the allocator's node, without its namespace.
        assignments: Time, time by the allocator's clock, robot to its status.
        reallocations: One mapping of values a change.
        diagnostics: Time and the allocator's own statuses by their part.
        poses: Robot to rows of time, x, y, z (m), heading (rad), in the site frame.
        charges: Robot to rows of time, charge 0..1.
        markers: Last markers of the allocator, as (namespace, message).
    """

    team: Team | None
    node: str
    assignments: list[tuple[float, float, dict[str, Mapping[str, Any]]]] = field(
        default_factory=list
    )
    reallocations: list[Mapping[str, str]] = field(default_factory=list)
    diagnostics: list[tuple[float, dict[str, Mapping[str, Any]]]] = field(default_factory=list)
    poses: dict[str, list[tuple[float, ...]]] = field(default_factory=dict)
    charges: dict[str, list[tuple[float, float]]] = field(default_factory=dict)
    markers: list[tuple[str, Any]] = field(default_factory=list)


def read_samples(path: Path, team: Team | None = None) -> Samples:
    """Read a recording: rosbag2 with mcap or sqlite3, a directory or one file of it.

    Args:
        path: The recording.
        team: The team; None: as kept with the recording, if it is.

    Raises:
        NotARecording: It cannot be read, or the allocator's topics are not in it.
    """
    types = get_typestore(Stores.ROS2_JAZZY)
    try:
        with AnyReader([path], default_typestore=types) as reader:
            return _read(reader, team or kept_team(path))
    except (AnyReaderError, OSError, ValueError, KeyError, AssertionError) as error:
        raise NotARecording(f"{path} cannot be made a report of: {error}") from error


def kept_team(path: Path) -> Team | None:
    """Give the team whose file is kept with a recording."""
    metadata = (path if path.is_dir() else path.parent) / "metadata.yaml"
    try:
        data = yaml.safe_load(metadata.read_text("utf-8"))
        text = (data["rosbag2_bagfile_information"].get("custom_data") or {}).get(TEAM)
        return parse_team(text, "the recording's team file") if text else None
    except (OSError, yaml.YAMLError, KeyError, TypeError, AttributeError, FileError):
        return None


def _read(reader: AnyReader, team: Team | None) -> Samples:
    announced = [
        c for c in reader.connections
        if c.topic.endswith("/assignments") and c.msgtype == DIAGNOSTICS
    ]  # fmt: skip
    if not announced:
        held = ", ".join(sorted({c.topic for c in reader.connections})[:12]) or "nothing"
        raise NotARecording(
            f"it holds {held}, but no …/assignments of an allocator: record that topic too"
        )
    base = announced[0].topic.removesuffix("/assignments")
    samples = Samples(team, base.rsplit("/", 1)[-1])
    wanted = {
        f"{base}/assignments": _assignments,
        f"{base}/reallocations": _reallocation,
        f"{base}/markers": _markers,
        "/diagnostics": _diagnostics,
    }
    connections = [c for c in reader.connections if c.topic in wanted]
    for connection, stamp, raw in reader.messages(connections=connections):
        message = reader.deserialize(raw, connection.msgtype)
        wanted[connection.topic](samples, stamp * 1e-9, message)
    _read_robots(reader, samples)
    return samples


def _read_robots(reader: AnyReader, samples: Samples) -> None:
    robots = samples.assignments[0][2] if samples.assignments else {}
    by_topic: dict[str, tuple[str, str]] = {}
    for robot in robots:
        pose, battery = _topics_of(robot, samples.team, reader.connections)
        by_topic |= {t: (robot, what) for t, what in ((pose, "pose"), (battery, "battery")) if t}
    connections = [c for c in reader.connections if c.topic in by_topic]
    due: dict[str, int] = {}
    for connection, stamp, raw in reader.messages(connections=connections):
        robot, what = by_topic[connection.topic]
        if stamp < due.get(connection.topic, 0):
            continue
        due[connection.topic] = stamp + (POSE_GAP if what == "pose" else BATTERY_GAP)
        message = reader.deserialize(raw, connection.msgtype)
        if what == "battery":
            if 0 <= message.percentage <= 1:
                samples.charges.setdefault(robot, []).append((stamp * 1e-9, message.percentage))
        elif (pose := _pose_of(message, robot, samples.team)) is not None:
            samples.poses.setdefault(robot, []).append((stamp * 1e-9, *pose))


def _topics_of(
    robot: str, team: Team | None, connections: list[Connection]
) -> tuple[str | None, str | None]:
    """Give the topics of a robot's pose and battery: by the team file, else by name and type."""
    names = {connection.topic for connection in connections}
    if team is not None and robot in team.robots:
        known = team.robots[robot]
        return _recorded(known.pose.topic, names), _recorded(known.battery_topic, names)
    own = [c for c in connections if f"/{robot}/" in c.topic and "goal" not in c.topic]
    poses = [c.topic for kind in POSES for c in own if c.msgtype == kind]
    batteries = [c.topic for c in own if c.msgtype == BATTERY]
    return (poses or [None])[0], (batteries or [None])[0]


def _recorded(topic: str | None, names: set[str]) -> str | None:
    """Find a topic under its full name; a relative one lies in some namespace."""
    if topic is None or topic in names:
        return topic
    ending = "/" + topic.lstrip("/")
    return min((name for name in names if name.endswith(ending)), key=len, default=None)


def _pose_of(message: Any, robot: str, team: Team | None) -> tuple[float, ...] | None:
    pose = message.pose
    while hasattr(pose, "pose"):
        pose = pose.pose
    p, q = pose.position, pose.orientation
    yaw = np.arctan2(2 * (q.w * q.z + q.x * q.y), q.w**2 + q.x**2 - q.y**2 - q.z**2)
    x, y, z = p.x, p.y, p.z
    if not np.isfinite([x, y, z, yaw]).all():
        return None
    source = team.robots[robot].pose if team is not None and robot in team.robots else None
    if source is not None and source.frame and message.header.frame_id == source.frame:
        # The robot's own frame lies at an offset in the site frame.
        dx, dy, turn = source.offset
        cos, sin = np.cos(turn), np.sin(turn)
        x, y, yaw = dx + cos * x - sin * y, dy + sin * x + cos * y, yaw + turn
    return float(x), float(y), float(z), float(yaw)


def _assignments(samples: Samples, now: float, message: Any) -> None:
    stamp = message.header.stamp
    robots = {name: status for name, status in map(_plain, message.status)}
    samples.assignments.append((now, stamp.sec + 1e-9 * stamp.nanosec, robots))


def _reallocation(samples: Samples, now: float, message: Any) -> None:
    samples.reallocations.append(_plain(message)[1]["values"])


def _diagnostics(samples: Samples, now: float, message: Any) -> None:
    own = f"{samples.node}: "
    parts = {name.removeprefix(own): status
             for name, status in map(_plain, message.status) if name.startswith(own)}  # fmt: skip
    if parts:
        samples.diagnostics.append((now, parts))


def _markers(samples: Samples, now: float, message: Any) -> None:
    samples.markers = [(marker.ns, marker) for marker in message.markers]


def _plain(status: Any) -> tuple[str, Mapping[str, Any]]:
    return status.name, {
        "level": int(status.level),
        "text": status.message,
        "values": {pair.key: pair.value for pair in status.values},
    }


def statuses(rows: list[tuple[float, dict[str, Any]]], part: str) -> Iterator[tuple[float, Any]]:
    """Give time and status of one part of the allocator's diagnostics."""
    for now, parts in rows:
        if part in parts:
            yield now, parts[part]
