"""What README.md says is so: its files are read, its tables complete, its commands there."""

from __future__ import annotations

import argparse
import ast
import importlib
import re
import shlex
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import MISSING, fields
from pathlib import Path

import pytest
import yaml

from allocator_node.decision import Cause
from allocator_node.drives import DRIVES
from allocator_node.drives.base import Drive
from allocator_node.files.document import FileError
from allocator_node.observation import Orders
from allocator_node.settings import Settings
from allocator_node.sim.rehearsal import rehearse
from allocator_node.sim.world_file import (
    ROBOT_EVENTS,
    GroundPatch,
    MovingTarget,
    Noise,
    TaskEvent,
    World,
    parse_world,
)
from allocator_node.tasks import KINDS, Task
from allocator_node.team import Battery, CommandSink, HealthRule, PoseSource, Robot, Team
from allocator_node.team_file import merge_tasks, parse_team, read_team

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text("utf-8")
FARM = read_team(ROOT / "config" / "solar_farm.yaml")
COMMANDS = re.search(r"COMMANDS = \((.*?)\)", (ROOT / "setup.py").read_text("utf-8"), re.DOTALL)
COMMANDS = re.findall(r'"(\w+)"', COMMANDS.group(1))


def blocks(label: str) -> list[str]:
    """Give the fenced blocks of README with a label, such as ``yaml world``."""
    return re.findall(rf"^```{re.escape(label)}\n(.*?)^```$", README, re.DOTALL | re.MULTILINE)


def table(name: str) -> dict[str, str]:
    """Give first and second column of the table under ``<!-- name -->``, without code marks."""
    text = README.split(f"<!-- {name} -->\n")[1].split("\n\n")[0]
    rows = [line.split(" | ") for line in text.splitlines()[2:]]
    return {row[0].strip("| `"): row[1].strip("| `") for row in rows}


def column(heading: str) -> list[str]:
    """Give the first column of the table whose heading begins so."""
    text = README.split(f"\n| {heading} ")[1].split("\n\n")[0]
    return re.findall(r"^\| `(\w+)", text, re.MULTILINE)


def default(kind: type, name: str) -> str:
    """Write a field's default as README does."""
    value = next(f.default for f in fields(kind) if f.name == name)
    if isinstance(value, bool):
        return str(value).lower()
    return str(value) if value not in ("", ()) else "(none)"


def commands() -> Iterator[list[str]]:
    """Give the commands of the shell blocks and of the examples of a terminal, as words."""
    for block in blocks("sh"):
        for line in block.replace("\\\n", " ").splitlines():
            if words := shlex.split(line, comments=True):
                yield words
    for block in blocks("text"):
        for line in re.findall(r"^\$ (.*)$", block.replace("\\\n", " "), re.MULTILINE):
            yield shlex.split(line)


# Files


@pytest.mark.parametrize("text", blocks("yaml"))
def test_team_files_are_read_and_rehearse(text: str) -> None:
    team = parse_team(text)
    run = rehearse(team, None, seconds=30.0)
    assert run.coverage == dict.fromkeys(team.tasks, 1.0)


def test_the_wrong_file_has_the_errors_shown() -> None:
    (text,), (shown,) = blocks("yaml wrong"), blocks("text errors")
    with pytest.raises(FileError) as caught:
        parse_team(text, "wrong.yaml")
    assert str(caught.value) == shown.rstrip("\n")


def test_the_tasks_shown_can_be_added_to_the_example_team() -> None:
    (text,) = blocks("yaml tasks")
    team = merge_tasks(FARM, text)
    assert set(yaml.safe_load(text)) <= set(team.tasks)


def test_the_world_file_shown_fits_the_example_team() -> None:
    (text,) = blocks("yaml world")
    assert len(parse_world(text, FARM).events) == len(yaml.safe_load(text)["events"])


def test_the_python_shown_runs(monkeypatch: pytest.MonkeyPatch, capsys) -> None:
    (text,) = blocks("python")
    monkeypatch.chdir(ROOT)
    exec(compile(ast.parse(text), "README.md", "exec"), {})
    assert re.fullmatch(r"1\.0 \d+\.\d+\n", capsys.readouterr().out)


