"""``team_demo``: simulated team and allocator as processes, watched in the terminal."""

from __future__ import annotations

import argparse
import os
import sys
import time
from collections.abc import Callable, Mapping, Sequence
from contextlib import ExitStack
from datetime import datetime
from functools import partial
from pathlib import Path

from rich.console import Console
from rich.live import Live
from rich.progress import BarColumn, Progress, TextColumn

from ..files.document import FileError
from ..sim.world_file import read_world
from ..team_file import read_team
from .board import Board
from .children import Child
from .examples import example_files
from .screen import (
    WIDTH,
    change_text,
    console,
    facts_table,
    folded,
    live_view,
    status_lines,
    team_table,
)
from .team_rehearse import positive

RECORDING = "recording"
"""Directory of the recording, beside the logs."""

STARTUP = 60.0
"""Time the allocator gets to publish its first assignments, s."""

LINE_EVERY = 10.0
"""Time between two lines of state where the output is not a terminal, s."""

UNCOVERED = "uncovered"
"""Key of the allocator's own status in ``/diagnostics`` that names what is uncovered."""


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the demo; exit status 0, 1 (a process failed), 2 (wrong file), 130 (interrupted)."""
    asked = parser().parse_args(arguments)
    screen = console()
    try:
        team_file, world_file = (asked.team, asked.world) if asked.team else example_files()
        team = read_team(team_file)
        if world_file:
            read_world(world_file, team)
    except (FileError, OSError) as error:
        print(error, file=sys.stderr)
        return 2
    out = asked.out or Path("runs") / f"demo-{datetime.now():%Y%m%d-%H%M%S}"
    out.mkdir(parents=True, exist_ok=True)
    environment = ros_environment()
    os.environ.update(environment)
    screen.print(
        f"{len(team.robots)} robots, {len(team.tasks)} tasks, {asked.seconds:.0f} s; "
        f"ROS_DOMAIN_ID={environment['ROS_DOMAIN_ID']}, on this machine only; logs in {out}"
    )
    board = Board()
    try:
        run(board, team_file, world_file, asked.seconds, out, environment, screen)
    except Interrupted:
        screen.print("interrupted")
        return 130
    except ChildFailed as failure:
        screen.print(str(failure), markup=False)
        return 1
    say_summary(board, asked.seconds, out, screen)
    screen.print("making the report of the recording ...")
    screen.print(f"report: {report(out / RECORDING, out, team_file.name)}")
    return 0


def run(
    board: Board,
    team_file: Path,
    world_file: Path | None,
    seconds: float,
    out: Path,
    environment: Mapping[str, str],
    screen: Console,
) -> None:
    """Start the processes, watch them, and end them whatever happens.

    Raises:
        ChildFailed: A child process ended before the time was over.
        Interrupted: A signal asked to end.
    """
    from ..ros.ending import Ending

    ending = Ending()
    simulated = [str(path) for path in (team_file, world_file) if path]
    commands = {
        "team_sim": simulated, "allocator": ["--team", str(team_file), "--autostart"]
    }
    with ExitStack() as stack:
        children = []
        for command, arguments in commands.items():
            child = Child(command, arguments, out / f"{command}.log", environment)
            stack.callback(child.stop)
            children.append(child)
        stack.callback(listen(board))
        stack.callback(record(team_file, out / RECORDING))
        go_on = partial(check, children, lambda: ending.asked)
        wait_for_life(board, children[-1], go_on)
        show = redraw if screen.is_terminal else print_lines
        show(board, go_on, seconds, screen)


def parser() -> argparse.ArgumentParser:
    """Give the parser of the command line."""
    parser = argparse.ArgumentParser(
        "team_demo",
        description="Start a simulated team and the allocator, and watch them. "
        "Without a team file: the example team and its world.",
    )
    parser.add_argument("team", type=Path, nargs="?", metavar="TEAM", help="team file")
    parser.add_argument("world", type=Path, nargs="?", metavar="WORLD", help="world file")
    parser.add_argument("--seconds", type=positive, default=180.0, help="how long, s (180)")
    parser.add_argument("--out", type=Path, help="directory of logs, recording and report")
    return parser


def ros_environment() -> dict[str, str]:
    """Give the environment, kept to this machine and a domain of its own where unset."""
    defaults = {
        "ROS_AUTOMATIC_DISCOVERY_RANGE": "LOCALHOST",
        "ROS_DOMAIN_ID": str(20 + os.getpid() % 71),
    }
    return {**defaults, **os.environ}


def record(team_file: Path, path: Path) -> Callable[[], None]:
    """Record what the report needs; give the function that ends it."""
    from ..recording import recorded_topics
    from ..ros.recorder import Recorder

    topics = recorded_topics(read_team(team_file), "/allocator")
    return Recorder(path, topics, team_file.read_text("utf-8")).close


def report(recording: Path, out: Path, name: str) -> str:
    """Make the report of the recording; give what to tell about it."""
    from ..recording import NotARecording, read_run
    from ..report.page import write_report

    try:
        return str(write_report(read_run(recording), out, f"Demo of {name}"))
    except (NotARecording, OSError) as error:
        return f"no report: {error}"


def listen(board: Board) -> Callable[[], None]:
    """Fill a board from the allocator's topics; give the function that ends it."""
    from ..ros.listener import Listener

    heard = time.monotonic()

    def diagnosed(statuses: list[Mapping]) -> None:
        nonlocal heard
        for status in statuses:
            if UNCOVERED in status["values"]:
                now = time.monotonic()
                board.lacks(status["values"][UNCOVERED], now - heard)
                heard = now

    return Listener("/allocator", board.assigned, board.reallocated, diagnosed).close


