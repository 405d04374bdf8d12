"""What a team is: robots, capabilities, tasks and the site they work on.

Plain frozen dataclasses in SI units and REP 103 axes. The ranges in the
annotations are what a file is checked against (:mod:`allocator_node.team_file`);
objects made in code are taken as they are.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Annotated, Literal

from annotated_types import Ge, Gt, Le, Lt, MinLen

if TYPE_CHECKING:
    from .drives import Drive
    from .tasks import Task

Positive = Annotated[float, Gt(0)]
NonNegative = Annotated[float, Ge(0)]
Share = Annotated[float, Ge(0), Le(1)]
Point = tuple[float, float]
Polygon = Annotated[tuple[Point, ...], MinLen(3)]
Name = Annotated[str, MinLen(1)]

PoseType = Literal[
    "nav_msgs/msg/Odometry",
    "geometry_msgs/msg/PoseStamped",
    "geometry_msgs/msg/PoseWithCovarianceStamped",
]
CommandType = Literal[
    "geometry_msgs/msg/TwistStamped",
    "geometry_msgs/msg/Twist",
    "geometry_msgs/msg/PoseStamped",
]


class Checked:
    """Base of everything a user's file can hold: unknown keys are errors there."""

    __pydantic_config__ = {"extra": "forbid", "allow_inf_nan": False}


@dataclass(frozen=True)
class Way(Checked):
    """One way to a capability: features that must all work, and how good it is.

    Attributes:
        features: Names of the features (``with`` in a file).
        grade: Grade g_w in (0, 1].
    """

    features: Annotated[tuple[Name, ...], MinLen(1)]
    grade: Annotated[float, Gt(0), Le(1)] = 1.0


@dataclass(frozen=True)
class Battery(Checked):
    """Energy of one robot.

    Attributes:
        capacity_wh: Energy when full, Wh.
        reserve: Share of the capacity that is never planned with.
        idle_w: Power while standing, W.
        drive_w: Power that driving at full command adds, W.
        charge_w: Power that its dock puts into it, W.
    """

    capacity_wh: Positive = 500.0
    reserve: Annotated[float, Ge(0), Lt(1)] = 0.2
    idle_w: NonNegative = 20.0
    drive_w: NonNegative = 100.0
    charge_w: NonNegative = 300.0


@dataclass(frozen=True)
class PoseSource(Checked):
    """Where a robot's pose comes from: a topic, or a transform.

    Attributes:
        topic: Topic name; relative names are resolved in the node's namespace's parent.
        type: Message type.
        frame: The robot's own frame the pose is given in, if not the site frame.
        offset: Where that frame lies in the site frame: x, y (m), heading (rad).
        tf: Child frame to look up with tf2 instead of a topic.
    """

    topic: Name | None = None
    type: PoseType = "nav_msgs/msg/Odometry"
    frame: Name | None = None
    offset: tuple[float, float, float] = (0.0, 0.0, 0.0)
    tf: Name | None = None


@dataclass(frozen=True)
class CommandSink(Checked):
    """Where a robot takes its commands."""

    topic: Name
    type: CommandType = "geometry_msgs/msg/TwistStamped"


@dataclass(frozen=True)
class HealthRule(Checked):
    """Which diagnostic status speaks for which feature.

    Attributes:
        name: ``DiagnosticStatus.name``, shell wildcards allowed.
        feature: Feature of the robot whose health it is.
    """

    name: Name
    feature: Name


@dataclass(frozen=True)
class Robot(Checked):
    """One robot. Fields left at None take a default made from the name.

    Attributes:
        name: Name; also the default prefix of its topics.
        drive: How it moves (:mod:`allocator_node.drives`).
        radius: Radius of the circle around its axle that holds the body, m.
        features: Names of what it carries.
        battery: Its energy.
        dock: Where it charges, x, y (m); None: it is not sent to charge.
        start: Where simulation and rehearsal put it: x, y (m), heading (rad).
        pose: Source of its pose; default ``<name>/odom``, Odometry.
        command: Sink of its commands; default ``<name>/cmd_vel``, TwistStamped.
        battery_topic: BatteryState topic; default ``<name>/battery_state``.
        health: Diagnostics of its features; default ``<name>: <feature>`` for
            each feature, with spaces for underscores.
    """

    name: Name
    drive: Drive
    radius: Positive = 0.4
    features: tuple[Name, ...] = ()
    battery: Battery = field(default_factory=Battery)
    dock: Point | None = None
    start: tuple[float, float, float] = (0.0, 0.0, 0.0)
    pose: PoseSource | None = None
    command: CommandSink | None = None
    battery_topic: Name | None = None
    health: tuple[HealthRule, ...] | None = None

    def __post_init__(self) -> None:
        defaults = {
            "pose": PoseSource(topic=f"{self.name}/odom"),
            "command": CommandSink(topic=f"{self.name}/cmd_vel"),
            "battery_topic": f"{self.name}/battery_state",
            "health": tuple(
                HealthRule(f"{self.name}: {feature.replace('_', ' ')}", feature)
                for feature in self.features
            ),
        }
        for key, value in defaults.items():
            if getattr(self, key) is None:
                object.__setattr__(self, key, value)

    @property
    def navigates(self) -> bool:
        """Whether it brings its own navigation: it is sent goals, not velocities."""
        return self.command.type == "geometry_msgs/msg/PoseStamped"


@dataclass(frozen=True)
class HeadCount(Checked):
    """How many robots a task takes; ``max`` None means as many as there are."""

    min: Annotated[int, Ge(0)] = 1
    max: Annotated[int, Ge(1)] | None = None


@dataclass(frozen=True)
class Target(Checked):
    """Something a task keeps to that may move; exactly one of the three is given.

    Attributes:
        task: Name of a task: the middle of the robots that do it.
        robot: Name of a robot.
        topic: Topic of geometry_msgs/msg/PoseStamped in the site frame.

    Raises:
        ValueError: None or several are given.
    """

    task: Name | None = None
    robot: Name | None = None
    topic: Name | None = None

    def __post_init__(self) -> None:
        if sum(part is not None for part in (self.task, self.robot, self.topic)) != 1:
            raise ValueError("give exactly one of task, robot and topic")


@dataclass(frozen=True)
class KeepOut(Checked):
    """An area no robot may enter: a simple polygon, m."""

    name: Name
    polygon: Polygon


@dataclass(frozen=True)
class Team:
    """A team, its site and its work.

    Attributes:
        frame: Fixed frame of every pose and goal (REP 105).
        boundary: Polygon no robot may leave, m; None for an open site.
        keep_out: Areas no robot may enter.
        capabilities: Name to the ways that give it.
        robots: Name to robot, in file order; the order is the index i.
        tasks: Name to task, in file order; the order is the index m.
    """

    robots: Mapping[str, Robot]
    tasks: Mapping[str, Task] = field(default_factory=dict)
    capabilities: Mapping[str, tuple[Way, ...]] = field(default_factory=dict)
    frame: Name = "map"
    boundary: Polygon | None = None
    keep_out: tuple[KeepOut, ...] = ()

    def with_tasks(self, tasks: Mapping[str, Task]) -> Team:
        """Give the same team with another task table."""
        return replace(self, tasks=dict(tasks))


def target_topics(team: Team) -> list[str]:
    """Give the pose topics that tasks of a team keep to."""
    targets = [task.keeps_to for task in team.tasks.values()]
    topics = [target.topic for target in targets if isinstance(target, Target) and target.topic]
    return list(dict.fromkeys(topics))
