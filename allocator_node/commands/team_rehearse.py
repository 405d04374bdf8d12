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
from ..sim.campaign import Summary, campaign, summed, write_campaign
from ..sim.estimates import Estimate
from ..sim.record import Rehearsal, write_run
from ..sim.rehearsal import rehearse
from ..sim.world_file import World, read_world
from ..team import Team
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
    name = asked.team.name + (f" with {asked.world.name}" if asked.world else "")
    seed = asked.seed
    if asked.runs > 1:
        seed = many(team, world, asked, screen)
    rehearsal = once(team, world, asked.seconds, seed, screen)
    # Imported late: drawing takes a second to load.
    from ..report.page import write_report

    if asked.runs == 1:
        for part in summary(rehearsal):
            screen.print(part)
    else:
        screen.print(f"the report shows the run that was covered least, seed {seed}")
    paths = (
        write_run(rehearsal, asked.out),
        write_report(vars(rehearsal), asked.out, f"Rehearsal of {name}, seed {seed}"),
    )
    screen.print(f"written: {', '.join(map(str, paths))}")
    return 0


def once(team: Team, world: World, seconds: float, seed: int, screen: Console) -> Rehearsal:
    """Rehearse once under a progress bar."""
    with progress_bar(screen, "s") as progress:
        bar = progress.add_task("rehearsing", total=seconds)
        return rehearse(
            team, world, seconds, seed, on_progress=lambda now: progress.update(bar, completed=now)
        )


def many(team: Team, world: World, asked: argparse.Namespace, screen: Console) -> int:
    """Rehearse with many seeds and print what they say together; give the worst seed."""
    seeds = range(asked.seed, asked.seed + asked.runs)
    with progress_bar(screen, "runs") as progress:
        bar = progress.add_task("rehearsing", total=asked.runs)
        outcomes = campaign(
            team, world, asked.seconds, seeds, asked.jobs,
            on_done=lambda outcome: progress.advance(bar),
        )
    summed_up = summed(outcomes, asked.seconds, asked.share)
    for part in campaign_parts(summed_up):
        screen.print(part)
    screen.print(f"written: {write_campaign(outcomes, summed_up, asked.out)}")
    return summed_up.worst_seed


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
    parser.add_argument(
        "--seed", type=int, default=0, help="seed of pose noise and faults; of the first run (0)"
    )
    parser.add_argument("--runs", type=count, default=1, help="runs, a seed each (1)")
    parser.add_argument("--jobs", type=count, default=1, help="runs at the same time (1)")
    parser.add_argument(
        "--share", type=share, default=0.95, help="what coverage counts as good coverage (0.95)"
    )
    return parser


def count(text: str) -> int:
    """Give a whole number from 1 on, or say what is wrong."""
    value = int(text)
    if value < 1:
        raise argparse.ArgumentTypeError(f"{text} is less than 1")
    return value


def share(text: str) -> float:
    """Give a number from 0 to 1, or say what is wrong."""
    value = float(text)
    if not 0 <= value <= 1:
        raise argparse.ArgumentTypeError(f"{text} is not between 0 and 1")
    return value


def positive(text: str) -> float:
    """Give a positive finite number, or say what is wrong."""
    value = float(text)
    if not 0 < value < float("inf"):
        raise argparse.ArgumentTypeError(f"{text} is not a positive number of seconds")
    return value


def progress_bar(screen: Console, unit: str) -> Progress:
    """Give a progress bar over so many of a unit, shown only on a terminal."""
    return Progress(
        TextColumn("{task.description}"),
        BarColumn(),
        TextColumn(f"{{task.completed:.0f}} of {{task.total:.0f}} {unit}"),
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


def campaign_parts(found: Summary) -> list:
    """Give what many runs say together as parts to print."""
    tasks = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    tasks.add_column("task")
    tasks.add_column("covered on average", justify="right")
    tasks.add_column(f"chance of more than {100 * found.share:g} %", justify="right")
    for task, covered in found.coverage.items():
        tasks.add_row(task, interval(covered, 100, " %"),
                      interval(found.well_covered[task], 100, " %"))  # fmt: skip
    harm = [
        f"{robot} {value:+.2f}" for robot, value in found.harm.items() if value is not None
    ]
    causes = (f"{cause} {mean:.1f}" for cause, mean in found.causes.items())
    return [tasks, facts_table("", [
        ("runs", f"{found.runs} of {found.seconds:g} s; intervals hold the true value with "
                 f"{100 * found.confidence:g} % confidence"),
        ("energy", interval(found.energy_wh, 1, " Wh")),
        ("changes a run", ", ".join(causes) or "none"),
        ("hurts most", ", ".join(harm[:8]) or "nothing failed"),
        ("", "tasks short on average while something of the robot fails, less otherwise"),
        ("contacts", f"in {found.contacts} runs"),
        ("out of bounds", f"in {found.out_of_bounds} runs"),
    ])]  # fmt: skip


def interval(estimate: Estimate, scale: float, unit: str) -> str:
    """Write an estimate with its interval."""
    text = f"{scale * estimate.value:.1f}{unit}"
    if estimate.low is None:
        return text
    return f"{text} ({scale * estimate.low:.1f} to {scale * estimate.high:.1f})"


if __name__ == "__main__":
    sys.exit(main())
