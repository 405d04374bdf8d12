"""Parameters: their names, defaults and ranges, and why a value is refused."""

from __future__ import annotations

import inspect
import json
import re
from collections.abc import Iterable, Mapping
from dataclasses import asdict, dataclass, fields
from typing import Annotated, Any, TypeVar

from annotated_types import Gt, Le
from pydantic import TypeAdapter, ValidationError
from rcl_interfaces.msg import ParameterDescriptor
from rclpy.node import Node
from rclpy.parameter import Parameter

from ..observation import Orders
from ..settings import Settings
from ..team import Checked, Team

Model = TypeVar("Model")


@dataclass(frozen=True, kw_only=True)
class Options(Checked):
    """What the node itself can be told, beside :class:`~allocator_node.settings.Settings`.

    Attributes:
        team_file: Path of the team file; read on configure.
        rate: Decisions a second, Hz.
        command_robots: Drive the robots; if not, decide and publish only.
        state_file: Path of the file that keeps what was learned; empty: none.
        record_to: Directory under which each activation leaves a recording; empty: none.
        pins: "robot=task": the robot does that task if it is able to.
        bans: "robot=task": the robot never does that task.
        task_edit: YAML that is merged into the task table.
    """

    team_file: str = ""
    rate: Annotated[float, Gt(0), Le(200)] = 10.0
    command_robots: bool = True
    state_file: str = ""
    record_to: str = ""
    pins: tuple[str, ...] = ()
    bans: tuple[str, ...] = ()
    task_edit: str = ""


class ParameterError(ValueError):
    """A parameter has a value that is of no use; the text says which and why."""


def declare(node: Node) -> None:
    """Declare every parameter; types and ranges are checked by :func:`read`."""
    for kind in (Options, Settings):
        described = _descriptions(kind)
        defaults = asdict(kind())
        for field in fields(kind):
            default = defaults[field.name]
            node.declare_parameter(
                field.name,
                # ROS cannot tell the type of an empty list, so "none" is one empty string.
                ([""] if default == () else default),
                ParameterDescriptor(description=described[field.name], dynamic_typing=True),
            )


def values(node: Node) -> dict[str, Any]:
    """Give the present values of all parameters of :func:`declare`."""
    return {
        field.name: node.get_parameter(field.name).value
        for kind in (Options, Settings)
        for field in fields(kind)
    }


def changed(now: Mapping[str, Any], parameters: Iterable[Parameter]) -> dict[str, Any]:
    """Give the values as they would be with some parameters set; unknown ones do not count."""
    return dict(now) | {p.name: p.value for p in parameters if p.name in now}


def read(wanted: Mapping[str, Any]) -> tuple[Options, Settings]:
    """Check values and give them as objects.

    Raises:
        ParameterError: All that is wrong, in one text.
    """
    problems: list[str] = []
    wanted = dict(wanted)
    for name in ("pins", "bans"):
        if isinstance(wanted[name], list | tuple):
            wanted[name] = [pair for pair in wanted[name] if pair != ""]
    options = _checked(Options, wanted, problems)
    settings = _checked(Settings, wanted, problems)
    if problems:
        raise ParameterError("; ".join(problems))
    return options, settings


def orders(options: Options, team: Team, hold: bool) -> Orders:
    """Give the operator's orders.

    Raises:
        ParameterError: A pin or ban names a robot or task that does not exist.
    """
    problems: list[str] = []
    pins = _pairs("pins", options.pins, team, problems)
    bans = _pairs("bans", options.bans, team, problems)
    for robot, task in sorted(pins & bans):
        problems.append(f"{robot}={task} is pinned and banned at once")
    if problems:
        raise ParameterError("; ".join(problems))
    return Orders(pins, bans, hold, options.command_robots)


def _checked(kind: type[Model], wanted: Mapping[str, Any], problems: list[str]) -> Model | None:
    own = {field.name: wanted[field.name] for field in fields(kind)}
    try:
        # Strict JSON: a whole number will do for a float, a text or a truth value will not.
        return TypeAdapter(kind).validate_json(json.dumps(own, default=list), strict=True)
    except ValidationError as error:
        for problem in error.errors():
            name = str(problem["loc"][0])
            problems.append(f"{name} = {own[name]!r}: {problem['msg']}")
    return None


def _pairs(
    name: str, texts: Iterable[str], team: Team, problems: list[str]
) -> frozenset[tuple[str, str]]:
    pairs = set()
    for text in texts:
        robot, equals, task = (part.strip() for part in text.partition("="))
        if not equals:
            problems.append(f'{name}: "{text}" is not of the form robot=task')
            continue
        for what, given, known in (("robot", robot, team.robots), ("task", task, team.tasks)):
            if given not in known:
                problems.append(
                    f'{name}: "{text}": there is no {what} "{given}"; '
                    f"there are: {', '.join(known) or 'none'}"
                )
        pairs.add((robot, task))
    return frozenset(pairs)


def _descriptions(kind: type) -> dict[str, str]:
    """Give the descriptions of a dataclass's fields from its docstring."""
    text = inspect.getdoc(kind) or ""
    found = dict.fromkeys((field.name for field in fields(kind)), "")
    for name, rest in re.findall(r"^    (\w+): (.*(?:\n     .*)*)", text, re.MULTILINE):
        if name in found:
            found[name] = " ".join(rest.split())
    return found
