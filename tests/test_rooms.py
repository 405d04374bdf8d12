"""The rooms of the package: imports go one way only, and only ``ros`` knows ROS."""

from __future__ import annotations

import ast
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

import allocator_node

PACKAGE = Path(allocator_node.__file__).parent

LEVELS = (
    {"team", "files"},
    {"decision", "observation", "settings"},
    {"drives", "tasks"},
    {"team_file", "model"},
    {"belief"},
    {"program"},
    {"view"},
    {"pilot", "work"},
    {"charging", "memory", "notices", "reasons"},
    {"allocator"},
    {"sim"},
    {"preflight", "report"},
    {"preflight", "recording"},
    {"ros"},
    {"commands"},
)
"""Rooms (packages and modules) from the lowest up; each may import those below it and itself."""

TOGETHER = {("files", "team")}
"""Rooms on one level of which the left may import the right."""

LEVEL = {room: level for level, rooms in enumerate(LEVELS) for room in rooms}

ROS = {
    "ament_index_python", "builtin_interfaces", "launch", "launch_ros", "rcl_interfaces", "rclpy",
    "rosgraph_msgs", "rpyutils", "tf2_ros", "unique_identifier_msgs",
}  # fmt: skip
"""Top modules of ROS beside those that end in ``_msgs`` and ``_srvs``."""

ALLOWED = {("commands/examples.py", "ament_index_python")}
"""Where the installed example is looked up, when the command runs, and only if it is there."""

FACE = Path("__init__.py")
"""The package's face imports its names when they are first used."""

FILES = sorted({path.relative_to(PACKAGE) for path in PACKAGE.rglob("*.py")} - {FACE})


def room_of(file: Path) -> str:
    """Give the room of a file: its folder, or its own name at the top."""
    return file.parts[0] if len(file.parts) > 1 else file.stem


def is_for_types(node: ast.AST) -> bool:
    """Tell whether a node is ``if TYPE_CHECKING:``, which is never executed."""
    return isinstance(node, ast.If) and ast.unparse(node.test).endswith("TYPE_CHECKING")


def statements(node: ast.AST, inside: bool = False) -> Iterator[tuple[ast.stmt, bool]]:
    """Give every import that is executed, and whether only when a function runs."""
    for child in ast.iter_child_nodes(node):
        if is_for_types(child):
            continue
        if isinstance(child, ast.Import | ast.ImportFrom):
            yield child, inside
        is_function = isinstance(child, ast.FunctionDef | ast.AsyncFunctionDef)
        yield from statements(child, inside or is_function)


def imports(source: str, file: Path) -> Iterator[tuple[str, bool]]:
    """Give the full names of the modules that a file imports, and whether it does so late."""
    package = [PACKAGE.name, *file.parts[:-1]]
    for node, late in statements(ast.parse(source)):
        if isinstance(node, ast.Import):
            yield from ((alias.name, late) for alias in node.names)
        elif not node.level:
            yield node.module, late
        else:
            base = package[: len(package) - node.level + 1]
            if node.module:
                yield ".".join([*base, node.module]), late
            else:
                yield from ((".".join([*base, alias.name]), late) for alias in node.names)


def objections(source: str, file: Path) -> list[str]:
    """Say which imports of a file lead up, or out into ROS."""
    room, found = room_of(file), []
    for module, late in imports(source, file):
        top, *rest = module.split(".")
        if top == PACKAGE.name and rest:
            below = LEVEL[rest[0]] < LEVEL[room] or rest[0] == room
            if not below and (room, rest[0]) not in TOGETHER:
                found.append(f"{room} must not import {rest[0]}")
            if room == "commands" and rest[0] == "ros" and not late:
                found.append("a command imports ros when it runs, not before")
        elif top in ROS or top.endswith(("_msgs", "_srvs")):
            if room != "ros" and (file.as_posix(), top) not in ALLOWED:
                found.append(f"{room} must not import {top} of ROS")
    return found


@pytest.mark.parametrize("file", FILES, ids=str)
def test_imports_lead_down_and_ros_stays_in_its_room(file: Path) -> None:
    assert room_of(file) in LEVEL, "a new room: give it a level in this test and in DEVELOPERS.md"
    assert objections((PACKAGE / file).read_text("utf-8"), file) == []


@pytest.mark.parametrize(
    ("file", "source", "says"),
    [
        ("team.py", "from .tasks import Task", "team must not import tasks"),
        ("tasks/follow.py", "from ..program import price", "tasks must not import program"),
        ("belief/poses.py", "import allocator_node.allocator", "belief must not import allocator"),
        ("allocator.py", "def step():\n from .sim import world", "allocator must not import sim"),
        ("sim/world.py", "import rclpy.node", "sim must not import rclpy of ROS"),
        ("belief/features.py", "from diagnostic_msgs.msg import A", "must not import diagnostic"),
        ("commands/team_x.py", "from ..ros import loop", "imports ros when it runs"),
        ("sim/world.py", "from .. import ros", "sim must not import ros"),
    ],
)
def test_an_import_upwards_is_found(file: str, source: str, says: str) -> None:
    assert says in "; ".join(objections(source, Path(file)))


@pytest.mark.parametrize(
    ("file", "source"),
    [
        ("team.py", "if TYPE_CHECKING:\n    from .tasks import Task"),
        ("commands/team_x.py", "def main():\n    from ..ros.loop import Loop"),
        ("ros/loop.py", "import rclpy\nfrom ..allocator import Allocator"),
        ("team_file.py", "from .drives import known_drives\nfrom .tasks import known_kinds"),
    ],
)
def test_an_import_downwards_is_not_objected_to(file: str, source: str) -> None:
    assert objections(source, Path(file)) == []


def run(code: str) -> str:
    """Run code in a fresh interpreter and give what it prints."""
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, cwd=PACKAGE.parent
    )
    assert done.returncode == 0, done.stderr
    return done.stdout


def test_the_allocator_and_the_rehearsal_load_no_ros() -> None:
    """Not even through somebody else: looked up in what is loaded in the end."""
    loaded = run(
        "import sys\n"
        "from allocator_node import *\n"
        "import allocator_node.commands.team_rehearse\n"
        "print(*{name.split('.')[0] for name in sys.modules})"
    ).split()
    assert not [top for top in loaded if top in ROS or top.endswith(("_msgs", "_srvs"))]
    assert {"numpy", "highspy"} <= set(loaded)


def test_the_face_of_the_package_is_light_and_complete() -> None:
    """``import allocator_node`` loads no library; every public name is there when asked for."""
    loaded = run("import sys, allocator_node\nprint(*sys.modules)").split()
    assert not {"numpy", "scipy", "pydantic"} & set(loaded)
    assert sorted(allocator_node._HOMES) == sorted(allocator_node.__all__)
    for name in allocator_node.__all__:
        assert getattr(allocator_node, name).__name__ == name
        assert name in dir(allocator_node)
    with pytest.raises(AttributeError, match="no attribute 'Dance'"):
        allocator_node.Dance  # noqa: B018
