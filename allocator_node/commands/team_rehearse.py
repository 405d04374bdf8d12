"""``team_rehearse``: the allocator against the simulated team, without ROS."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence
from pathlib import Path

from rich import box
from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn
from rich.table import Table

from ..files.document import FileError
from ..sim.record import Rehearsal, write_run
from ..sim.rehearsal import rehearse
from ..sim.world_file import World, read_world
from ..team_file import read_team
from .board import Change
from .screen import change_text, console, facts_table


def main(arguments: Sequence[str] | None = None) -> int:
    """Rehearse, write run.json and report.html, print a summary; exit status 2: wrong file."""
    asked = parser().parse_args(arguments)
    screen = console()
    try:
        team = read_team(asked.team)
        world = read_world(asked.world, team) if asked.world else World()
    except (FileError, OSError) as error:
        print(error, file=sys.stderr)
        return 2
    with progress_bar(screen) as progress:
        bar = progress.add_task("rehearsing", total=asked.seconds)
        rehearsal = rehearse(
            team, world, asked.seconds, asked.seed,
            on_progress=lambda now: progress.update(bar, completed=now),
        )
    # Imported late: drawing takes a second to load.
    from ..report.page import write_report

    for part in summary(rehearsal):
        screen.print(part)
    name = asked.team.name + (f" with {asked.world.name}" if asked.world else "")
    paths = (
        write_run(rehearsal, asked.out),
        write_report(vars(rehearsal), asked.out, f"Rehearsal of {name}, seed {asked.seed}"),
    )
    screen.print(f"written: {', '.join(map(str, paths))}")
    return 0


def parser() -> argparse.ArgumentParser:
    """Give the parser of the command line."""
    parser = argparse.ArgumentParser(
        "team_rehearse", description="Rehearse a team's work without ROS, as fast as it goes."
    )
    parser.add_argument("team", type=Path, metavar="TEAM", help="team file")
    parser.add_argument("world", type=Path, nargs="?", metavar="WORLD", help="world file")
    parser.add_argument("--seconds", type=positive, required=True, help="how long, s")
    parser.add_argument(
        "--out", type=Path, required=True, help="directory for run.json and report.html"
    )
    parser.add_argument("--seed", type=int, default=0, help="seed of the pose noise (0)")
    return parser


def positive(text: str) -> float:
    """Give a positive finite number, or say what is wrong."""
    value = float(text)
    if not 0 < value < float("inf"):
        raise argparse.ArgumentTypeError(f"{text} is not a positive number of seconds")
    return value


def progress_bar(screen: Console) -> Progress:
    """Give a progress bar over simulated seconds, shown only on a terminal."""
    return Progress(
        TextColumn("{task.description}"),
        BarColumn(),
        TextColumn("{task.completed:.0f} of {task.total:.0f} s"),
        TimeRemainingColumn(),
        console=screen,
        transient=True,
        disable=not screen.is_terminal,
    )


def summary(rehearsal: Rehearsal) -> list:
    """Give what happened as parts to print."""
    tasks = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    for heading in ("task", "covered", "active", "finished"):
        tasks.add_column(heading, justify="left" if heading == "task" else "right")
    for task in rehearsal.tasks:
        finished = rehearsal.finished.get(task)
        tasks.add_row(
            task,
            f"{100 * rehearsal.coverage[task]:.1f} %",
            f"{rehearsal.active_s[task]:.0f} s",
            "" if finished is None else f"{finished:.1f} s",
        )
    changes = [
        change_text(Change(
            e["t"], e["task"], ", ".join(e["from"]), ", ".join(e["to"]), e["cause"], e["detail"]
        ))
        for e in rehearsal.events
    ]
    return [tasks, *changes, facts_table("", facts(rehearsal))]


def facts(rehearsal: Rehearsal) -> list[tuple[str, str]]:
    """Give the figures that are no table of their own."""
    separation = "no two robots near the same height"
    if rehearsal.min_separation_m is not None:
        robots = " and ".join(rehearsal.closest["robots"])
        separation = f"{rehearsal.min_separation_m:.2f} m, {robots} at {rehearsal.closest['t']} s"
    wall = rehearsal.period_ms
    return [
        ("least separation", separation),
        ("out of bounds", f"{rehearsal.boundary_violations} robot-steps"),
        ("energy", ", ".join(f"{r} {wh:.1f} Wh" for r, wh in rehearsal.energy_wh.items())),
        ("decision", f"{wall['p50']:.1f} ms median, {wall['p99']:.1f} ms 99 %, "
                     f"{wall['max']:.1f} ms max"),
    ]


if __name__ == "__main__":
    sys.exit(main())
