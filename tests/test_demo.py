"""The demo's screen and its child processes; the demo itself is run in test_launch."""

import math
import os
import signal
import subprocess
import sys
import time

import pytest
from rich.console import Console
from rich.text import Text

from allocator_node.commands import team_demo
from allocator_node.commands.board import Board, Row, number, row_of
from allocator_node.commands.children import Child
from allocator_node.commands.examples import example_files
from allocator_node.commands.screen import WIDTH, bar, folded, live_view, status_lines

TASKS = ("north_rows", "south_rows", "gate_watch", "drain_watch", "cable_test")


def status(robot, task, text, **values):
    shares = {f"specialization.{name}": "0.500" for name in TASKS}
    return {"name": robot, "level": 0, "text": text, "values": {"task": task, **shares, **values}}


def change(stamp, **values):
    return {"name": values["task"], "level": 1, "text": values["detail"],
            "values": {"stamp": stamp, **values}}


def test_a_row_says_what_the_status_says_beyond_the_task():
    row = row_of(status("r1", "gate", "r1 does gate; nearer to r2 than allowed", energy="0.420"))
    assert row == Row("r1", "gate", dict.fromkeys(TASKS, 0.5), 0.42, 0, "nearer to r2 than allowed")
    assert row_of(status("r1", "", "r1 has no task")).text == ""
    assert row_of(status("r1", "", "r1 has no task and charges")).text == "charges"
    assert row_of(status("r1", "", "r1 has no task, not heard from")).text == "not heard from"


@pytest.mark.parametrize(
    ("text", "value"), [("0.5", 0.5), ("50 %", 0.5), ("50%", 0.5), ("3.25 s", 3.25)]
)
def test_numbers_are_read_from_the_beginning_of_a_text(text, value):
    assert number(text) == pytest.approx(value)
    assert math.isnan(number("unknown")) and math.isnan(number(""))


def test_changes_count_from_the_first_and_uncovered_time_adds_up():
    board = Board()
    board.reallocated(change("1000.5", task="gate", to="r1", cause="start", detail="begins"))
    board.reallocated(
        change("1012.5", task="gate", **{"from": "r1"}, to="", cause="silent", detail="r1 is gone")
    )
    first, second = map(str, board.changes)
    assert first == "   0.0 s  gate: nobody → r1  [start] begins"
    assert second == "  12.0 s  gate: r1 → nobody  [silent] r1 is gone"
    for now, elapsed in (("", 1.0), ("gate", 1.0), ("gate", 1.5), ("", 0.5), ("", 1.0)):
        board.lacks(now, elapsed)
    assert board.lack.seconds == pytest.approx(2.0)


@pytest.mark.parametrize(
    ("share", "text"), [(1.0, "██████"), (0.5, "███   "), (0.0, "·     "), (math.nan, "??????"),
                        (2.0, "██████"), (1 / 48, "▏     ")]
)
def test_bars_are_of_one_width(share, text):
    assert bar(share) == text


@pytest.mark.parametrize("tasks", [TASKS, TASKS + tuple(f"more_work_{i}" for i in range(9))])
def test_the_view_fits_into_a_hundred_columns(tasks):
    rows = [Row(f"crawler_{i}", tasks[0], dict.fromkeys(tasks, 0.7), 0.5, 1, "weary " * 20)
            for i in range(12)]
    board = Board()
    for i in range(20):
        board.reallocated(change(str(i), task="gate", to="r1, r2", cause="efficacy",
                                 detail="so little progress that it takes long to say " * 3))
    out = Console(width=200, color_system=None, highlight=False)
    with out.capture() as caught:
        out.print(live_view(rows, board.changes, "gate_watch", Text("progress")))
    lines = caught.get().splitlines()
    assert max(len(line.rstrip()) for line in lines) <= WIDTH
    text = "\n".join(lines)
    assert "crawler_11" in text and "north_rows" in text and "uncovered: gate_watch" in text
    for part in (status_lines(3.0, rows, ""), folded(str(board.changes[-1]))):
        assert max(map(len, part.splitlines())) <= WIDTH and "\x1b" not in part


def stubborn(tmp_path, code):
    """Give a child that runs some code instead of a command."""
    package = tmp_path / "allocator_node" / "commands"
    package.mkdir(parents=True)
    (package.parent / "__init__.py").touch()
    (package / "__init__.py").touch()
    (package / "fake.py").write_text(code)
    environment = {**os.environ, "PYTHONPATH": str(tmp_path)}
    return Child("fake", [], tmp_path / "fake.log", environment)


def wait_for(child, word):
    while word not in child.log.read_text():
        assert child.status is None, child.log.read_text()
        time.sleep(0.02)


def test_a_child_that_ignores_requests_is_ended_all_the_same(tmp_path, monkeypatch):
    monkeypatch.setattr("allocator_node.commands.children.PATIENCE", 0.3)
    monkeypatch.chdir(tmp_path)
    child = stubborn(tmp_path, "import signal, time\n"
                     "signal.signal(signal.SIGINT, signal.SIG_IGN)\n"
                     "signal.signal(signal.SIGTERM, signal.SIG_IGN)\n"
                     "print('up')\ntime.sleep(600)\n")
    wait_for(child, "up")
    assert child.stop() == -signal.SIGKILL


def test_a_child_that_fails_is_told_with_its_last_lines(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    child = stubborn(tmp_path, "import sys\nprint('the valve is stuck')\nsys.exit(3)\n")
    while child.status is None:
        time.sleep(0.02)
    with pytest.raises(team_demo.ChildFailed, match=r"(?s)status 3.*the valve is stuck"):
        team_demo.check([child], lambda: False)


def test_the_demo_tells_a_wrong_file_and_starts_nothing(tmp_path, capsys):
    wrong = tmp_path / "team.yaml"
    wrong.write_text("robots: 3\n")
    assert team_demo.main([str(wrong), "--out", str(tmp_path / "out")]) == 2
    assert "robots" in capsys.readouterr().err
    assert not (tmp_path / "out").exists()


@pytest.mark.ros
def test_the_demo_ends_its_children_when_it_is_told_to_end(tmp_path):
    """SIGTERM to the demo: exit status 130, and no process of its session is left."""
    pytest.importorskip("rclpy")
    team, world = example_files()
    demo = subprocess.Popen(
        [sys.executable, "-m", "allocator_node.commands.team_demo", team, world,
         "--out", str(tmp_path)],
        stdout=subprocess.PIPE, text=True,
        env={**os.environ, "ROS_DOMAIN_ID": str(30 + os.getpid() % 60)},
    )
    logs = [tmp_path / "team_sim.log", tmp_path / "allocator.log"]
    deadline = time.monotonic() + 60
    while not all(log.exists() for log in logs):
        assert demo.poll() is None and time.monotonic() < deadline
        time.sleep(0.05)
    children = subprocess.run(
        ["ps", "-o", "pid=", "--ppid", str(demo.pid)], capture_output=True, text=True, check=True
    ).stdout.split()
    assert len(children) == 2
    demo.send_signal(signal.SIGTERM)
    said, _ = demo.communicate(timeout=60)
    assert demo.returncode == 130 and "interrupted" in said
    for child in children:
        with pytest.raises(ProcessLookupError):
            os.kill(int(child), 0)
