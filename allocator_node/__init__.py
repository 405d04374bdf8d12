"""Decide live which robot of a mixed team does which task, and drive it there.

From a program of your own, without ROS::

    from allocator_node import Allocator, Observation, read_team

    allocator = Allocator(read_team("team.yaml"))
    decision = allocator.step(observation, now)     # once a period

``team`` says what a team is and ``team_file`` reads one; ``belief`` holds what is known
now; ``drives`` and ``tasks`` are the kinds of robots and work; ``program`` is the
mathematics; ``allocator`` decides and ``reasons`` says why; ``sim`` rehearses without ROS;
``ros`` is the lifecycle node and the only part that imports ROS; ``commands`` are the
console scripts. Names below are imported when they are first used.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from .allocator import Allocator
    from .decision import Cause, Decision, Reallocation
    from .files.document import FileError
    from .observation import HealthReport, MovedGoal, Observation, Orders
    from .settings import Settings
    from .sim.record import Rehearsal
    from .sim.rehearsal import rehearse
    from .sim.world_file import World, read_world
    from .team import Team
    from .team_file import merge_tasks, parse_team, read_team

__version__ = "0.1.0"

_HOMES = {
    "Allocator": "allocator",
    "Cause": "decision",
    "Decision": "decision",
    "FileError": "files.document",
    "HealthReport": "observation",
    "MovedGoal": "observation",
    "Observation": "observation",
    "Orders": "observation",
    "Reallocation": "decision",
    "Rehearsal": "sim.record",
    "Settings": "settings",
    "Team": "team",
    "World": "sim.world_file",
    "merge_tasks": "team_file",
    "parse_team": "team_file",
    "read_team": "team_file",
    "read_world": "sim.world_file",
    "rehearse": "sim.rehearsal",
}
"""Public name to the module it is in."""

__all__ = [
    "Allocator",
    "Cause",
    "Decision",
    "FileError",
    "HealthReport",
    "MovedGoal",
    "Observation",
    "Orders",
    "Reallocation",
    "Rehearsal",
    "Settings",
    "Team",
    "World",
    "merge_tasks",
    "parse_team",
    "read_team",
    "read_world",
    "rehearse",
]


def __getattr__(name: str) -> Any:
    """Import a public name on first use (PEP 562): commands that need none start fast."""
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(f".{_HOMES[name]}", __name__), name)


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
