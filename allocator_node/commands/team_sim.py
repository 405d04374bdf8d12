"""``team_sim``: simulated robots for a team file, on real topics."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence
from pathlib import Path

from ..files.document import FileError
from ..sim.faults import with_faults
from ..sim.world_file import World, read_world
from ..team_file import read_team
from .allocator import split
from .team_rehearse import positive

FAULTS_FOR = 24 * 3600.0
"""Random faults are drawn for so long, s of simulated time."""


def parser() -> argparse.ArgumentParser:
    """Give the command's parser."""
    made = argparse.ArgumentParser(
        prog="team_sim",
        description="Simulate the robots of a team file on ROS 2 topics: poses, diagnostics and "
        "batteries out, commands in. A robot stops when its commands stop.",
    )
    made.add_argument("team", metavar="TEAM", type=Path, help="the team file")
    made.add_argument(
        "world", metavar="WORLD", type=Path, nargs="?", help="ground, noise and events"
    )
    made.add_argument("--seed", type=int, default=0, help="seed of the noise (default 0)")
    made.add_argument(
        "--speed", type=positive, default=1.0, help="simulated seconds in a second (default 1)"
    )
    made.add_argument(
        "--allocator",
        metavar="NAME",
        default="allocator",
        help="node that events about tasks go to (default: %(default)s)",
    )
    return made


def main(arguments: Sequence[str] | None = None) -> int:
    """Simulate; exit status 0 ended by a signal, 2 wrong arguments or files."""
    own, ros = split(sys.argv[1:] if arguments is None else arguments)
    asked = parser().parse_args(own)
    try:
        team = read_team(asked.team)
        world = read_world(asked.world, team) if asked.world else World()
    except (FileError, FileNotFoundError) as error:
        print(error, file=sys.stderr)
        return 2
    for robot in team.robots.values():
        if robot.pose.topic is None:
            print(
                f"{asked.team}: robots.{robot.name}.pose: a simulated robot publishes no tf; "
                "name a topic to simulate it",
                file=sys.stderr,
            )
            return 2
    from ..ros.sim_node import run

    world = with_faults(world, team, FAULTS_FOR, asked.seed)
    return run(team, world, asked.seed, asked.speed, asked.allocator, ros)


if __name__ == "__main__":
    sys.exit(main())