# Tables


def test_every_setting_is_there_with_its_default() -> None:
    names = [field.name for field in fields(Settings)]
    assert table("Settings") == {name: default(Settings, name) for name in names}


def test_every_parameter_of_the_node_is_there_with_its_default() -> None:
    parameters = pytest.importorskip("allocator_node.ros.parameters")
    names = [field.name for field in fields(parameters.Options)]
    assert table("Options") == {name: default(parameters.Options, name) for name in names}
    assert {"pins", "bans"} <= {field.name for field in fields(Orders)}


@pytest.mark.parametrize(
    ("kind", "more", "left_out"),
    [
        (Team, set(), set()),
        (Robot, set(), {"name"}),
        (Battery, set(), set()),
        (PoseSource, set(), set()),
        (Task, {"kind"}, {"name"}),
    ],
)
def test_every_key_is_there(kind: type, more: set[str], left_out: set[str]) -> None:
    names = {field.name for field in fields(kind)}
    assert set(table(kind.__name__)) == names - left_out | more


def test_defaults_of_the_battery_are_those_shown() -> None:
    for name, shown in table("Battery").items():
        (field,) = (field for field in fields(Battery) if field.name == name)
        assert float(shown) == field.default


@pytest.mark.parametrize(
    ("kinds", "base", "heading"), [(DRIVES, Drive, "drive model"), (KINDS, Task, "kind")]
)
def test_every_model_and_kind_is_there_with_its_keys(kinds, base, heading) -> None:
    assert column(heading) == list(kinds)
    rows = README.split(f"\n| {heading} ")[1].split("\n\n")[0].splitlines()[2:]
    common = {field.name for field in fields(base)}
    for kind, row in zip(kinds.values(), rows, strict=True):
        for field in fields(kind):
            if field.name not in common:
                assert re.search(rf"`{field.name}\b", row), f"{field.name} in {row}"
                if field.default is not MISSING and isinstance(field.default, float):
                    assert f"{field.default:g}" in row


def test_keys_of_commands_and_health_are_there() -> None:
    for kind in (CommandSink, HealthRule):
        key = "command" if kind is CommandSink else "health"
        row = re.search(rf"^\| `{key}` .*$", README, re.MULTILINE).group()
        assert all(field.name in row for field in fields(kind))


def test_every_key_of_the_world_file_is_shown() -> None:
    text = README.split("### World file")[1].split("\n## ")[0]
    for kind in (World, Noise, GroundPatch, MovingTarget, *ROBOT_EVENTS.values(), TaskEvent):
        for field in fields(kind):
            assert re.search(rf"\b{field.name}:", text), field.name


def test_every_example_is_listed() -> None:
    listed = re.findall(r"^\| `config/(\w+)\.yaml`", README, re.MULTILINE)
    there = {path.stem for path in (ROOT / "config").glob("*.yaml")}
    assert set(listed) == {name for name in there if not name.endswith("_world")}


def test_every_cause_is_there() -> None:
    assert column("cause") == [cause.value for cause in Cause]


def test_every_command_is_there_with_its_arguments() -> None:
    """A row names the arguments that its command asks for, and only options it has."""
    assert sorted(column("command")) == sorted(COMMANDS)
    for row in README.split("\n| command | what")[1].split("\n\n")[0].splitlines()[2:]:
        usage = re.match(r"\| `(.*?)`", row).group(1).split()
        module = importlib.import_module(f"allocator_node.commands.{usage[0]}")
        parser = module.parser()
        options = {option for action in parser._actions for option in action.option_strings}
        assert set(re.findall(r"--\w[\w-]*", row)) <= options
        for action in parser._actions:
            if action.required and not action.option_strings:
                assert action.metavar in row
            elif action.required:
                assert action.option_strings[-1] in row


# Commands


