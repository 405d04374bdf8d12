"""Between ROS messages and plain numbers (REP 103: SI units, x ahead, y left, z up)."""

from __future__ import annotations

from collections.abc import Sequence
from math import atan2, cos, hypot, isfinite, sin

import numpy as np
from builtin_interfaces.msg import Time
from diagnostic_msgs.msg import DiagnosticStatus, KeyValue
from geometry_msgs.msg import Point, Pose, Quaternion, Twist, Vector3

QUATERNION_TOLERANCE = 0.1
"""How far the length of a quaternion may be from 1."""

FARTHEST = 1e6
"""Coordinates beyond this, m, are taken for garbage."""


def yaw_of(quaternion: Quaternion) -> float:
    """Give the heading of a rotation: its yaw in the order yaw, pitch, roll (REP 103), rad.

    Raises:
        ValueError: The quaternion is no rotation.
    """
    x, y, z, w = quaternion.x, quaternion.y, quaternion.z, quaternion.w
    length = (x * x + y * y + z * z + w * w) ** 0.5
    if not abs(length - 1) <= QUATERNION_TOLERANCE:
        raise ValueError(f"the quaternion has length {length:.3g}, a rotation has 1")
    return atan2(2 * (w * z + x * y), w * w + x * x - y * y - z * z)


def quaternion_of(yaw: float) -> Quaternion:
    """Give the rotation about z by a heading in rad."""
    return Quaternion(z=sin(yaw / 2), w=cos(yaw / 2))


def numbers(vector: Point | Vector3, what: str) -> tuple[float, float, float]:
    """Give x, y, z of a message.

    Raises:
        ValueError: One of them is not finite, or absurdly large.
    """
    values = (vector.x, vector.y, vector.z)
    if not all(map(isfinite, values)):
        raise ValueError(f"{what} is not finite: {values}")
    if max(map(abs, values)) > FARTHEST:
        raise ValueError(f"{what} is absurdly large: {values}")
    return values


def pose_of(pose: Pose) -> np.ndarray:
    """Give x, y, z (m) and heading (rad) of a pose, shape (4,).

    Raises:
        ValueError: Not finite, absurd, or without a rotation.
    """
    return np.array([*numbers(pose.position, "the position"), yaw_of(pose.orientation)])


def pose_message(pose: Sequence[float]) -> Pose:
    """Give the message of x, y, z (m) and heading (rad)."""
    x, y, z, yaw = map(float, pose)
    return Pose(position=Point(x=x, y=y, z=z), orientation=quaternion_of(yaw))


def placed(pose: np.ndarray, offset: Sequence[float]) -> np.ndarray:
    """Give a pose (4,) of a frame that lies at ``offset`` = x, y, heading in the site frame."""
    x, y, turn = offset
    return np.array([
        x + cos(turn) * pose[0] - sin(turn) * pose[1],
        y + sin(turn) * pose[0] + cos(turn) * pose[1],
        pose[2],
        wrapped(pose[3] + turn),
    ])


def seen_from(pose: np.ndarray, offset: Sequence[float]) -> np.ndarray:
    """Give a pose (4,) of the site frame in a frame that lies at ``offset``; undoes placed."""
    x, y, turn = offset
    east, north = pose[0] - x, pose[1] - y
    return np.array([
        cos(turn) * east + sin(turn) * north,
        -sin(turn) * east + cos(turn) * north,
        pose[2],
        wrapped(pose[3] - turn),
    ])


def turned(velocity: Sequence[float], angle: float) -> np.ndarray:
    """Give a velocity (vx, vy, vz, ω) turned by an angle about z, shape (4,)."""
    vx, vy, vz, turn_rate = velocity
    return np.array([
        cos(angle) * vx - sin(angle) * vy, sin(angle) * vx + cos(angle) * vy, vz, turn_rate
    ])


def wrapped(angle: float) -> float:
    """Give an angle within −π .. π, rad."""
    return atan2(sin(angle), cos(angle))


def bearing(start: Sequence[float], end: Sequence[float]) -> float:
    """Give the direction from one point to another in the plane, rad."""
    return atan2(end[1] - start[1], end[0] - start[0])


def gap(start: Sequence[float], end: Sequence[float]) -> float:
    """Give the distance of two points in the plane, m."""
    return hypot(end[0] - start[0], end[1] - start[1])


def twist_of(command: Sequence[float]) -> Twist:
    """Give the Twist of a body velocity (vx, vy, vz, ω), m/s and rad/s."""
    vx, vy, vz, turn_rate = map(float, command)
    return Twist(linear=Vector3(x=vx, y=vy, z=vz), angular=Vector3(z=turn_rate))


def velocity_of(twist: Twist) -> tuple[float, float, float, float]:
    """Give the body velocity (vx, vy, vz, ω) of a Twist, m/s and rad/s."""
    return (twist.linear.x, twist.linear.y, twist.linear.z, twist.angular.z)


def seconds_of(stamp: Time) -> float:
    """Give a stamp in s."""
    return stamp.sec + 1e-9 * stamp.nanosec


def stamp_of(seconds: float) -> Time:
    """Give the stamp of a time in s, never before zero."""
    nanoseconds = max(0, round(seconds * 1e9))
    return Time(sec=nanoseconds // 10**9, nanosec=nanoseconds % 10**9)


def type_name(message_type: type) -> str:
    """Give the name of a message type, such as ``std_msgs/msg/String``."""
    package, kind, _ = message_type.__module__.split(".", 2)
    return f"{package}/{kind}/{message_type.__name__}"


def status_of(
    name: str, level: int, message: str, values: dict[str, object], hardware: str = ""
) -> DiagnosticStatus:
    """Give a diagnostic status; floats among the values are written with three decimals."""
    return DiagnosticStatus(
        level=bytes([level]),
        name=name,
        message=message,
        hardware_id=hardware,
        values=[
            KeyValue(key=key, value=f"{value:.3f}" if isinstance(value, float) else str(value))
            for key, value in values.items()
        ],
    )
