"""Team files: YAML to :class:`~allocator_node.team.Team`, every problem in one pass."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Collection, Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

from .drives import known_drives
from .files.document import Document, Place, parse_document, read_document
from .files.form import BROKEN, Draft, read_fields
from .files.free_space import FreeSpace
from .files.plugins import PluginError
from .files.team_checks import (
    check_distinct,
    check_frame,
    check_keep_out,
    check_name,
    check_order,
    check_own_sources,
    check_polygon,
    check_robot,
    check_starts,
    check_targets,
    check_task,
)
from .files.wording import described, one_of
from .tasks import Task, known_kinds
from .team import Robot, Team, Way

PARTS = ("capabilities", "robots", "tasks")
"""Keys of a team file whose entries have names of the user's."""


def read_team(path: str | Path) -> Team:
    """Read a team file.

    A robot without a ``start`` gets a place in a row 2 m apart along x, from
    the lowest corner of the site on, wherever its body fits.

    Raises:
        FileError: With everything that is wrong in it.
    """
    return _team(read_document(path))


def parse_team(text: str, name: str = "<text>") -> Team:
    """Read the text of a team file; see :func:`read_team`."""
    return _team(parse_document(text, name))


def merge_tasks(team: Team, yaml_text: str, name: str = "task_edit") -> Team:
    """Give the team with its task table edited.

    The text maps task names to keys. A key that is given replaces that key of
    the task as a whole, the other keys stay; a name that is not in the table
    adds a task; ``name: null`` takes it out; another ``kind`` writes the task anew.

    Raises:
        FileError: With everything that would be wrong in the new table.
    """
    document = parse_document(yaml_text, name)
    if document.value is None:
        return team
    edits = _mapping(document, ())
    kinds = _table(document, (), known_kinds)
    drafts = {name: _draft_of(task) for name, task in team.tasks.items()}
    for task, edit in edits.items():
        if edit is not None:
            whole = _merged(team.tasks.get(task), edit)
            drafts[task] = _read_task(document, (task,), whole, kinds)
        elif drafts.pop(task, None) is None:
            found = "a task to take out that is not there"
            document.refuse((task,), found, one_of(team.tasks, task))
    space = FreeSpace.of(team.boundary, team.keep_out)
    tasks = _checked_tasks(document, (), drafts, team.capabilities, team.robots, space, edits)
    document.finish()
    kept = {name: task for name, task in team.tasks.items() if name not in edits}
    return team.with_tasks({name: kept.get(name, task) for name, task in tasks.items()})


def _team(document: Document) -> Team:
    site = read_fields(document, (), document.value, Team, elsewhere=PARTS)
    if not isinstance(document.value, Mapping):
        document.finish()
    check_frame(document, ("frame",), site.get("frame"))
    space = _free_space(document, site)
    capabilities = _read_capabilities(document)
    robots = _read_robots(document, space)
    kinds = _table(document, ("tasks",), known_kinds)
    table = _mapping(document, ("tasks",))
    drafts = {
        name: _read_task(document, ("tasks", name), data, kinds) for name, data in table.items()
    }
    names = _mapping(document, ("robots",))
    tasks = _checked_tasks(document, ("tasks",), drafts, capabilities, names, space, table)
    document.finish()
    built = {name: robot for name, (robot, _) in robots.items()}
    missing = [name for name, (_, draft) in robots.items() if "start" not in draft.values]
    built |= _started(document, built, missing, space)
    document.finish()
    return site.build(document, (), robots=built, tasks=tasks, capabilities=capabilities)


def _free_space(document: Document, site: Draft) -> FreeSpace:
    """Give the site's areas, without those that are not right."""
    boundary = site.get("boundary")
    keep_out = check_keep_out(document, ("keep_out",), site.get("keep_out") or ())
    return FreeSpace.of(
        boundary if check_polygon(document, ("boundary",), boundary) else None, keep_out
    )


def _read_capabilities(document: Document) -> dict[str, tuple[Way, ...]]:
    """Read the ways of every capability; one with a wrong way is still declared."""
    capabilities = {}
    for name, data in _mapping(document, ("capabilities",)).items():
        place = ("capabilities", name)
        if not name:
            document.refuse(place, "an empty name", "must have a name")
        if not isinstance(data, tuple) or not data:
            allowed = "must be a list of ways, such as [{with: [camera]}]"
            document.refuse(place, described(data), allowed)
            data = ()
        ways = []
        for index, way in enumerate(data):
            where = (*place, index)
            draft = read_fields(document, where, way, Way, keys={"features": "with"})
            check_distinct(document, (*where, "with"), draft.get("features"))
            ways.append(draft.build(document, where))
        capabilities[name] = tuple(ways)
    return capabilities


