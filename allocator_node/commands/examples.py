"""Where the example team comes with the package: source tree or installed share directory."""

from __future__ import annotations

import sys
from pathlib import Path

TEAM, WORLD = "solar_farm.yaml", "solar_farm_world.yaml"


def example_files() -> tuple[Path, Path]:
    """Give the paths of the example team file and its world file.

    Raises:
        FileNotFoundError: They are in none of the usual places.
    """
    places = [Path(__file__).resolve().parents[2], Path(sys.prefix) / "share" / "allocator_node"]
    try:
        from ament_index_python import get_package_share_directory

        places.append(Path(get_package_share_directory("allocator_node")))
    except (ImportError, LookupError, OSError):
        pass
    for place in places:
        team, world = place / "config" / TEAM, place / "config" / WORLD
        if team.is_file() and world.is_file():
            return team, world
    looked = ", ".join(str(place / "config") for place in places)
    raise FileNotFoundError(f"{TEAM} and {WORLD} are not in {looked}; name a team file")
