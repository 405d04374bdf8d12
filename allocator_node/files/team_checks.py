"""What must be true between the parts of a team: names, topics, places, order of tasks.

Each check goes over what was right in itself and adds the problems it finds.
"""

from __future__ import annotations

import itertools
import re
from collections.abc import Collection, Iterable, Iterator, Mapping, Sequence

import shapely
from shapely import Polygon

from ..team import KeepOut, Robot, Target
from .document import Document, Place
from .form import Draft
from .free_space import FreeSpace, overlap
from .wording import described, dotted, one_of

NAME = re.compile(r"[A-Za-z_][A-Za-z0-9_]*")
TOPIC = re.compile(r"/?[A-Za-z_][A-Za-z0-9_]*(/[A-Za-z_][A-Za-z0-9_]*)*")
"""Names of the ROS 2 design article "Topic and Service name mapping to DDS", without
the substitutions ``~`` and ``{}``, which have no meaning in a team file."""

LONGEST_NAME = 64
LONGEST_TOPIC = 200
"""A full topic name has at most 247 characters (rmw ``RMW_TOPIC_MAX_NAME_LENGTH``)."""

POINTS = {"at": False, "waypoints": True}
"""Keys of task kinds that hold a goal point, and whether they hold several."""


def check_name(document: Document, place: Place) -> None:
    """Check a name that becomes part of topic names: the last key of a place."""
    name = str(place[-1])
    if not NAME.fullmatch(name):
        allowed = "must be letters, digits and underscores, not starting with a digit"
    elif len(name) > LONGEST_NAME:
        allowed = f"must have at most {LONGEST_NAME} characters"
    else:
        return
    document.refuse(place, f"the name {described(name).removeprefix('the text ')}", allowed)


def check_distinct(document: Document, place: Place, names: Sequence[str] | None) -> None:
    """Check that a list names nothing twice."""
    for index, name in enumerate(names or ()):
        if name in names[:index]:
            allowed = f"must be there once (entry [{names.index(name)}] is the same)"
            document.refuse((*place, index), described(name), allowed)


def check_polygon(document: Document, place: Place, corners: Sequence | None) -> bool:
    """Check that corners make a simple polygon with an area, and tell whether they do."""
    if not corners:
        return False
    polygon = Polygon(corners)
    if polygon.is_valid and polygon.area > 0:
        return True
    reason = shapely.is_valid_reason(polygon).replace("[", " at [")
    found = f"corners that make no simple polygon ({reason.lower()})"
    document.refuse(place, found, "must be in order along an edge that does not cross itself")
    return False


def check_keep_out(document: Document, place: Place, areas: Sequence[KeepOut]) -> list[KeepOut]:
    """Check names and polygons of keep-out areas; give those whose polygon is good."""
    names = [area.name for area in areas]
    for index, name in enumerate(names):
        if name in names[:index]:
            allowed = "must be a name of its own"
            document.refuse((*place, index, "name"), f"the name {name} again", allowed)
    return [
        area
        for index, area in enumerate(areas)
        if check_polygon(document, (*place, index, "polygon"), area.polygon)
    ]


def check_robot(
    document: Document, place: Place, robot: Robot, draft: Draft, space: FreeSpace
) -> None:
    """Check what must be true within one robot, where it is given and right."""
    given = draft.values
    features = given.get("features", ())
    check_distinct(document, (*place, "features"), features)
    if "features" not in draft.broken:
        for index, rule in enumerate(given.get("health") or ()):
            if rule.feature not in features:
                where = (*place, "health", index, "feature")
                document.refuse(where, described(rule.feature), one_of(features, rule.feature))
    if given.get("pose"):
        _check_pose(document, (*place, "pose"), robot)
    for key, kind, source in _sources(robot, given):
        check = check_topic if kind == "topic" else check_frame
        check(document, (*place, *key), source)
    if given.get("dock"):
        check_inside(document, (*place, "dock"), space, robot.dock)
    if "start" in given:
        radius = 0.0 if "radius" in draft.broken else robot.radius
        check_inside(document, (*place, "start"), space, robot.start[:2], radius)