class ChildFailed(Exception):
    """A child process ended by itself, or never came to life."""

    def __init__(self, child: Child, what: str) -> None:
        lines = "\n".join(f"    {line}" for line in child.last_lines())
        super().__init__(f"{child.name} {what}; the end of {child.log}:\n{lines}")


class Interrupted(Exception):
    """A signal asked the demo to end."""


def check(children: Sequence[Child], ended: Callable[[], bool]) -> None:
    """Raise where the run cannot go on.

    Raises:
        ChildFailed: A child process is no longer there.
        Interrupted: A signal asked to end.
    """
    if ended():
        raise Interrupted
    for child in children:
        if child.status is not None:
            raise ChildFailed(child, f"ended with status {child.status}")


def wait_for_life(board: Board, allocator: Child, go_on: Callable[[], None]) -> None:
    """Wait for the allocator's first assignments.

    Raises:
        ChildFailed: They did not come.
    """
    began = time.monotonic()
    while not board.rows:
        go_on()
        if time.monotonic() - began > STARTUP:
            raise ChildFailed(allocator, f"published no assignments within {STARTUP:.0f} s")
        time.sleep(0.1)


def redraw(
    board: Board, go_on: Callable[[], None], seconds: float, screen: Console
) -> None:
    """Redraw the whole view a few times a second."""
    progress = Progress(
        BarColumn(bar_width=60), TextColumn("{task.completed:.0f} of {task.total:.0f} s")
    )
    bar = progress.add_task("", total=seconds)
    began = time.monotonic()
    width = min(screen.width, WIDTH)
    with Live(console=screen, auto_refresh=False, transient=True) as live:
        while (t := time.monotonic() - began) < seconds:
            go_on()
            progress.update(bar, completed=t)
            with board.lock:
                view = live_view(board.rows, list(board.changes), board.lack.now, progress, width)
            live.update(view, refresh=True)
            time.sleep(0.2)


def print_lines(
    board: Board, go_on: Callable[[], None], seconds: float, screen: Console
) -> None:
    """Print a line for each reallocation, and one of state now and then."""
    began, printed, due = time.monotonic(), 0, 1.0
    while (t := time.monotonic() - began) < seconds:
        go_on()
        with board.lock:
            rows, changes, lack = board.rows, board.changes[printed:], board.lack.now
        for change in changes:
            print(folded(str(change)), flush=True)
        printed += len(changes)
        if t >= due:
            print(status_lines(t, rows, lack), flush=True)
            due += LINE_EVERY
        time.sleep(0.1)


def say_summary(board: Board, seconds: float, out: Path, screen: Console) -> None:
    """Print how it went, and leave the reallocations in a file."""
    lines = "".join(f"{change}\n" for change in board.changes)
    (out / "reallocations.txt").write_text(lines, "utf-8")
    screen.print(team_table(board.rows))
    if screen.is_terminal:
        for change in board.changes:
            screen.print(change_text(change))
    causes: dict[str, int] = {}
    for change in board.changes:
        causes[change.cause] = causes.get(change.cause, 0) + 1
    screen.print(facts_table("", [
        ("run", f"{seconds:.0f} s"),
        ("reallocations", f"{len(board.changes)}: "
                          + ", ".join(f"{n} {cause}" for cause, n in causes.items())),
        ("uncovered", f"{board.lack.seconds:.1f} s in all"),
        ("logs", str(out)),
    ]))


if __name__ == "__main__":
    sys.exit(main())
