"""Slices of the long campaigns, and what each fault costs until the robot stands.

The whole of them, hours: python3 tests/campaign.py --hours 24, python3 tests/fuzz.py
--count 100000, python3 tests/benchmarks/stopping.py.
"""

from __future__ import annotations

import sys
from pathlib import Path

import pytest

sys.path[:0] = [str(Path(__file__).parent / "benchmarks")]

import campaign  # noqa: E402
import fuzz  # noqa: E402
import stopping  # noqa: E402

from allocator_node.settings import Settings  # noqa: E402


@pytest.mark.campaign(slice=1, whole=72)
def test_twenty_minutes_of_faults(seed: int) -> None:
    """Simulated minutes, two missions; all kinds of faults mixed."""
    totals = campaign.run(hours=1 / 3, seed=100 + seed)
    assert totals.decisions == 12_000
    assert totals.faults.total() > 200
    assert not any(totals.never.values()), "\n".join(totals.lines())


def test_two_localizations_across_a_restart() -> None:
    """Mission 1005 began with a contact: the node believed the first pose after a restart."""
    totals = campaign.Totals()
    mission = campaign.Campaign(1005, campaign.MISSION, totals)
    mission.seconds = 8.0
    with campaign.sound_solvers():
        mission.run()
    assert {"two localizations", "restart"} <= set(totals.faults)
    assert not any(totals.never.values()), "\n".join(totals.lines())


def test_the_campaign_notices_what_must_not_happen(monkeypatch: pytest.MonkeyPatch) -> None:
    """A period in which the allocator fails is counted, and the mission goes on."""
    totals = campaign.Totals()
    mission = campaign.Campaign(0, 20.0, totals)

    def fails(observation: object, now: float) -> None:
        raise ValueError("no decision")

    monkeypatch.setattr(mission.allocator, "step", fails)
    mission.run()
    assert totals.never["periods without a decision"] == 200


@pytest.mark.campaign(slice=1, whole=50)
def test_two_thousand_mutated_files(seed: int) -> None:
    pytest.importorskip("yaml")
    outcome = fuzz.run(2000, seed)
    assert not outcome.failures, "\n".join(outcome.failures[:5])
    assert min(outcome.taken[kind] for kind in ("team", "world", "edit", "state")) > 0
    assert min(outcome.refused[kind] for kind in ("team", "world", "edit", "state")) > 100


def test_robots_stand_soon_after_the_last_good_pose() -> None:
    """By hand: a pose is good for ``pose_timeout``; a jump shows with the next decision."""
    times = stopping.table(repetitions=3)
    step, pose = stopping.PERIOD, stopping.POSES_EVERY
    silent = Settings().pose_timeout + step + 0.01  # 10 ms: sums of time steps are not exact
    limits = {
        "poses stop, are refused, or repeat the last one": silent,
        "pose jumps by 30 m": pose + step + 0.01,
        "two localizations in turn": 3 * pose + step + 0.01,
        "hold is called": step + 0.01,
        "node is killed or its host is cut off": stopping.COMMAND_TIMEOUT + 0.01,
    }
    assert times.keys() == limits.keys()
    for fault, seconds in times.items():
        assert max(seconds) <= limits[fault], fault
