"""Rehearsal at scale: faults drawn at their rates, estimates, availability against theory."""

from __future__ import annotations

import itertools
import json
from pathlib import Path

import numpy as np
import pytest
from builders import robot, team_of, watch
from scipy import stats
from scipy.integrate import trapezoid

from allocator_node.commands.team_rehearse import main
from allocator_node.sim.campaign import campaign, faulty_times, summed
from allocator_node.sim.estimates import mean_of, share_of
from allocator_node.sim.faults import with_faults
from allocator_node.sim.world_file import (
    Faults,
    FeatureEvent,
    PoseEvent,
    World,
    parse_world,
)
from allocator_node.team import Team

CONFIG = Path(__file__).parents[1] / "config"
HOUR = 3600.0


def posts(robots: int, needed: int) -> Team:
    """Give robots with cameras, and a post that needs some of them, each with its camera."""
    crew = [robot(f"r{i}", 3.0 * i, 0.0, features=("camera",)) for i in range(robots)]
    return team_of(crew, [watch("post", 6.0, 6.0, count=needed, each=("scan",))])


def test_faults_come_and_go_at_their_rates() -> None:
    """Mean times of 500 features over many failures, within four standard errors."""
    team = posts(20, 1)
    faults = Faults(feature_mtbf_h=0.1, feature_mttr_h=0.02, robot_mtbf_h=0.5)
    world = with_faults(World(faults=faults), team, 50 * HOUR, seed=3)
    assert world.faults is None
    times = {name: [0.0] for name in team.robots}
    for event in world.events:
        if isinstance(event, FeatureEvent):
            times[event.robot].append(event.at)
    gaps = [np.diff(one) for one in times.values()]
    up, down = np.concatenate([g[::2] for g in gaps]), np.concatenate([g[1::2] for g in gaps])
    for sample, mean in ((up, 0.1 * HOUR), (down, 0.02 * HOUR)):
        assert len(sample) > 5000
        assert abs(sample.mean() - mean) < 4 * mean / len(sample) ** 0.5
        # Exponential: as large a spread as the mean, and no memory (Kolmogorov, 1933).
        assert stats.kstest(sample, "expon", args=(0, mean)).pvalue > 1e-3
    # Without a time to repair a failure lasts.
    silent = [event for event in world.events if isinstance(event, PoseEvent)]
    assert len(silent) == len(team.robots) and all(event.pose == "silent" for event in silent)


def test_faults_hang_on_the_seed_alone() -> None:
    team, faults = posts(3, 1), Faults(feature_mtbf_h=0.01, feature_mttr_h=0.01)
    short, again, long, other = (
        with_faults(World(faults=faults), team, seconds, seed).events
        for seconds, seed in ((100, 1), (100, 1), (1000, 1), (100, 2))
    )
    assert short == again != other
    assert short == tuple(event for event in long if event.at < 100)


def test_which_features_fail_can_be_chosen() -> None:
    team = team_of([robot("a", 0, 0)], [])
    world = parse_world("faults: {feature_mtbf_h: 0.001, features: [gimbal]}", team)
    drawn = with_faults(world, team, HOUR, 0).events
    assert drawn and {event.feature for event in drawn} == {"gimbal"}


def test_wilsons_interval_from_the_literature() -> None:
    """R. G. Newcombe (Statistics in Medicine 17, 1998, 857), example 81 of 263, from memory."""
    found = share_of(81, 263)
    assert (found.low, found.high) == pytest.approx((0.2553, 0.3662), abs=5e-5)


def test_students_interval_by_hand() -> None:
    """1, 2, 3: mean 2, standard error 1/√3, t(2; 0.975) = 4.303 (tables)."""
    found = mean_of([1.0, 2.0, 3.0])
    assert found.value == 2.0 and found.high - 2.0 == pytest.approx(4.303 / 3**0.5, abs=1e-3)
    assert mean_of([1.0]).low is None
    assert mean_of([1.0, 1.0, 0.9], within=(0.0, 1.0)).high == 1.0


def test_times_of_failure_are_united() -> None:
    team = posts(2, 1)
    events = (
        FeatureEvent(1.0, "r0", "camera", "error"), PoseEvent(2.0, "r0", "silent"),
        FeatureEvent(3.0, "r0", "camera", "ok"), PoseEvent(5.0, "r0", "resumed"),
        PoseEvent(7.0, "r0", "silent"),
    )  # fmt: skip
    assert faulty_times(events, team, 10.0) == {"r0": [(1.0, 5.0), (7.0, 10.0)], "r1": []}


