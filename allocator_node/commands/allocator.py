"""``allocator``: the node that decides who does what, and drives them there."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence


def parser() -> argparse.ArgumentParser:
    """Give the command's parser."""
    made = argparse.ArgumentParser(
        prog="allocator",
        description="Allocate the tasks of a team of robots live and drive the robots. "
        "A ROS 2 lifecycle node: configure reads the team file, activate starts to drive.",
        epilog="ROS arguments follow --ros-args, for example: --ros-args -p rate:=20.0",
    )
    made.add_argument("--team", metavar="FILE", help="the team file (parameter team_file)")
    made.add_argument(
        "--autostart", action="store_true", help="configure and activate without being asked"
    )
    return made


def split(arguments: Sequence[str]) -> tuple[list[str], list[str]]:
    """Split arguments into our own and those from ``--ros-args`` on."""
    arguments = list(arguments)
    if "--ros-args" not in arguments:
        return arguments, []
    at = arguments.index("--ros-args")
    return arguments[:at], arguments[at:]


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the node; exit status 0 ended by a signal, 1 could not start, 2 wrong arguments."""
    own, ros = split(sys.argv[1:] if arguments is None else arguments)
    asked = parser().parse_args(own)
    from ..ros.allocator_node import run

    return run(asked.team, asked.autostart, ros)


if __name__ == "__main__":
    sys.exit(main())
