"""World files: what is rehearsed, noise, bad ground and things that go wrong."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Annotated, Any, Literal

from annotated_types import MinLen

from ..files.document import Document, Place, parse_document, read_document
from ..files.form import BROKEN, Draft, read_fields
from ..files.free_space import FreeSpace
from ..files.team_checks import check_distinct, check_inside, points_of
from ..files.wording import described, one_of
from ..team import Checked, Name, NonNegative, Point, Positive, Share, Team, target_topics


@dataclass(frozen=True)
class Noise(Checked):
    """Standard deviations of the poses that robots report.

    Attributes:
        position_m: In x and in y, m.
        heading_rad: In the heading, rad.
    """

    position_m: NonNegative = 0.0
    heading_rad: NonNegative = 0.0


@dataclass(frozen=True)
class GroundPatch(Checked):
    """Ground on which some robots lose speed.

    Attributes:
        name: Name.
        circle: Where: x, y, radius, m.
        keeps: Share of its speed an affected robot keeps.
        affects: Robots with one of these features are affected.
    """

    name: Name
    circle: tuple[float, float, Positive]
    keeps: Share
    affects: Annotated[tuple[Name, ...], MinLen(1)]


@dataclass(frozen=True)
class FeatureEvent(Checked):
    """From ``at`` seconds on, the diagnostics of a robot's feature say this level."""

    at: NonNegative
    robot: Name
    feature: Name
    level: Literal["ok", "warn", "error"] = "error"


@dataclass(frozen=True)
class PoseEvent(Checked):
    """At ``at`` seconds a robot's pose falls silent, or is heard again."""

    at: NonNegative
    robot: Name
    pose: Literal["silent", "resumed"]


@dataclass(frozen=True)
class BatteryEvent(Checked):
    """At ``at`` seconds a robot's battery has this charge, 0..1."""

    at: NonNegative
    robot: Name
    battery: Share


@dataclass(frozen=True)
class StalledEvent(Checked):
    """From ``at`` seconds on, a robot cannot move, or can again."""

    at: NonNegative
    robot: Name
    stalled: bool


@dataclass(frozen=True)
class TaskEvent(Checked):
    """At ``at`` seconds a task becomes active or not, or its goal moves.

    Exactly one of the two is given.

    Attributes:
        at: Time, s.
        task: Name of the task.
        active: Whether it is to be done from now on.
        move: New goal x, y, m, as a message on the task's goal topic would
            give it; a goal that has a height keeps it, a loop is moved with its middle.
    """

    at: NonNegative
    task: Name
    active: bool | None = None
    move: Point | None = None


Event = FeatureEvent | PoseEvent | BatteryEvent | StalledEvent | TaskEvent

ROBOT_EVENTS: dict[str, type] = {
    "feature": FeatureEvent,
    "pose": PoseEvent,
    "battery": BatteryEvent,
    "stalled": StalledEvent,
}
"""Key that says what happens to a robot, to the event."""

TASK_KEYS = ("active", "move")
"""Keys that say what happens to a task."""


@dataclass(frozen=True)
class MovingTarget(Checked):
    """Something with a pose topic that tasks keep to; it looks where it goes.

    Attributes:
        topic: Its topic, as a task names it.
        path: Where it is when: t (s), x, y (m), in the order of time; straight
            between, and standing before and after.
    """

    topic: Name
    path: Annotated[tuple[tuple[NonNegative, float, float], ...], MinLen(1)]


@dataclass(frozen=True)
class Faults(Checked):
    """How often things fail at random, and how soon they are well again.

    Times between failures and times to repair are exponential; what is left out never
    happens, and without a time to repair a failure lasts.

    Attributes:
        feature_mtbf_h: Mean time a feature works until its diagnostics say ERROR, h.
        feature_mttr_h: Mean time until it works again, h.
        features: Features that fail so; empty: all.
        robot_mtbf_h: Mean time a robot is heard until it falls silent, h.
        robot_mttr_h: Mean time until it is heard again, h.
        stall_mtbf_h: Mean time a robot can drive until it cannot, h.
        stall_mttr_h: Mean time until it can again, h.
    """

    feature_mtbf_h: Positive | None = None
    feature_mttr_h: Positive | None = None
    features: tuple[Name, ...] = ()
    robot_mtbf_h: Positive | None = None
    robot_mttr_h: Positive | None = None
    stall_mtbf_h: Positive | None = None
    stall_mttr_h: Positive | None = None


@dataclass(frozen=True)
class World(Checked):
    """What a simulated team meets; by default nothing.

    Attributes:
        noise: Noise of the reported poses.
        ground: Patches of bad ground.
        targets: What moves on the pose topics that tasks keep to.
        faults: What fails at random; None: nothing does.
        events: What happens, in the order of time.
    """

    noise: Noise = field(default_factory=Noise)
    ground: tuple[GroundPatch, ...] = ()
    targets: tuple[MovingTarget, ...] = ()
    faults: Faults | None = None
    events: tuple[Event, ...] = ()


def read_world(path: str | Path, team: Team) -> World:
    """Read a world file for a team.

    Raises:
        FileError: With everything that is wrong in it.
    """
    return _world(read_document(path), team)


def parse_world(text: str, team: Team, name: str = "<text>") -> World:
    """Read the text of a world file; see :func:`read_world`."""
    return _world(parse_document(text, name), team)