def expected_cover(n: int, k: int, mtbf: float, mttr: float, seconds: float) -> float:
    """Give the expected share of time in which k or more of n units work.

    A unit that works at the start is available at t with A(t) = A + (1 − A) e^(−t/τ),
    A = mtbf / (mtbf + mttr), 1/τ = 1/mtbf + 1/mttr, and k out of n with the binomial sum
    Σ_{j≥k} C(n, j) A^j (1 − A)^{n−j} (M. Rausand and A. Høyland, "System Reliability
    Theory", chapters on repairable units and k-out-of-n structures; from memory).
    """
    t = np.linspace(0.0, seconds, 20_001)
    steady = mtbf / (mtbf + mttr)
    available = steady + (1 - steady) * np.exp(-t * (1 / mtbf + 1 / mttr))
    return float(trapezoid(stats.binom.sf(k - 1, n, available), t) / seconds)


def share_up(events: tuple, team: Team, k: int, seconds: float) -> float:
    """Give the share of time in which nothing of k or more robots has failed."""
    t = np.arange(0.005, seconds, 0.01)
    down = np.zeros(len(t), dtype=int)
    for spells in faulty_times(events, team, seconds).values():
        for begin, end in spells:
            down += (begin <= t) & (t < end)
    return float(np.mean(len(team.robots) - down >= k))


@pytest.mark.campaign(slice=1, whole=6)
@pytest.mark.timeout(1800)  # forty rehearsals each
def test_availability_is_that_of_theory(seed: int) -> None:
    """Rehearsed cover of a k-out-of-n need against the closed form, within 99.9 %."""
    n, k = ((5, 3), (4, 4), (3, 1), (5, 4), (6, 3), (2, 1))[seed]
    mtbf, mttr, seconds, runs = 40.0, 20.0, 100.0, 12 if seed == 0 else 40
    world = World(faults=Faults(feature_mtbf_h=mtbf / HOUR, feature_mttr_h=mttr / HOUR))
    outcomes = campaign(
        posts(n, k), world, seconds, range(1000 * seed, 1000 * seed + runs), period=0.5
    )
    for outcome in outcomes[:12]:
        # Run by run: what was drawn, but for the half second until a change is heard of.
        drawn = with_faults(world, posts(n, k), seconds, outcome.seed).events
        exact = share_up(drawn, posts(n, k), k, seconds)
        assert abs(outcome.coverage["post"] - exact) <= 0.5 * (len(drawn) + 1) / seconds
    rehearsed = mean_of([outcome.coverage["post"] for outcome in outcomes], confidence=0.999)
    expected = expected_cover(n, k, mtbf, mttr, seconds)
    assert 0.02 < expected < 0.98 or k == 1
    assert rehearsed.low <= expected <= rehearsed.high
    assert rehearsed.high - rehearsed.low < 0.6  # it could have failed


def test_the_robot_that_hurts_most_is_the_only_one_able() -> None:
    crew = [robot("a", 0, 0, features=("camera",)), robot("b", 3, 0, features=("tracks",)),
            robot("c", 6, 0, features=("camera",))]
    tasks = [watch("look", 0, 5, needs={"scan": 0.6}), watch("climb", 3, 5, needs={"rough": 1.0})]
    world = World(faults=Faults(feature_mtbf_h=10 / HOUR, feature_mttr_h=10 / HOUR))
    outcomes = campaign(team_of(crew, tasks), world, 60.0, range(6), period=0.5)
    found = summed(outcomes, 60.0, share=0.9)
    assert next(iter(found.harm)) == "b"
    assert found.coverage["look"].value > found.coverage["climb"].value
    assert found.runs == 6 and found.worst_seed in range(6)


def test_many_runs_by_two_processes_are_those_of_one() -> None:
    team = posts(3, 2)
    world = World(faults=Faults(feature_mtbf_h=10 / HOUR, feature_mttr_h=10 / HOUR))
    seen = []
    one, two = (
        campaign(team, world, 10.0, range(4), jobs, period=0.5, on_done=seen.append)
        for jobs in (1, 2)
    )
    assert one == two and len(seen) == 8
    assert len({json.dumps(outcome.coverage) for outcome in one}) > 1


def test_the_command_sums_up_and_reports_the_worst_run(tmp_path, capsys) -> None:
    world = tmp_path / "world.yaml"
    world.write_text("faults: {feature_mtbf_h: 0.01, feature_mttr_h: 0.002}\n")
    out = tmp_path / "out"
    assert main([
        str(CONFIG / "solar_farm.yaml"), str(world), "--seconds", "4", "--runs", "3",
        "--out", str(out), "--seed", "5",
    ]) == 0  # fmt: skip
    said = capsys.readouterr().out
    assert "cable_test" in said and "hurts most" in said
    assert max(map(len, said.splitlines()[:-3])) <= 100
    found = json.loads((out / "campaign.json").read_text("utf-8"))
    assert [run["seed"] for run in found["runs"]] == [5, 6, 7]
    worst = found["summary"]["worst_seed"]
    assert f"seed {worst}" in (out / "report.html").read_text("utf-8")
    for text, wrong in itertools.product(("--runs",), ("0", "-1")):
        with pytest.raises(SystemExit):
            main([str(CONFIG / "solar_farm.yaml"), "--seconds", "4", "--out", str(out), text,
                  wrong])  # fmt: skip
