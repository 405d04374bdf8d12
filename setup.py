"""Builds the package with pip and, as an ament_python package, with colcon."""

import re
import sys
from glob import glob
from pathlib import Path

from setuptools import find_packages, setup

NAME = "allocator_node"
INIT = Path(__file__).parent / NAME / "__init__.py"
VERSION = re.search(r'__version__ = "(.+?)"', INIT.read_text()).group(1)

COMMANDS = ("allocator", "team_sim", "team_demo", "team_preflight", "team_rehearse", "team_report")

# The ROS 2 wheels of one distribution are built against each other: pin them together.
ROS_WHEELS = {
    "kilted": {
        "rclpy": "9.1.2",
        "rmw-fastrtps-cpp": "9.3.3",
        "lifecycle-msgs": "2.3.0",
        "diagnostic-msgs": "5.5.1",
        "geometry-msgs": "5.5.1",
        "nav-msgs": "5.5.1",
        "sensor-msgs": "5.5.1",
        "std-msgs": "5.5.1",
        "std-srvs": "5.5.1",
        "visualization-msgs": "5.5.1",
    },
    "jazzy": {
        "rclpy": "7.1.6",
        "rmw-fastrtps-cpp": "8.4.3",
        "lifecycle-msgs": "2.0.3",
        "diagnostic-msgs": "5.3.6",
        "geometry-msgs": "5.3.6",
        "nav-msgs": "5.3.6",
        "sensor-msgs": "5.3.6",
        "std-msgs": "5.3.6",
        "std-srvs": "5.3.6",
        "visualization-msgs": "5.3.6",
    },
}

# `ros2 run` looks for executables in lib/<package>. Modern pip ignores these options and puts
# console scripts in bin; old pip heeds them, and gives itself away by calling this file by its
# full path, where colcon and the ROS build farm say `setup.py`.
CALLED_BY_OLD_PIP = Path(sys.argv[0]).is_absolute()
SCRIPTS = f"$base/lib/{NAME}"

setup(
    name=NAME,
    version=VERSION,
    description="Decides live which robot of a mixed team does which task, and drives it there",
    license="Apache-2.0",
    maintainer="allocator_node maintainers",
    maintainer_email="maintainers@allocator-node.example.org",
    python_requires=">=3.10",
    packages=find_packages(include=[NAME, f"{NAME}.*"]),
    data_files=[
        ("share/ament_index/resource_index/packages", [f"{NAME}/resource/{NAME}"]),
        (f"share/{NAME}", ["package.xml"]),
        (f"share/{NAME}/launch", sorted(glob("launch/*.launch.py"))),
        (f"share/{NAME}/config", sorted(glob("config/*.*"))),
    ],
    install_requires=[
        "annotated-types>=0.6",
        "clarabel>=0.9",
        "cvxpy>=1.5",
        "daqp>=0.5",
        "highspy>=1.8",
        "matplotlib>=3.6",
        "mcap>=1.1",
        "networkx>=2.8",
        "numpy>=1.26",
        "piqp>=0.6",
        "pydantic>=2.4",
        "PyYAML>=6.0",
        "rich>=13.0",
        "rosbags>=0.10",
        "scipy>=1.11",
        "shapely>=2.0",
    ],
    extras_require={
        **{
            distro: [f"ros-{distro}-{wheel}=={version}" for wheel, version in wheels.items()]
            for distro, wheels in ROS_WHEELS.items()
        },
        "dev": [
            "colcon-common-extensions>=0.3",
            "hypothesis>=6.90",
            "jsonschema>=4.10",
            "pyscipopt>=5.0",
            "pytest>=7.4",
            "pytest-timeout>=2.2",
            "pytest-xdist>=3.4",
            "quadprog>=0.1.12",
            "ruff>=0.8",
        ],
    },
    entry_points={
        "console_scripts": [f"{command} = {NAME}.commands.{command}:main" for command in COMMANDS],
    },
    options={}
    if CALLED_BY_OLD_PIP
    else {"develop": {"script_dir": SCRIPTS}, "install": {"install_scripts": SCRIPTS}},
    zip_safe=False,
)