def _world(document: Document, team: Team) -> World:
    if document.value is None:
        return World()
    draft = read_fields(document, (), document.value, World, elsewhere=("events",))
    _check_ground(document, draft.get("ground") or (), team)
    _check_targets(document, draft.get("targets") or (), team)
    _check_faults(document, draft.get("faults"), team)
    events = []
    if isinstance(document.value, Mapping):
        listed = document.value.get("events")
        if listed is None:
            listed = ()
        if isinstance(listed, tuple):
            for index, data in enumerate(listed):
                events.append(_read_event(document, ("events", index), data, team))
        else:
            document.refuse(("events",), described(listed), "must be a list")
    document.finish()
    events.sort(key=lambda event: event.at)
    return draft.build(document, (), events=tuple(events))


def _check_ground(document: Document, ground: tuple[GroundPatch, ...], team: Team) -> None:
    features = {feature for robot in team.robots.values() for feature in robot.features}
    names = [patch.name for patch in ground]
    for index, patch in enumerate(ground):
        place = ("ground", index)
        if patch.name in names[:index]:
            found, allowed = f"the name {patch.name} again", "must be a name of its own"
            document.refuse((*place, "name"), found, allowed)
        check_distinct(document, (*place, "affects"), patch.affects)
        for entry, feature in enumerate(patch.affects):
            if feature not in features:
                where = (*place, "affects", entry)
                document.refuse(where, described(feature), one_of(features, feature))


def _check_faults(document: Document, faults: Faults | None, team: Team) -> None:
    if faults is None:
        return
    features = {feature for robot in team.robots.values() for feature in robot.features}
    check_distinct(document, ("faults", "features"), faults.features)
    for index, feature in enumerate(faults.features):
        if feature not in features:
            where = ("faults", "features", index)
            document.refuse(where, described(feature), one_of(features, feature))
    for what in ("feature", "robot", "stall"):
        often, repair = f"{what}_mtbf_h", f"{what}_mttr_h"
        if getattr(faults, repair) is not None and getattr(faults, often) is None:
            found = "a time to repair what never fails"
            document.refuse(("faults", repair), found, f"must come with {often}")
    if faults.features and faults.feature_mtbf_h is None:
        found = "features that never fail"
        document.refuse(("faults", "features"), found, "must come with feature_mtbf_h")


def _check_targets(
    document: Document, targets: tuple[MovingTarget, ...], team: Team
) -> None:
    topics = target_topics(team)
    check_distinct(document, ("targets",), [target.topic for target in targets])
    for index, target in enumerate(targets):
        place = ("targets", index)
        if target.topic not in topics:
            none = "must be left out: no task keeps to a topic"
            allowed = one_of(topics, target.topic) if topics else none
            document.refuse((*place, "topic"), described(target.topic), allowed)
        times = [time for time, _, _ in target.path]
        for later in range(1, len(times)):
            if times[later] <= times[later - 1]:
                found = f"the time {times[later]:g} after {times[later - 1]:g}"
                document.refuse((*place, "path", later), found, "must be later than the one before")


def _read_event(document: Document, place: Place, data: Any, team: Team) -> Any:
    form = _form(document, place, data)
    if form is None:
        return BROKEN
    draft = read_fields(document, place, data, form)
    whose, names = ("task", team.tasks) if form is TaskEvent else ("robot", team.robots)
    name = draft.values.get(whose)
    if name is not None and name not in names:
        document.refuse((*place, whose), described(name), one_of(names, name))
    elif name is not None and form is FeatureEvent:
        _check_feature(document, place, draft, team)
    elif name is not None and draft.values.get("move"):
        _check_move(document, (*place, "move"), draft, team)
    return draft.build(document, place)


def _form(document: Document, place: Place, data: Any) -> type | None:
    """Find out which event is meant; None after refusing what is none."""
    if not isinstance(data, Mapping):
        document.refuse(place, described(data), "must be a mapping such as {at: 40, robot: ...}")
        return None
    if ("robot" in data) == ("task" in data):
        found = "both robot and task" if "robot" in data else "neither robot nor task"
        document.refuse(place, found, "must have one of the two")
        return None
    choices = tuple(ROBOT_EVENTS) if "robot" in data else TASK_KEYS
    given = [key for key in choices if key in data]
    if len(given) != 1:
        found = " and ".join(given) if given else "nothing that happens"
        document.refuse(place, found, f"must have exactly one of {', '.join(choices)}")
        return None
    if data[given[0]] is None:
        document.refuse((*place, given[0]), "nothing", "must be given")
        return None
    return ROBOT_EVENTS[given[0]] if "robot" in data else TaskEvent


def _check_feature(document: Document, place: Place, draft: Draft, team: Team) -> None:
    feature = draft.values.get("feature")
    features = team.robots[draft.values["robot"]].features
    if feature is not None and feature not in features:
        document.refuse((*place, "feature"), described(feature), one_of(features, feature))


def _check_move(document: Document, place: Place, draft: Draft, team: Team) -> None:
    """Check that every goal point of the moved task is where a robot may be."""
    x, y = draft.values["move"]
    moved = team.tasks[draft.values["task"]].moved((x, y, 0.0), None)
    points = Draft(type(moved), vars(moved))
    space = FreeSpace.of(team.boundary, team.keep_out)
    for _, point in points_of(points):
        check_inside(document, place, space, point)
