"""What is imported is declared: in setup.py for pip, in package.xml for rosdep."""

from __future__ import annotations

import ast
import re
import subprocess
import sys
import xml.etree.ElementTree as ElementTree
from importlib.metadata import packages_distributions
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
SETUP = (ROOT / "setup.py").read_text("utf-8")
PACKAGE = ElementTree.parse(ROOT / "package.xml").getroot()

OWN = {"allocator_node", *(path.stem for path in (ROOT / "tests").rglob("*"))}

WITH_ROS = {
    "ament_index_python", "launch", "launch_ros", "launch_testing", "rclpy", "tf2_ros",
}  # fmt: skip
"""Modules that come with ROS, beside the interfaces (``_msgs``, ``_srvs``)."""

WITH_RCLPY = {"builtin_interfaces", "rcl_interfaces", "rosgraph_msgs"}
"""Interfaces that rclpy itself depends on: its wheel brings them."""

ROSDEP = {
    "ament_index_python": "ament_index_python",
    "cvxpy": "python3-cvxpy-pip",
    "rosbags": "python3-rosbags-pip",
    "tf2_ros": "tf2_ros_py",
    "yaml": "python3-yaml",
}
"""Module to rosdep key where it is not python3-<module>, or the module itself for ROS."""

PIP_ONLY = {
    "annotated_types", "clarabel", "daqp", "highspy", "mcap", "piqp", "pyscipopt", "quadprog",
}  # fmt: skip
"""Modules for which rosdep has no key; the comments of package.xml say so."""


def modules(*folders: str) -> set[str]:
    """Give the top modules from elsewhere that the Python files in folders import."""
    found = set()
    for path in (path for folder in folders for path in (ROOT / folder).rglob("*.py")):
        for node in ast.walk(ast.parse(path.read_text("utf-8"))):
            if isinstance(node, ast.Import):
                found |= {alias.name.split(".")[0] for alias in node.names}
            elif isinstance(node, ast.ImportFrom) and not node.level:
                found.add(node.module.split(".")[0])
    return found - OWN - set(sys.stdlib_module_names)


def of_ros(module: str) -> bool:
    """Tell whether a module comes with ROS."""
    return module in WITH_ROS | WITH_RCLPY or module.endswith(("_msgs", "_srvs"))


def declared(module: str) -> bool:
    """Tell whether setup.py names the distribution that a module comes in."""
    names = {name.lower() for name in packages_distributions().get(module, [module])}
    listed = {name.lower() for name in re.findall(r'"([A-Za-z0-9_.-]+)[>=]=', SETUP)}
    return any(name in listed or name.replace("_", "-") in listed for name in names)


@pytest.mark.parametrize("module", sorted(modules("allocator_node", "tests")))
def test_pip_brings_what_is_imported(module: str) -> None:
    if of_ros(module):
        wheel = f'"{module.replace("_", "-")}": "'
        assert module in WITH_ROS | WITH_RCLPY or SETUP.count(wheel) == 2
    else:
        assert declared(module), f"{module} is imported, but setup.py does not name it"


@pytest.mark.parametrize("module", sorted(modules("allocator_node", "tests", "launch")))
def test_rosdep_brings_what_is_imported(module: str) -> None:
    keys = {element.text for element in PACKAGE if element.tag.endswith("depend")}
    text = (ROOT / "package.xml").read_text("utf-8")
    if module in PIP_ONLY:
        assert module.replace("_", "-") in text
    else:
        usual = module if of_ros(module) else f"python3-{module}"
        assert ROSDEP.get(module, usual) in keys


def test_every_command_is_installed_and_has_its_module() -> None:
    """The table in setup.py and the modules with a ``main`` are the same."""
    listed = re.search(r"COMMANDS = \((.*?)\)", SETUP, re.DOTALL).group(1)
    mains = {
        path.stem
        for path in (ROOT / "allocator_node" / "commands").glob("*.py")
        if re.search(r"^def main\(", path.read_text("utf-8"), re.MULTILINE)
    }
    assert set(re.findall(r'"(\w+)"', listed)) == mains


def test_both_files_say_the_same_version_and_licence() -> None:
    from allocator_node import __version__

    assert PACKAGE.findtext("version") == __version__
    assert f'license="{PACKAGE.findtext("license")}"' in SETUP


def test_no_library_prints_into_our_output() -> None:
    """Standard output belongs to the commands, such as tables and JSON."""
    rehearse = (
        "from allocator_node import read_team, rehearse\n"
        "rehearse(read_team('config/solar_farm.yaml'), None, seconds=1.0)"
    )
    done = subprocess.run(
        [sys.executable, "-c", rehearse], capture_output=True, text=True, cwd=ROOT, check=True
    )
    assert done.stdout == ""
