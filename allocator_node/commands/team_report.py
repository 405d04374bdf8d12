"""``team_report``: the report of a recording of the live topics."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence
from pathlib import Path

from ..files.document import FileError
from ..team_file import read_team
from .screen import console


def main(arguments: Sequence[str] | None = None) -> int:
    """Make the report; exit status 0, or 2 where the recording or team file is of no use."""
    asked = parser().parse_args(arguments)
    # Imported late: drawing and decoding take a second to load.
    from ..recording import NotARecording, read_run
    from ..report.page import write_report

    try:
        team = read_team(asked.team) if asked.team else None
        run = read_run(asked.recording, team)
        path = write_report(run, asked.out, f"Report of {asked.recording.resolve().name}")
    except (FileError, NotARecording, OSError) as error:
        print(error, file=sys.stderr)
        return 2
    screen = console()
    screen.print(
        f"{len(run['robots'])} robots, {len(run['tasks'])} tasks, {run['seconds']:.0f} s, "
        f"{len(run['events'])} reallocations"
    )
    screen.print(f"written: {path}")
    return 0


def parser() -> argparse.ArgumentParser:
    """Give the parser of the command line."""
    parser = argparse.ArgumentParser(
        "team_report",
        description="Make a report of a recording: one HTML page and its pictures.",
        epilog="Recordings: those of team_demo and of the node (record_to), and those of ros2 bag "
        "record with the allocator's topics, /diagnostics, poses and batteries in them.",
    )
    parser.add_argument(
        "recording", type=Path, metavar="RECORDING", help="rosbag2 recording, mcap or sqlite3"
    )
    parser.add_argument("--out", type=Path, required=True, help="directory for report.html")
    parser.add_argument(
        "--team", type=Path, metavar="FILE", help="team file, where none is in the recording"
    )
    return parser


if __name__ == "__main__":
    sys.exit(main())
