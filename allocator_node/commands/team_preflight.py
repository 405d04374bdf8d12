"""``team_preflight``: what a team would do, and what each loss would leave uncovered."""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Sequence
from pathlib import Path

from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn

from ..files.document import FileError
from ..team_file import read_team
from .screen import WIDTH, console
from .team_rehearse import positive


def main(arguments: Sequence[str] | None = None) -> int:
    """Check a team; exit status 0 all covered, 1 some need uncovered, 2 the file is wrong."""
    asked = parser().parse_args(arguments)
    screen = console()
    try:
        team = read_team(asked.team)
    except FileError as error:
        print(error, file=sys.stderr)
        return 2
    # Imported late: a wrong file is told at once.
    from ..preflight import Assumptions, inspect
    from ..preflight.page import write_page
    from ..preflight.terminal import parts

    assumed = Assumptions(rate=asked.rate, latency=asked.latency)
    progress = Progress(
        TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(),
        console=Console(stderr=True), transient=True, disable=not sys.stderr.isatty(),
    )  # fmt: skip
    with progress:
        bars: dict[str, int] = {}

        def on_progress(what: str, done: int, of: int) -> None:
            if what not in bars:
                bars[what] = progress.add_task(what, total=of)
            progress.update(bars[what], completed=done)

        findings = inspect(team, assumed=assumed, pairs=asked.pairs, on_progress=on_progress)
    if asked.json:
        print(json.dumps(findings.as_json(), indent=1, allow_nan=False))
    else:
        for part in parts(findings, min(screen.width, WIDTH)):
            screen.print(part, width=min(screen.width, WIDTH), soft_wrap=False)
    if asked.html:
        try:
            write_page(findings, asked.html, asked.team.name)
        except OSError as error:
            print(f"{asked.html} cannot be written: {error.strerror}", file=sys.stderr)
            return 2
    return 0 if findings.covered else 1


def parser() -> argparse.ArgumentParser:
    """Give the parser of the command line."""
    parser = argparse.ArgumentParser(
        "team_preflight",
        description="Check a team file and tell what the team would do, and what the loss of "
        "each robot, feature and dock would leave uncovered.",
        epilog="Exit status: 0 every need is met at the start and after every single loss, "
        "1 some need is not, 2 the file is wrong.",
    )
    parser.add_argument("team", type=Path, metavar="TEAM", help="team file")
    parser.add_argument("--json", action="store_true", help="print JSON instead of tables")
    parser.add_argument("--html", type=Path, metavar="FILE", help="write a page too")
    parser.add_argument("--pairs", action="store_true", help="look at every two robots, too")
    parser.add_argument("--rate", type=positive, default=10.0, help="decisions a second, Hz (10)")
    parser.add_argument(
        "--latency", type=positive, default=0.2,
        help="from a pose to the robot's answer to it, s (0.2)",
    )  # fmt: skip
    return parser


if __name__ == "__main__":
    sys.exit(main())