@pytest.mark.parametrize("words", list(commands()), ids=" ".join)
def test_commands_name_what_is_there(words: list[str]) -> None:
    """Scripts, packages, executables, launch files, launch arguments, parameters."""
    match words:
        case ["sh", script, *rest]:
            assert (ROOT / script).is_file()
            assert rest in ([], ["--distro", "jazzy"])
        case ["ros2", "launch", "allocator_node", file, *arguments]:
            text = (ROOT / "launch" / file).read_text("utf-8")
            for argument in arguments:
                assert f'"{argument.split(":=")[0]}"' in text
        case ["ros2", "run", "allocator_node", command, *arguments]:
            parse(command, arguments)
        case ["ros2", "param", "set", "/allocator", name, *_]:
            assert name in table("Options") | table("Settings")
        case ["ros2", "lifecycle", "set", "/allocator", transition]:
            assert transition in ("configure", "activate", "deactivate", "cleanup", "shutdown")
        case ["ros2", "service", "call", service, kind, *_]:
            row = re.search(rf"^\| srv \| `~/{Path(service).name}` .*$", README, re.MULTILINE)
            assert kind in row.group()
        case ["ros2", "topic", "echo", *_, topic]:
            assert Path(topic).name in README.split("| direction |")[1].split("\n\n")[0]
        case ["pip", "install", *packages]:
            setup = (ROOT / "setup.py").read_text("utf-8")
            for package in packages:
                assert package.startswith("-") or package == "numpy<2" or f'"{package}"' in setup
        case ["cd" | "git" | "rosdep" | "colcon" | ".", *_]:
            pass
        case _:
            raise AssertionError("README shows a command that nobody checks")


def parse(command: str, arguments: list[str]) -> argparse.Namespace:
    """Parse arguments as the command would."""
    return importlib.import_module(f"allocator_node.commands.{command}").parser().parse_args(
        arguments
    )


def test_pip_is_told_all_that_rosdep_has_no_key_for() -> None:
    """The libraries that package.xml names in its comment, and pydantic for its version."""
    comment = re.search(r"No rosdep key exists for (.*?):", (ROOT / "package.xml").read_text())
    lacking = re.split(r",\s*|\s+and\s+", comment.group(1).strip()) if comment else []
    told = next(words for words in commands() if words[0] == "pip")
    for library in (*lacking, "pydantic"):
        assert any(word.startswith(f"{library}>=") for word in told), library


def test_task_edits_and_pins_are_quoted_for_the_shell_and_for_ros2_param() -> None:
    """``ros2 param`` reads its value as YAML: what is left must be text, or it fails."""
    team = FARM
    for words in commands():
        if words[:2] == ["ros2", "param"] and words[4] in ("task_edit", "pins", "bans"):
            value = yaml.safe_load(words[-1])
            if words[4] == "task_edit":
                team = merge_tasks(team, value)
            else:
                assert isinstance(value, list)
    assert set(team.tasks) == set(FARM.tasks)


def test_the_rehearsals_shown_are_possible() -> None:
    """Every ``team_...`` line in running text parses."""
    lines = re.findall(r"`(team_\w+ [\w./]+\.yaml[^`]*)`", README)
    assert len(lines) > 1
    for line in lines:
        command, *arguments = shlex.split(line)
        asked = parse(command, arguments)
        assert asked.team == Path("team.yaml") or (ROOT / asked.team).is_file()


def test_files_named_in_both_documents_exist() -> None:
    for document in ("README.md", "DEVELOPERS.md"):
        text = (ROOT / document).read_text("utf-8")
        named = re.findall(r"`((?:allocator_node|config|launch|tests)/[\w./]+)`", text)
        assert named
        assert [name for name in named if not (ROOT / name).exists()] == []


def test_links_lead_somewhere() -> None:
    headings = re.findall(r"^#+ (.*)$", README, re.MULTILINE)
    anchors = {re.sub(r"[^\w -]", "", heading).lower().replace(" ", "-") for heading in headings}
    assert set(re.findall(r"\]\(#([\w-]+)\)", README)) <= anchors


@pytest.mark.parametrize("command", COMMANDS)
def test_every_command_explains_itself(command: str) -> None:
    """``--help`` works without ROS being started."""
    done = subprocess.run(
        [sys.executable, "-m", f"allocator_node.commands.{command}", "--help"],
        capture_output=True, text=True, cwd=ROOT, check=True,
    )  # fmt: skip
    assert done.stdout.startswith("usage: ")