def _sources(robot: Robot, keys: Collection[str]) -> Iterator[tuple[Place, str, str]]:
    """Give what these keys of a robot name: place, "topic" or "frame", its name."""
    if "pose" in keys and robot.pose.topic:
        yield ("pose", "topic"), "topic", robot.pose.topic
    if "pose" in keys and robot.pose.tf:
        yield ("pose", "tf"), "frame", robot.pose.tf
    if "command" in keys:
        yield ("command", "topic"), "topic", robot.command.topic
    if "battery_topic" in keys:
        yield ("battery_topic",), "topic", robot.battery_topic


def check_topic(document: Document, place: Place, topic: str) -> None:
    """Check the name of a topic."""
    if not TOPIC.fullmatch(topic):
        allowed = (
            "must be a topic name: letters, digits and underscores in parts divided by single "
            "slashes, no part starting with a digit"
        )
    elif len(topic) > LONGEST_TOPIC:
        allowed = f"must have at most {LONGEST_TOPIC} characters"
    else:
        return
    document.refuse(place, described(topic), allowed)


def check_frame(document: Document, place: Place, frame: str | None) -> None:
    """Check a frame id; tf2 refuses those that start with a slash."""
    if frame and frame.startswith("/"):
        document.refuse(place, described(frame), "must not start with a slash (tf2 refuses that)")


def _check_pose(document: Document, place: Place, robot: Robot) -> None:
    source = robot.pose
    check_frame(document, (*place, "frame"), source.frame)
    if source.topic and source.tf:
        document.refuse(place, "topic and tf", "must have one of the two")
    elif not source.topic and not source.tf:
        allowed = f"must have one of the two, such as topic: {robot.name}/odom"
        document.refuse(place, "neither topic nor tf", allowed)
    elif source.tf and source.frame:
        document.refuse((*place, "frame"), described(source.frame), "must be left out beside tf")
    elif any(source.offset) and not source.frame:
        allowed = "must come with frame, the frame of the robot's own that lies there"
        document.refuse((*place, "offset"), "an offset without frame", allowed)


def check_own_sources(
    document: Document, place: Place, robots: Mapping[str, tuple[Robot, Draft]]
) -> None:
    """Check that no topic and no transform is used twice; defaults have the older right."""
    defaults, given = [], []
    for name, (robot, draft) in robots.items():
        given += [(name, *source) for source in _sources(robot, draft.values)]
        left = {"pose", "command", "battery_topic"} - set(draft.values) - set(draft.broken)
        defaults += [(name, *source) for source in _sources(robot, left)]
    users: dict[tuple[str, str], str] = {}
    for name, key, kind, source in defaults + given:
        user = users.setdefault((kind, source.removeprefix("/")), dotted((name, *key)))
        if user != dotted((name, *key)):
            allowed = f"must be a {kind} of its own ({user} has this one)"
            document.refuse((*place, name, *key), described(source), allowed)


def check_starts(
    document: Document, place: Place, robots: Mapping[str, tuple[Robot, Draft]]
) -> None:
    """Check that no two bodies overlap where they start, where both starts are given."""
    given = [
        (name, (*robot.start[:2], robot.radius))
        for name, (robot, draft) in robots.items()
        if "start" in draft.values and "radius" not in draft.broken
    ]
    for (first, one), (second, other) in itertools.combinations(given, 2):
        if overlap(one, other):
            found = f"a place where its body overlaps with {first}"
            allowed = f"must be at least {one[2] + other[2]:g} m from {first}'s start"
            document.refuse((*place, second, "start"), found, allowed)


def check_inside(
    document: Document,
    place: Place,
    space: FreeSpace,
    point: Sequence[float],
    radius: float = 0.0,
) -> None:
    """Check that a point, or a body around it, is where a robot may be."""
    if objection := space.objection(point[0], point[1], radius):
        found = f"[{point[0]:g}, {point[1]:g}] {objection}"
        document.refuse(place, found, "must be inside the boundary and outside keep-out areas")


