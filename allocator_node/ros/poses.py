"""Where robots are: poses from topics or transforms, placed in the site frame."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from geometry_msgs.msg import Pose, PoseStamped, PoseWithCovarianceStamped
from nav_msgs.msg import Odometry
from rclpy.node import Node

from ..team import PoseSource
from .clockwork import BELIEVED, StampReader, arrival_time
from .complaints import Complaints
from .conversions import numbers, placed, pose_of, seconds_of, turned
from .polling import PolledSubscription
from .qos import NEWEST

POSE_TYPES: dict[str, type] = {
    "nav_msgs/msg/Odometry": Odometry,
    "geometry_msgs/msg/PoseStamped": PoseStamped,
    "geometry_msgs/msg/PoseWithCovarianceStamped": PoseWithCovarianceStamped,
}

NOT_MEASURED = np.full(4, np.nan)


@dataclass(frozen=True)
class Sighting:
    """Where a robot was: pose (4,) and velocity (4,) in the site frame, and when, s."""

    pose: np.ndarray
    velocity: np.ndarray
    time: float


class PoseTopic:
    """Poses of one robot from a topic."""

    def __init__(self, node: Node, source: PoseSource, frame: str, complaints: Complaints) -> None:
        """Subscribe to the source; ``frame`` is the site frame."""
        self._places = {frame: (0.0, 0.0, 0.0)}
        if source.frame is not None:
            self._places[source.frame] = source.offset
        self._subscription = PolledSubscription(
            node, POSE_TYPES[source.type], source.topic, NEWEST, complaints
        )
        self._complaints = complaints
        self._stamps = StampReader()
        self._last_look = np.nan

    @property
    def topic(self) -> str:
        """Full name of the topic."""
        return self._subscription.topic

    @property
    def message_type(self) -> type:
        """Type of its messages."""
        return self._subscription.message_type

    def look(self, now: float, believed: float = BELIEVED) -> Sighting | None:
        """Give the newest pose, if a good one came since the last look.

        Args:
            now: Time, s.
            believed: How old a stamp may be, s, before another clock is thought of.
        """
        last_look, self._last_look = self._last_look, now
        arrival = self._subscription.take()
        if arrival is None:
            return None
        message = arrival.message
        try:
            offset = self._offset_of(message.header.frame_id)
            pose = placed(pose_of(_pose_in(message)), offset)
        except ValueError as error:
            self._complaints.refuse(self.topic, str(error))
            return None
        when, odd = self._stamps.time_of(
            now,
            arrival_time(now, arrival.received, last_look),
            seconds_of(message.header.stamp),
            believed,
        )
        if odd:
            self._complaints.warn(self.topic, odd)
        if when is None:
            return None
        return Sighting(pose, self._velocity_in(message, pose[3]), when)

    def _offset_of(self, frame_id: str) -> tuple[float, float, float]:
        if frame_id not in self._places:
            known = " or ".join(repr(frame) for frame in self._places)
            raise ValueError(f"frame_id is {frame_id!r}, the team file says {known}")
        return self._places[frame_id]

    def _velocity_in(self, message: Any, heading: float) -> np.ndarray:
        # The twist of an Odometry is in its child frame, the body (REP 105).
        if not isinstance(message, Odometry):
            return NOT_MEASURED
        twist = message.twist.twist
        try:
            linear = numbers(twist.linear, "the velocity")
            angular = numbers(twist.angular, "the turn rate")
        except ValueError as error:
            self._complaints.warn(self.topic, f"velocity not used: {error}")
            return NOT_MEASURED
        return turned((*linear, angular[2]), heading)

    def forget_times(self) -> None:
        """Take the next message as the first."""
        self._stamps.forget()
        self._last_look = np.nan

    def close(self) -> None:
        """End the subscription."""
        self._subscription.close()


class Transforms:
    """The tf2 tree, where tf2_ros is installed."""

    def __init__(self, node: Node) -> None:
        """Start to listen.

        Raises:
            ImportError: tf2_ros is not installed.
        """
        try:
            import tf2_ros
        except ImportError as error:
            raise ImportError(
                "the team file takes a pose from tf, which needs the package tf2_ros; "
                "install it (ros-$ROS_DISTRO-tf2-ros-py), or name a pose topic instead"
            ) from error
        self._errors = tf2_ros.TransformException
        self._buffer = tf2_ros.Buffer(node=node)
        self._listener = tf2_ros.TransformListener(self._buffer, node)

    def newest(self, frame: str, child: str) -> Any:
        """Give the newest TransformStamped of a child frame in a frame.

        Raises:
            ValueError: There is none; says why.
        """
        from rclpy.time import Time

        try:
            return self._buffer.lookup_transform(frame, child, Time())
        except self._errors as error:
            raise ValueError(str(error)) from error

    def close(self) -> None:
        """Stop listening."""
        self._listener.unregister()


class PoseTransform:
    """Poses of one robot from tf."""

    def __init__(
        self, transforms: Transforms, child: str, frame: str, complaints: Complaints
    ) -> None:
        """Look up ``child`` in the site frame ``frame``."""
        self._transforms, self._child, self._frame = transforms, child, frame
        self._complaints = complaints
        self._stamps = StampReader()
        self._stamp: float | None = None
        self.topic = f"tf {child}"

    def look(self, now: float, believed: float = BELIEVED) -> Sighting | None:
        """Give the newest pose, if a good one came since the last look.

        Args:
            now: Time, s.
            believed: How old a stamp may be, s, before another clock is thought of.
        """
        try:
            found = self._transforms.newest(self._frame, self._child)
            stamp = seconds_of(found.header.stamp)
            last, self._stamp = self._stamp, stamp
            if stamp == last or (last is None and now - stamp > believed):
                return None  # Nothing came: the tree still holds an old one.
            moved = found.transform
            pose = pose_of(Pose(position=_point(moved), orientation=moved.rotation))
        except ValueError as error:
            self._complaints.refuse(self.topic, str(error))
            return None
        when, odd = self._stamps.time_of(now, now, stamp, believed)
        if odd:
            self._complaints.warn(self.topic, odd)
        return None if when is None else Sighting(pose, NOT_MEASURED, when)

    def forget_times(self) -> None:
        """Take the next transform as the first."""
        self._stamps.forget()
        self._stamp = None

    def close(self) -> None:
        """Nothing to end: the tree is shared."""


def _pose_in(message: Any) -> Pose:
    return message.pose if isinstance(message, PoseStamped) else message.pose.pose


def _point(transform: Any) -> Any:
    from geometry_msgs.msg import Point

    shift = transform.translation
    return Point(x=shift.x, y=shift.y, z=shift.z)
