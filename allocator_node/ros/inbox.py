"""Messages in: all that was heard since the last decision, as one observation."""

from __future__ import annotations

import fnmatch
import re
from collections.abc import Callable, Iterator
from typing import TypeVar

import numpy as np
from diagnostic_msgs.msg import DiagnosticArray
from geometry_msgs.msg import PoseStamped
from rclpy.node import Node
from sensor_msgs.msg import BatteryState
from std_msgs.msg import Float32

from ..observation import HealthReport, MovedGoal, Observation, TargetPose
from ..team import PoseSource, Robot, Team, target_topics
from .clockwork import BELIEVED, arrival_time
from .complaints import Complaints
from .conversions import numbers, type_name, yaw_of
from .polling import PolledSubscription
from .poses import PoseTopic, PoseTransform, Transforms
from .qos import GOALS, NEWEST, REPORTS

LEVELS = 4
"""DiagnosticStatus has the levels OK, WARN, ERROR, STALE = 0, 1, 2, 3."""

AT_ONCE = 200
"""Up to so many quality topics are subscribed to from the start; a large team's
only once somebody publishes on them."""

READING = 0.01
"""Time that reading one flooded topic may take of a period, s."""

Value = TypeVar("Value")


class Inbox:
    """Listens for a team and gives what it heard, once a period.

    What cannot be used is refused with a warning that names the topic and the
    reason; the last good value stays and ages.

    Attributes:
        complaints: What was refused.
    """

    def __init__(self, node: Node, team: Team) -> None:
        """Subscribe to everything the team file names.

        Raises:
            ImportError: A pose comes from tf and tf2_ros is not installed.
        """
        self._node = node
        self._frame = team.frame
        self.complaints = Complaints(node.get_logger())
        robots = tuple(team.robots.values())
        self._transforms = Transforms(node) if any(_by_tf(robot) for robot in robots) else None
        self._poses = [self._pose_source(robot) for robot in robots]
        self._batteries = [
            self._subscription(BatteryState, robot.battery_topic, NEWEST) for robot in robots
        ]
        self._diagnostics = PolledSubscription(
            node, DiagnosticArray, "/diagnostics", REPORTS, self.complaints, _sieve(robots)
        )
        self._concerns_us = _matcher(robots)
        self._robots = tuple(team.robots)
        self._goals: dict[str, PolledSubscription] = {}
        self._quality: dict[tuple[str, str], PolledSubscription] = {}
        self._targets: dict[str, PoseTopic] = {}
        self._last = Observation.nothing(len(robots))
        self._last_look = np.nan
        self.watch(team)

    def _pose_source(self, robot: Robot) -> PoseTopic | PoseTransform:
        if _by_tf(robot):
            return PoseTransform(self._transforms, robot.pose.tf, self._frame, self.complaints)
        return PoseTopic(self._node, robot.pose, self._frame, self.complaints)

    def _subscription(self, message_type: type, topic: str, qos: object) -> PolledSubscription:
        return PolledSubscription(self._node, message_type, topic, qos, self.complaints)

    def watch(self, team: Team) -> None:
        """Follow a task table: subscribe to its goals, targets and qualities, drop the others."""
        self._tasks = tuple(team.tasks)
        self._follow(
            self._goals,
            list(self._tasks),
            lambda task: self._subscription(PoseStamped, f"~/tasks/{task}/goal", GOALS),
        )
        self._follow(self._targets, target_topics(team), self._target)
        self.notice_publishers()

    def _target(self, topic: str) -> PoseTopic:
        source = PoseSource(topic=topic, type="geometry_msgs/msg/PoseStamped")
        return PoseTopic(self._node, source, self._frame, self.complaints)

    def notice_publishers(self) -> None:
        """Subscribe to the quality topics that are in use, and tell of topics whose type is wrong.

        Call about once a second.
        """
        known = dict(self._node.get_topic_names_and_types())
        pairs = [(robot, task) for robot in self._robots for task in self._tasks]
        if len(pairs) > AT_ONCE:
            pairs = [
                pair
                for pair in pairs
                if (topic := self._full(pair)) in known and self._node.count_publishers(topic)
            ]
        self._follow(
            self._quality,
            pairs,
            lambda pair: self._subscription(Float32, self._full(pair), NEWEST),
        )
        for source in self._listening():
            others = set(known.get(source.topic, ())) - {type_name(source.message_type)}
            if others:
                self.complaints.warn(
                    source.topic,
                    f"somebody uses it for {', '.join(sorted(others))}, which cannot be heard: "
                    f"its type here is {type_name(source.message_type)}",
                )

    def _listening(self) -> Iterator[PolledSubscription | PoseTopic]:
        yield from (source for source in self._poses if isinstance(source, PoseTopic))
        yield from self._batteries
        yield self._diagnostics
        for table in (self._goals, self._targets, self._quality):
            yield from table.values()

    def _full(self, pair: tuple[str, str]) -> str:
        return self._node.resolve_topic_name(f"~/quality/{pair[0]}/{pair[1]}")

    @staticmethod
    def _follow(
        table: dict[Value, PolledSubscription | PoseTopic],
        wanted: list[Value],
        subscribe: Callable[[Value], PolledSubscription | PoseTopic],
    ) -> None:
        for key in table.keys() - set(wanted):
            table.pop(key).close()
        for key in wanted:
            if key not in table:
                table[key] = subscribe(key)

    def observation(self, now: float, pose_timeout: float = BELIEVED) -> Observation:
        """Give all that was heard up to ``now``, s on the node's clock.

        Args:
            now: Time, s.
            pose_timeout: Age from which a pose is too old to be of use, s.
        """
        believed, last = max(BELIEVED, pose_timeout), self._last
        poses, times, velocities = last.poses.copy(), last.pose_times.copy(), last.velocities.copy()
        for i, source in enumerate(self._poses):
            sighting = source.look(now, believed)
            if sighting is not None:
                poses[i], times[i] = sighting.pose, sighting.time
                velocities[i] = sighting.velocity
        charges, charge_times = last.charges.copy(), last.charge_times.copy()
        for i, subscription in enumerate(self._batteries):
            for arrival in subscription.drain():
                charge = self._charge(subscription.topic, arrival.message)
                if charge is not None:
                    charges[i] = charge
                    charge_times[i] = arrival_time(now, arrival.received, self._last_look)
        self._last_look = now
        self._last = Observation(
            poses,
            times,
            velocities,
            charges,
            charge_times,
            health=tuple(self._health()),
            goals=tuple(self._moved_goals()),
            quality=dict(self._qualities()),
            targets=self._seen_targets(now),
        )
        return self._last

    def _seen_targets(self, now: float) -> dict[str, TargetPose]:
        """Give the newest pose of each target topic that was ever heard."""
        seen = {t: pose for t, pose in self._last.targets.items() if t in self._targets}
        for topic, source in self._targets.items():
            sighting = source.look(now)
            if sighting is not None:
                seen[topic] = TargetPose(sighting.pose, sighting.time)
        return seen

    def _charge(self, topic: str, message: BatteryState) -> float | None:
        """Give BatteryState.percentage: "0 to 1 range (If unmeasured NaN)", else None."""
        charge = float(message.percentage)
        if np.isnan(charge):
            return None
        if not 0.0 <= charge <= 1.0:
            self.complaints.refuse(topic, f"percentage is {charge:.4g}, it must be within 0..1")
            return None
        return charge

    def _health(self) -> Iterator[HealthReport]:
        newest: dict[str, HealthReport] = {}
        for arrival in self._diagnostics.drain(READING):
            for status in arrival.message.status:
                if not self._concerns_us(status.name):
                    continue
                level = status.level[0]
                if level >= LEVELS:
                    self.complaints.refuse(
                        self._diagnostics.topic, f"{status.name!r} has level {level}, not 0..3"
                    )
                    continue
                newest.pop(status.name, None)  # Keeps the order of arrival.
                newest[status.name] = HealthReport(status.name, level, status.message)
        yield from newest.values()

    def _moved_goals(self) -> Iterator[MovedGoal]:
        for task, subscription in self._goals.items():
            last = None
            for arrival in subscription.drain():
                try:
                    last = self._moved_goal(task, arrival.message)
                except ValueError as error:
                    self.complaints.refuse(subscription.topic, str(error))
            if last is not None:
                yield last

    def _moved_goal(self, task: str, message: PoseStamped) -> MovedGoal:
        if message.header.frame_id != self._frame:
            raise ValueError(
                f"frame_id is {message.header.frame_id!r}, the site frame is {self._frame!r}"
            )
        turn = message.pose.orientation
        # All zero is no rotation: a sender that leaves the heading as it is.
        given = any((turn.x, turn.y, turn.z, turn.w))
        return MovedGoal(
            task,
            numbers(message.pose.position, "the position"),
            yaw_of(turn) if given else None,
        )

    def _qualities(self) -> Iterator[tuple[tuple[str, str], float]]:
        for pair, subscription in self._quality.items():
            for arrival in subscription.drain():
                quality = float(arrival.message.data)
                if 0.0 <= quality <= 1.0:
                    yield pair, quality
                else:
                    self.complaints.refuse(
                        subscription.topic, f"quality is {quality:.4g}, it must be within 0..1"
                    )

    def sources(self) -> dict[str, str]:
        """Give each robot's pose topic."""
        return {
            robot: source.topic for robot, source in zip(self._robots, self._poses, strict=True)
        }

    def forget_times(self) -> None:
        """Drop all that was heard: the clock was set, so its times mean nothing."""
        self._last = Observation.nothing(len(self._robots))
        self._last_look = np.nan
        for source in self._poses:
            source.forget_times()
        for source in self._targets.values():
            source.forget_times()

    def close(self) -> None:
        """End all subscriptions."""
        for source in self._poses:
            source.close()
        tables = (self._goals, self._quality, self._targets)
        for subscription in (
            *self._batteries, self._diagnostics, *(s for table in tables for s in table.values())
        ):
            subscription.close()
        if self._transforms is not None:
            self._transforms.close()


def _by_tf(robot: Robot) -> bool:
    return robot.pose.tf is not None


def _matcher(robots: tuple[Robot, ...]) -> Callable[[str], object]:
    """Give a test of whether any health rule speaks about a status name."""
    rules = {rule.name for robot in robots for rule in robot.health}
    return re.compile("|".join(fnmatch.translate(rule) for rule in rules) or r"(?!)").match


def _sieve(robots: tuple[Robot, ...]) -> Callable[[bytes], object]:
    """Give a test of whether a message as it came can hold a name that :func:`_matcher` knows."""
    # What stands between brackets is no literal text.
    literal = {
        max(re.split(r"\[!?\]?[^]]*\]|[*?[]", rule.name), key=len)
        for robot in robots
        for rule in robot.health
    }
    return re.compile(b"|".join(re.escape(part.encode()) for part in literal) or b"(?!)").search
