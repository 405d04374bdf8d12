"""Many rehearsals with a seed each, several at a time, and what they say together."""

from __future__ import annotations

import json
from collections import Counter, defaultdict
from collections.abc import Callable, Sequence
from concurrent.futures import ProcessPoolExecutor, as_completed
from dataclasses import asdict, dataclass
from multiprocessing import get_context
from pathlib import Path
from typing import Any

from ..settings import Settings
from ..team import Team
from .estimates import CONFIDENCE, Estimate, mean_of, share_of
from .faults import with_faults
from .record import Rehearsal
from .rehearsal import rehearse
from .world_file import Event, FeatureEvent, PoseEvent, StalledEvent, World


@dataclass(frozen=True)
class Outcome:
    """What is kept of one rehearsal.

    Attributes:
        seed: Its seed.
        coverage: Task to the share of its active time with all needs met.
        energy_wh: Used by all robots, Wh.
        causes: Cause to the number of reallocations.
        min_separation_m: Smallest distance between two bodies, m, or None.
        boundary_violations: Robot-steps out of bounds.
        faulty_s: Robot to the time in which something of it failed, s.
        short_s: Robot to the task-seconds in which a task was short while something of
            that robot failed.
        all_short_s: All task-seconds in which a task was short.
    """

    seed: int
    coverage: dict[str, float]
    energy_wh: float
    causes: dict[str, int]
    min_separation_m: float | None
    boundary_violations: int
    faulty_s: dict[str, float]
    short_s: dict[str, float]
    all_short_s: float


@dataclass(frozen=True)
class Summary:
    """What the runs of a campaign say together, with confidence intervals.

    Attributes:
        runs: How many.
        seconds: Length of each, s.
        share: Coverage that ``well_covered`` asks for.
        confidence: Of the intervals.
        coverage: Task to its mean coverage.
        well_covered: Task to the chance that its coverage is above ``share``.
        energy_wh: Mean energy used by all robots, Wh.
        causes: Cause to the mean number of reallocations in a run.
        contacts: Runs in which two bodies touched.
        out_of_bounds: Runs in which a robot left the bounds.
        harm: Robot to the number of tasks that are short on average while something of it
            fails, less that while nothing of it does; the worst first, None: never failed.
        worst_seed: Seed of the run that was covered least.
    """

    runs: int
    seconds: float
    share: float
    confidence: float
    coverage: dict[str, Estimate]
    well_covered: dict[str, Estimate]
    energy_wh: Estimate
    causes: dict[str, float]
    contacts: int
    out_of_bounds: int
    harm: dict[str, float | None]
    worst_seed: int


def campaign(
    team: Team,
    world: World,
    seconds: float,
    seeds: Sequence[int],
    jobs: int = 1,
    settings: Settings | None = None,
    period: float = 0.1,
    on_done: Callable[[Outcome], None] = lambda outcome: None,
) -> list[Outcome]:
    """Rehearse with each seed; give the outcomes in the order of the seeds.

    Args:
        team: The team.
        world: Noise, ground, events and the rates of faults.
        seconds: Length of each rehearsal, s.
        seeds: Seeds.
        jobs: Processes that work at the same time.
        settings: Weights and times.
        period: Time between two decisions, s.
        on_done: Called with each outcome when it is there.
    """
    outcomes = {}
    given = (team, world, seconds, settings, period)
    if jobs == 1:
        for seed in seeds:
            outcomes[seed] = played(*given, seed)
            on_done(outcomes[seed])
    else:
        # Spawned, not forked: threads and solvers of this process are none of theirs.
        with ProcessPoolExecutor(jobs, mp_context=get_context("spawn")) as pool:
            waiting = [pool.submit(played, *given, seed) for seed in seeds]
            try:
                for done in as_completed(waiting):
                    outcomes[done.result().seed] = done.result()
                    on_done(done.result())
            except BaseException:
                pool.shutdown(cancel_futures=True)
                raise
    return [outcomes[seed] for seed in seeds]


def played(
    team: Team, world: World, seconds: float, settings: Settings | None, period: float, seed: int
) -> Outcome:
    """Rehearse once and keep what the summary needs."""
    world = with_faults(world, team, seconds, seed)
    run = rehearse(team, world, seconds, seed, settings=settings, period=period)
    faulty = faulty_times(world.events, team, seconds)
    return Outcome(
        seed=seed,
        coverage=run.coverage,
        energy_wh=sum(run.energy_wh.values()),
        causes=dict(Counter(event["cause"] for event in run.events)),
        min_separation_m=run.min_separation_m,
        boundary_violations=run.boundary_violations,
        faulty_s={robot: sum(b - a for a, b in spells) for robot, spells in faulty.items()},
        short_s={
            robot: sum(_overlap(spell, a, b) for spell in short_spells(run) for a, b in spells)
            for robot, spells in faulty.items()
        },
        all_short_s=sum(b - a for a, b in short_spells(run)),
    )


