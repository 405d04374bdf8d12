"""Gives every test process a ROS 2 domain of its own, before anything imports rclpy.

Also the campaigns: a test marked ``campaign(slice, whole)`` takes a ``seed`` and runs
for the first few seeds, or with ``--whole`` for all of them.
"""

from __future__ import annotations

import os

import pytest

DOMAINS = 101
"""Domain ids 1..101 keep clear of the ephemeral ports of every platform (ROS 2 docs)."""

ELSEWHERE = (
    "ROS_LOCALHOST_ONLY",
    "ROS_STATIC_PEERS",
    "ROS_DISCOVERY_SERVER",
    "FASTDDS_DEFAULT_PROFILES_FILE",
    "FASTRTPS_DEFAULT_PROFILES_FILE",
    "CYCLONEDDS_URI",
)
"""Settings of the user's own network, which would let tests reach it or hide them."""


def _settle() -> int:
    """Set this process's domain from the user's or the process's id, and the xdist worker."""
    for name in ELSEWHERE:
        os.environ.pop(name, None)
    os.environ["ROS_AUTOMATIC_DISCOVERY_RANGE"] = "LOCALHOST"
    first = int(os.environ.get("ROS_DOMAIN_ID") or os.getpid() * 37)
    worker = int(os.environ.get("PYTEST_XDIST_WORKER", "gw-1").removeprefix("gw")) + 1
    domain = (first - 1 + worker) % DOMAINS + 1
    os.environ["ROS_DOMAIN_ID"] = str(domain)
    return domain


_DOMAIN = _settle()


@pytest.fixture(scope="session", autouse=True)
def ros_domain() -> int:
    """The ROS_DOMAIN_ID that nodes of this test process, and their children, use."""
    return _DOMAIN


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--whole", action="store_true", help="run campaigns whole, not a slice")


def pytest_generate_tests(metafunc: pytest.Metafunc) -> None:
    campaign = metafunc.definition.get_closest_marker("campaign")
    if campaign is not None:
        part, whole = campaign.kwargs["slice"], campaign.kwargs["whole"]
        metafunc.parametrize("seed", range(whole if metafunc.config.option.whole else part))