def check_task(
    document: Document,
    place: Place,
    draft: Draft,
    capabilities: Collection[str],
    space: FreeSpace,
) -> None:
    """Check what must be true of one task beside the others."""
    for capability in draft.get("needs") or ():
        if capability not in capabilities:
            found, allowed = "an undeclared capability", one_of(capabilities, capability)
            document.refuse((*place, "needs", capability), found, allowed)
    check_distinct(document, (*place, "each"), draft.get("each"))
    for index, capability in enumerate(draft.get("each") or ()):
        if capability not in capabilities:
            allowed = one_of(capabilities, capability)
            document.refuse((*place, "each", index), described(capability), allowed)
    count = draft.get("robots")
    if count and count.max is not None and count.min > count.max:
        found = f"min {count.min} above max {count.max}"
        document.refuse((*place, "robots"), found, "must have min at most max")
    for steps, point in points_of(draft):
        check_inside(document, (*place, *steps), space, point)
    area = draft.get("area")
    if area and check_polygon(document, (*place, "area"), area):
        if objection := space.area_objection(area):
            allowed = "must be inside the boundary and outside keep-out areas"
            document.refuse((*place, "area"), f"an area {objection}", allowed)
    waypoints = draft.get("waypoints")
    if waypoints and len(set(waypoints)) == 1:
        document.refuse((*place, "waypoints"), "the same point again", "must lead somewhere")


def points_of(draft: Draft) -> Iterator[tuple[Place, Sequence[float]]]:
    """Give the goal points of a task with their keys."""
    for key, several in POINTS.items():
        if value := draft.get(key):
            if several:
                yield from (((key, index), point) for index, point in enumerate(value))
            else:
                yield (key,), value


def check_order(document: Document, root: Place, drafts: Mapping[str, Draft]) -> None:
    """Check that ``after`` names tasks that exist and end, and never goes in a circle."""
    before: dict[str, list[str]] = {}
    for name, draft in drafts.items():
        place = (*root, name, "after")
        after = draft.get("after") or ()
        check_distinct(document, place, after)
        before[name] = [earlier for earlier in after if earlier in drafts]
        for index, earlier in enumerate(after):
            if earlier not in drafts:
                allowed = one_of(set(drafts) - {name}, earlier)
                document.refuse((*place, index), described(earlier), allowed)
            elif not _can_end(earlier, drafts[earlier]):
                allowed = "must be a task that ends: a visit, a sweep, or a patrol with laps"
                document.refuse((*place, index), f"{earlier}, which never ends", allowed)
    for circle in _circles(before):
        found = f"a circle: {' after '.join((*circle, circle[0]))}"
        document.refuse((*root, circle[0], "after"), found, "must let one of them come first")


def _can_end(name: str, draft: Draft) -> bool:
    """Tell whether a task ends; one that cannot be built gets the benefit of the doubt."""
    if draft.form is None or draft.broken:
        return True
    try:
        return draft.form(name=name, **draft.values).ends
    except ValueError:
        return True


def check_targets(
    document: Document, root: Place, drafts: Mapping[str, Draft], robots: Collection[str]
) -> None:
    """Check that what tasks keep to exists, and that no task keeps to itself in the end."""
    kept_to: dict[str, list[str]] = {name: [] for name in drafts}
    keys = {}
    for name, draft in drafts.items():
        for key, target in draft.values.items():
            if not isinstance(target, Target):
                continue
            place, keys[name] = (*root, name, key), key
            if target.topic is not None:
                check_topic(document, (*place, "topic"), target.topic)
            elif target.robot is not None and target.robot not in robots:
                allowed = one_of(robots, target.robot)
                document.refuse((*place, "robot"), described(target.robot), allowed)
            elif target.task is not None and target.task not in drafts:
                allowed = one_of(set(drafts) - {name}, target.task)
                document.refuse((*place, "task"), described(target.task), allowed)
            elif target.task is not None:
                kept_to[name].append(target.task)
    for circle in _circles(kept_to):
        found = f"a circle: {' around '.join((*circle, circle[0]))}"
        place = (*root, circle[0], keys[circle[0]], "task")
        document.refuse(place, found, "must keep to something that does not keep to it")


def _circles(before: Mapping[str, Iterable[str]]) -> Iterator[list[str]]:
    """Give circles of a graph, one for each way back a depth-first search meets."""
    done: set[str] = set()
    for start in before:
        path: list[str] = []
        waiting = [(start, 0)]
        while waiting:
            name, depth = waiting.pop()
            del path[depth:]
            if name in path:
                yield path[path.index(name) :]
            elif name not in done:
                done.add(name)
                path.append(name)
                waiting += [(earlier, len(path)) for earlier in before[name]]
