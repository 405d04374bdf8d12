"""The launch files do what they say, under launch_testing."""

from __future__ import annotations

import os
import subprocess
import sys
from importlib.util import find_spec
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
COMMANDS = ("allocator", "team_sim")

NEEDED = ("rclpy", "launch_ros", "launch_testing")
MISSING = [name for name in NEEDED if find_spec(name) is None]

pytestmark = [
    pytest.mark.ros,
    pytest.mark.slow,
    pytest.mark.skipif(
        bool(MISSING),
        reason=f"{', '.join(MISSING)} not installed: comes with a full ROS 2, not as wheels",
    ),
]


@pytest.fixture(scope="session")
def prefix(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """An install prefix as colcon lays it out, with this clone's files (REP 122)."""
    prefix = tmp_path_factory.mktemp("install")
    marker = prefix / "share/ament_index/resource_index/packages/allocator_node"
    marker.parent.mkdir(parents=True)
    marker.touch()
    share = prefix / "share/allocator_node"
    share.mkdir()
    for name in ("package.xml", "launch", "config"):
        (share / name).symlink_to(ROOT / name)
    executables = prefix / "lib/allocator_node"
    executables.mkdir(parents=True)
    for command in COMMANDS:
        script = executables / command
        script.write_text(
            f"#!{sys.executable}\n"
            "import sys\n"
            f"from allocator_node.commands.{command} import main\n"
            "sys.exit(main())\n"
        )
        script.chmod(0o755)
    return prefix


@pytest.mark.parametrize("description", ["allocator_alone", "demo"])
def test_launch_file(description: str, prefix: Path, ros_domain: int, tmp_path: Path) -> None:
    """The launch_testing description passes; in a process of its own, for rclpy's sake."""
    launching = Path(__file__).parent / "launching"
    paths = {
        "PYTHONPATH": [launching, ROOT],
        "AMENT_PREFIX_PATH": [prefix],
    }
    environment = {**os.environ, "ROS_LOG_DIR": str(tmp_path), "ROS_DOMAIN_ID": str(ros_domain)}
    for name, first in paths.items():
        rest = [os.environ[name]] if os.environ.get(name) else []
        environment[name] = os.pathsep.join([*map(str, first), *rest])
    run = subprocess.run(
        [
            sys.executable,
            "-c",
            "import sys; from launch_testing.launch_test import main; sys.exit(main())",
            str(launching / f"{description}.py"),
        ],
        env=environment,
        cwd=tmp_path,
        capture_output=True,
        text=True,
        timeout=240,
    )
    assert run.returncode == 0, f"{run.stdout[-8000:]}\n{run.stderr[-8000:]}"
    assert "OK" in run.stdout + run.stderr