def _read_robots(document: Document, space: FreeSpace) -> dict[str, tuple[Robot, Draft]]:
    """Read the robots; what is wrong in one has its default, and is named in its draft."""
    table = _mapping(document, ("robots",))
    if document.value.get("robots") in (None, {}):
        document.refuse(("robots",), "no robots", "must have at least one robot")
    drives = _table(document, ("robots",), known_drives)
    robots = {}
    for name, data in table.items():
        place = ("robots", name)
        check_name(document, place)
        if not isinstance(data, Mapping):
            allowed = "must be a mapping with at least drive"
            document.refuse(place, described(data), allowed)
            continue
        data = _with_command_topic(name, data)
        draft = read_fields(document, place, data, Robot, elsewhere=("drive",))
        drive = _read_drive(document, place, data, drives)
        robot = Robot(name=name, drive=drive, **draft.values)
        check_robot(document, place, robot, draft, space)
        robots[name] = robot, draft
    check_own_sources(document, ("robots",), robots)
    check_starts(document, ("robots",), robots)
    return robots


def _with_command_topic(name: str, data: Mapping[str, Any]) -> Mapping[str, Any]:
    """Let a command that only says its type have the usual topic."""
    command = data.get("command")
    if not isinstance(command, Mapping) or "topic" in command:
        return data
    return {**data, "command": {"topic": f"{name}/cmd_vel", **command}}


def _read_drive(
    document: Document, robot: Place, data: Mapping[str, Any], drives: Mapping[str, type]
) -> Any:
    place = (*robot, "drive")
    if "drive" not in data:
        allowed = "must be given, such as {model: differential, max_speed: 1.0}"
        document.refuse(place, "nothing", allowed)
        return BROKEN
    draft = _read_chosen(document, place, data["drive"], "model", drives)
    drive = draft.build(document, place)
    if drive is not BROKEN and drive.height_band and drive.height_band[0] >= drive.height_band[1]:
        low, high = drive.height_band
        found = f"a band from {low:g} to {high:g}"
        document.refuse((*place, "height"), found, "must be [lowest, highest], the lowest first")
    return drive


def _read_task(document: Document, place: Place, data: Any, kinds: Mapping[str, type]) -> Draft:
    check_name(document, place)
    return _read_chosen(document, place, data, "kind", kinds)


def _read_chosen(
    document: Document, place: Place, data: Any, key: str, table: Mapping[str, type]
) -> Draft:
    """Read a mapping by the class of a table that one of its keys names."""
    if not isinstance(data, Mapping):
        document.refuse(place, described(data), f"must be a mapping with at least {key}")
        return Draft()
    choice = data.get(key)
    if not isinstance(choice, str) or choice not in table:
        document.refuse((*place, key), described(choice), one_of(table, choice))
        return Draft()
    return read_fields(document, place, data, table[choice], elsewhere=(key,))


def _checked_tasks(
    document: Document,
    root: Place,
    drafts: Mapping[str, Draft],
    capabilities: Mapping[str, Any],
    robots: Collection[str],
    space: FreeSpace,
    read: Mapping[str, Any],
) -> dict[str, Task]:
    """Check tasks beside each other, those just read also in themselves, and build them."""
    for name, draft in drafts.items():
        if name in read:
            check_task(document, (*root, name), draft, capabilities, space)
    check_order(document, root, drafts)
    check_targets(document, root, drafts, robots)
    return {
        name: draft.build(document, (*root, name), name=name) for name, draft in drafts.items()
    }


def _draft_of(task: Task) -> Draft:
    values = {field.name: getattr(task, field.name) for field in dataclasses.fields(task)}
    del values["name"]
    return Draft(type(task), values)


def _merged(task: Task | None, edit: Any) -> Any:
    """Give the keys of a task as in a file, with those of an edit over them."""
    if task is None or not isinstance(edit, Mapping) or edit.get("kind", task.kind) != task.kind:
        return edit
    keys = dataclasses.asdict(task)
    del keys["name"]
    return {"kind": task.kind, **keys, **edit}


def _started(
    document: Document, robots: Mapping[str, Robot], missing: list[str], space: FreeSpace
) -> dict[str, Robot]:
    """Give robots without a start a place."""
    taken = [
        (*robot.start[:2], robot.radius) for name, robot in robots.items() if name not in missing
    ]
    places = space.row([robots[name].radius for name in missing], taken)
    started = {}
    for name, place in zip(missing, places, strict=True):
        if place is None:
            allowed = "must be given: no free place for it was found"
            document.refuse(("robots", name, "start"), "nothing", allowed)
        else:
            started[name] = replace(robots[name], start=(*place[:2], 0.0))
    return started


def _mapping(document: Document, place: Place) -> Mapping[str, Any]:
    """Give the mapping at a place, empty where there is nothing or something else."""
    value = document.value
    for step in place:
        value = value.get(step)
    if value is None:
        return {}
    if isinstance(value, Mapping):
        return value
    document.refuse(place, described(value), "must be a mapping (name: ...)")
    return {}


def _table(
    document: Document, place: Place, known: Callable[[], Mapping[str, type]]
) -> Mapping[str, type]:
    """Give a table of models or kinds; where a package spoils it, nothing can be read."""
    try:
        return known()
    except PluginError as error:
        found = "an installed package that cannot be used"
        document.refuse(place, found, f"must be repaired or uninstalled: {error}")
        document.finish()
        raise
