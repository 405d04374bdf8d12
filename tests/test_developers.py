"""What DEVELOPERS.md shows works: its task kind and its drive model, in a rehearsal."""

from __future__ import annotations

import importlib
import re
from pathlib import Path

import pytest
from test_rooms import LEVEL

from allocator_node.files.plugins import extended
from allocator_node.sim.rehearsal import rehearse
from allocator_node.tasks import Task
from allocator_node.team_file import parse_team

ROOT = Path(__file__).parents[1]
TEXT = (ROOT / "DEVELOPERS.md").read_text("utf-8")

TEAM = """
robots:
  cart: {drive: {model: rail, max_speed: 1.0}, start: [0, 0, 0]}
tasks:
  rail_check: {kind: inspect, start: [3, 0], end: [9, 0]}
"""


def block(label: str) -> str:
    """Give the one fenced block with a label."""
    (found,) = re.findall(rf"^```{label}\n(.*?)^```$", TEXT, re.DOTALL | re.MULTILINE)
    return found


def test_the_examples_work(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Imported as modules of another package would be."""
    monkeypatch.syspath_prepend(tmp_path)
    for label in ("kind", "drive"):
        (tmp_path / f"example_{label}.py").write_text(block(f"python {label}"), "utf-8")
    kind = importlib.import_module("example_kind").Inspect
    drive = importlib.import_module("example_drive").Rail
    monkeypatch.setattr("allocator_node.team_file.known_kinds", lambda: {"inspect": kind})
    monkeypatch.setattr("allocator_node.team_file.known_drives", lambda: {"rail": drive})
    run = rehearse(parse_team(TEAM), None, seconds=30.0)
    # 9 m at 1 m/s, and slowing down within 1 m of both goals.
    assert 9.0 < run.finished["rail_check"] < 15.0
    x, y = run.paths["cart"][-1][1:3]
    assert x == pytest.approx(9.0, abs=0.3) and y == 0.0


def test_the_entry_point_groups_named_are_those_looked_at() -> None:
    """The table of an unknown group is empty; the names in the text are those in the code."""
    groups = set(re.findall(r"allocator_node\.(?:tasks|drives)(?=[\"`.])", TEXT))
    assert groups >= {"allocator_node.tasks", "allocator_node.drives"}
    for group, module in (("allocator_node.tasks", "tasks"), ("allocator_node.drives", "drives")):
        source = (ROOT / "allocator_node" / module / "__init__.py").read_text("utf-8")
        assert f'"{group}"' in source
    assert extended({}, "allocator_node.nobody", Task) == {}


def test_every_room_has_its_line() -> None:
    table = TEXT.split("\n| room |")[1].split("\n\n")[0]
    for room in LEVEL:
        path = ROOT / "allocator_node" / room
        if (path / "__init__.py").is_file() or path.with_suffix(".py").is_file():
            assert re.search(rf"`allocator_node/{room}(\.py|/)`", table), room