def short_spells(run: Rehearsal) -> list[tuple[float, float]]:
    """Give the times in which a task was short; of one task they do not overlap."""
    by_task = defaultdict(list)
    for row in run.shortfalls:
        by_task[row["task"]].append((row["t"], row["until"]))
    return [spell for spells in by_task.values() for spell in _united(spells)]


def faulty_times(
    events: Sequence[Event], team: Team, seconds: float
) -> dict[str, list[tuple[float, float]]]:
    """Give for each robot the times in which something of it failed."""
    spells: dict[str, list[tuple[float, float]]] = {robot: [] for robot in team.robots}
    since: dict[tuple[str, str], float] = {}
    for event in events:
        match event:
            case FeatureEvent():
                what, fails = event.feature, event.level == "error"
            case PoseEvent():
                what, fails = "pose", event.pose == "silent"
            case StalledEvent():
                what, fails = "drive", event.stalled
            case _:
                continue
        key = event.robot, what
        if fails:
            since.setdefault(key, event.at)
        elif key in since:
            spells[event.robot].append((since.pop(key), event.at))
    for (robot, _), begin in since.items():
        if begin < seconds:
            spells[robot].append((begin, seconds))
    return {robot: _united(ones) for robot, ones in spells.items()}


def summed(outcomes: Sequence[Outcome], seconds: float, share: float) -> Summary:
    """Sum outcomes up; ``share``: what coverage is good coverage."""
    runs = len(outcomes)
    tasks = outcomes[0].coverage
    causes = Counter()
    for outcome in outcomes:
        causes.update(outcome.causes)
    return Summary(
        runs=runs,
        seconds=seconds,
        share=share,
        confidence=CONFIDENCE,
        coverage={
            task: mean_of([o.coverage[task] for o in outcomes], within=(0.0, 1.0))
            for task in tasks
        },
        well_covered={
            task: share_of(sum(o.coverage[task] > share for o in outcomes), runs) for task in tasks
        },
        energy_wh=mean_of([o.energy_wh for o in outcomes]),
        causes={cause: count / runs for cause, count in causes.most_common()},
        contacts=sum(
            o.min_separation_m is not None and o.min_separation_m <= 0 for o in outcomes
        ),
        out_of_bounds=sum(o.boundary_violations > 0 for o in outcomes),
        harm=_harm(outcomes, seconds),
        worst_seed=min(outcomes, key=lambda o: sum(o.coverage.values())).seed,
    )


def write_campaign(outcomes: Sequence[Outcome], summary: Summary, directory: Path) -> Path:
    """Write campaign.json into a directory, made if needed, and give its path.

    Raises:
        OSError: It cannot be written.
    """
    directory.mkdir(parents=True, exist_ok=True)
    path = directory / "campaign.json"
    data: dict[str, Any] = {
        "summary": asdict(summary), "runs": [asdict(outcome) for outcome in outcomes]
    }
    path.write_text(json.dumps(data, indent=1, allow_nan=False) + "\n", "utf-8")
    return path


def _harm(outcomes: Sequence[Outcome], seconds: float) -> dict[str, float | None]:
    harm: dict[str, float | None] = {}
    for robot in outcomes[0].faulty_s:
        faulty = sum(o.faulty_s[robot] for o in outcomes)
        short = sum(o.short_s[robot] for o in outcomes)
        well = len(outcomes) * seconds - faulty
        rest = sum(o.all_short_s for o in outcomes) - short
        harm[robot] = short / faulty - (rest / well if well > 0 else 0.0) if faulty > 0 else None
    known = {robot: value for robot, value in harm.items() if value is not None}
    ordered = sorted(known, key=known.get, reverse=True)
    return {robot: harm[robot] for robot in (*ordered, *(r for r in harm if r not in known))}


def _united(spells: Sequence[tuple[float, float]]) -> list[tuple[float, float]]:
    """Give spells without overlaps."""
    united: list[tuple[float, float]] = []
    for begin, end in sorted(spells):
        if united and begin <= united[-1][1]:
            united[-1] = united[-1][0], max(united[-1][1], end)
        else:
            united.append((begin, end))
    return united


def _overlap(spell: tuple[float, float], begin: float, end: float) -> float:
    return max(0.0, min(spell[1], end) - max(spell[0], begin))
