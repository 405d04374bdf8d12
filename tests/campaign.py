"""Everything bad at once, for hours: python3 tests/campaign.py --hours 24 --seed 1 --jobs 2.

Missions of ten minutes follow one another, each with another team, site and set of
mishaps of its world. Between that world and the allocator sits a saboteur: it spoils
what is heard, loses what is commanded, breaks solvers, sets the clock, restarts the
allocator and edits its orders. What must never happen is counted.
"""

from __future__ import annotations

import argparse
import math
import sys
from collections import Counter
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import ProcessPoolExecutor
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, field, replace
from multiprocessing import get_context
from pathlib import Path

import numpy as np

sys.path[:0] = [str(Path(__file__).parents[1]), str(Path(__file__).parent / "benchmarks")]

from cases import mission  # noqa: E402

from allocator_node.allocator import Allocator  # noqa: E402
from allocator_node.decision import Decision  # noqa: E402
from allocator_node.files.document import FileError  # noqa: E402
from allocator_node.observation import HealthReport, Observation, Orders  # noqa: E402
from allocator_node.program import solvers  # noqa: E402
from allocator_node.settings import Settings  # noqa: E402
from allocator_node.sim.rehearsal import edited  # noqa: E402
from allocator_node.sim.site import Site  # noqa: E402
from allocator_node.sim.world import SimulatedTeam  # noqa: E402
from allocator_node.team_file import merge_tasks  # noqa: E402

MISSION = 600.0
"""Length of one mission, s."""

PERIOD = 0.1
SUBSTEPS = 2

FAULT_EVERY = 4.0
"""Mean time between two faults of the saboteur, s."""

TIMEOUT = 0.5
"""Robots that hear no command for so long stand, s: what the README asks of real ones."""

GLITCH = 0.6
"""Longest time for which a pose may be wrong and steady, s. What stays wrong for longer
cannot be told from a localization that was put right."""

PATIENCE = 2.0
"""A task may lack what an idle robot could give for so long, s."""


@dataclass
class Totals:
    """What happened, and what must never happen.

    Attributes:
        decisions: Decisions made.
        faults: Faults injected, by kind.
        never: What must be 0, by kind.
        worst: Examples of the latter.
        uncovered_s: Time tasks lacked something, s.
    """

    decisions: int = 0
    faults: Counter = field(default_factory=Counter)
    never: Counter = field(
        default_factory=lambda: Counter(
            dict.fromkeys(
                (
                    "contacts", "limit violations", "non-finite commands",
                    "periods without a decision", "commands to robots not heard",
                    "unexcused uncovered seconds",
                ),
                0,
            )
        )
    )  # fmt: skip
    worst: list[str] = field(default_factory=list)
    uncovered_s: float = 0.0

    def note(self, what: str, where: str, count: float = 1) -> None:
        """Count what must never happen."""
        self.never[what] += count
        if len(self.worst) < 20:
            self.worst.append(f"{what}: {where}")

    def add(self, other: Totals) -> None:
        """Add what happened in another mission."""
        self.decisions += other.decisions
        self.faults.update(other.faults)
        self.never.update(other.never)
        self.worst = (self.worst + other.worst)[:20]
        self.uncovered_s += other.uncovered_s

    def lines(self) -> Iterator[str]:
        """Give the totals for people."""
        yield f"decisions {self.decisions}"
        yield f"faults injected {self.faults.total()}"
        yield from (f"  {kind} {count}" for kind, count in sorted(self.faults.items()))
        yield f"task-seconds uncovered, all causes {self.uncovered_s:.1f}"
        yield from (f"{kind} {round(count, 1)}" for kind, count in self.never.items())
        yield from self.worst


class Saboteur:
    """Spoils what passes between a simulated team and its allocator.

    Attributes:
        clock: What its clock is ahead of the world's, s.
        lost: Robots that hear no commands at present, shape (N,).
    """

    def __init__(self, random: np.random.Generator, count: int, faults: Counter) -> None:
        self.random, self.count, self.faults = random, count, faults
        self.clock = 0.0
        self.lost = np.zeros(count, dtype=bool)
        self._spoils: list[tuple[float, Callable[[Observation, int], Observation]]] = []
        self._lost_until = np.zeros(count)
        self._solvers_until = 0.0

    def strikes(self, now: float) -> list[str]:
        """Begin faults; give those that are about the allocator itself."""
        self.lost = self._lost_until > now
        self._spoils = [spoil for spoil in self._spoils if spoil[0] > now]
        if now > self._solvers_until:
            solvers.SOLVERS = SOUND
        if self.random.random() > PERIOD / FAULT_EVERY:
            return []
        kind = str(self.random.choice(list(KINDS)))
        self.faults[kind] += 1
        return [kind] if not (act := KINDS[kind]) else act(self, now) or []

    def heard(self, observation: Observation, step: int) -> Observation:
        """Give what reaches the allocator, its clock as it is set."""
        for _, spoil in self._spoils:
            observation = spoil(observation, step)
        return replace(
            observation,
            pose_times=observation.pose_times + self.clock,
            charge_times=observation.charge_times + self.clock,
        )

    # -- kinds of faults -----------------------------------------------------------

    def _spoil(
        self, until: float, change: Callable[[Observation, int], dict[str, np.ndarray]]
    ) -> None:
        self._spoils.append((until, lambda seen, step: replace(seen, **change(seen, step))))

    def _one(self) -> int:
        return int(self.random.integers(self.count))

    def _shifted(self, seen: Observation, robot: int, by: np.ndarray) -> dict[str, np.ndarray]:
        poses = seen.poses.copy()
        poses[robot] += by
        return {"poses": poses}

    def _leap(self) -> np.ndarray:
        angle = self.random.uniform(-np.pi, np.pi)
        return np.array([30 * np.cos(angle), 30 * np.sin(angle), 0, self.random.uniform(-3, 3)])

    def pose_jump(self, now: float) -> None:
        robot, leap = self._one(), self._leap()
        until = now + self.random.uniform(PERIOD, GLITCH)
        self._spoil(until, lambda seen, step: self._shifted(seen, robot, leap))

    def two_localizations(self, now: float) -> None:
        robot, leap = self._one(), self._leap()
        self._spoil(
            now + 10.0, lambda seen, step: self._shifted(seen, robot, leap * (step % 2))
        )

    def _wrong(self, name: str, robot: int, value: float, until: float) -> None:
        def change(seen: Observation, step: int) -> dict[str, np.ndarray]:
            field = getattr(seen, name).copy()
            field[robot] = value
            return {name: field}

        self._spoil(until, change)

    def pose_not_finite(self, now: float) -> None:
        bad = self.random.choice([np.nan, np.inf, -np.inf])
        self._wrong("poses", self._one(), bad, now + self.random.uniform(0.1, 8.0))

    def pose_absurd(self, now: float) -> None:
        self._wrong("poses", self._one(), 1e9, now + self.random.uniform(0.1, GLITCH))

    def velocity_absurd(self, now: float) -> None:
        self._wrong("velocities", self._one(), 1e5, now + self.random.uniform(0.1, 8.0))

    def battery_not_measured(self, now: float) -> None:
        self._wrong("charges", self._one(), np.nan, now + self.random.uniform(1, 60))

    def battery_out_of_range(self, now: float) -> None:
        self._wrong("charges", self._one(), 80.0, now + self.random.uniform(0.1, 2.0))

    def stamps_from_the_future(self, now: float) -> None:
        self._wrong("pose_times", self._one(), now + 3600.0, now + self.random.uniform(0.1, 8.0))

    def strange_diagnostics(self, now: float) -> None:
        strange = tuple(HealthReport(f"stranger {k}", k % 5) for k in range(2000))
        self._spoil(now + PERIOD, lambda seen, step: {"health": seen.health + strange})

    def messages_repeated(self, now: float) -> None:
        robot, kept = self._one(), []

        def change(seen: Observation, step: int) -> dict[str, np.ndarray]:
            kept.append((seen.poses[robot], seen.pose_times[robot]))
            poses, times = seen.poses.copy(), seen.pose_times.copy()
            poses[robot], times[robot] = kept[0]
            return {"poses": poses, "pose_times": times}

        self._spoil(now + self.random.uniform(0.2, 20.0), change)

    def network_lost(self, now: float) -> None:
        """A part of the team on the far side for 30 s: not heard, and hears nothing."""
        far = self.random.random(self.count) < 0.4
        self._lost_until[far] = now + 30.0
        self._spoil(
            now + 30.0,
            lambda seen, step: {
                "pose_times": np.where(far, np.nan, seen.pose_times),
                "charges": np.where(far, np.nan, seen.charges),
            },
        )

    def commands_lost(self, now: float) -> None:
        self._lost_until[self._one()] = now + self.random.uniform(0.1, 3.0)

    def clock_set_ahead(self, now: float) -> None:
        self.clock += self.random.uniform(1.5, 500.0)

    def clock_set_back(self, now: float) -> None:
        self.clock -= self.random.uniform(0.05, 500.0)

    def _solve_with(self, solver: Callable, now: float) -> None:
        self._solvers_until = now + self.random.uniform(0.1, 5.0)
        solvers.SOLVERS = (solver,)

    def solvers_fail(self, now: float) -> None:
        def fail(qp: solvers.QP) -> np.ndarray:
            raise RuntimeError("a bug in a library")

        self._solve_with(fail, now)

    def solvers_talk_nonsense(self, now: float) -> None:
        scale = 10.0 ** self.random.uniform(-3, 6)
        self._solve_with(lambda qp: scale * self.random.normal(size=len(qp.linear)), now)


SOUND = solvers.SOLVERS

KINDS: dict[str, Callable[[Saboteur, float], None] | None] = {
    name.replace("_", " "): getattr(Saboteur, name)
    for name in (
        "pose_jump", "two_localizations", "pose_not_finite", "pose_absurd", "velocity_absurd",
        "battery_not_measured", "battery_out_of_range", "stamps_from_the_future",
        "strange_diagnostics", "messages_repeated", "network_lost", "commands_lost",
        "clock_set_ahead", "clock_set_back", "solvers_fail", "solvers_talk_nonsense",
    )
} | dict.fromkeys(
    ("restart", "hold", "pins and bans", "weights", "task edit", "forget")
)  # fmt: skip
"""Faults by name; those without a function are done to the allocator by :class:`Campaign`."""


class Campaign:
    """One mission under sabotage."""

    def __init__(self, seed: int, seconds: float, totals: Totals) -> None:
        self.seed, self.seconds, self.totals = seed, seconds, totals
        self.random = np.random.default_rng([seed, 1])
        team, world = mission(seed, seconds)
        self.world = SimulatedTeam(team, world, seed)
        self.site = Site(team, Settings().height_clearance)
        self.allocator = Allocator(team, period=PERIOD)
        self.saboteur = Saboteur(self.random, len(team.robots), totals.faults)
        self.limits = self.allocator._model.fleet.limits
        self._lacking: dict[str, float] = {}
        self._hold_until = 0.0

    def run(self) -> None:
        """Run the mission."""
        held, age = np.zeros((len(self.limits), 4)), np.zeros(len(self.limits))
        for step in range(round(self.seconds / PERIOD)):
            now = step * PERIOD
            self._change(self.saboteur.strikes(now), now)
            observation = self.saboteur.heard(self.world.observation(), step)
            decision = self._decided(observation, now + self.saboteur.clock)
            if decision is not None:
                hears = ~self.saboteur.lost
                held[hears], age[hears] = decision.commands[hears], 0.0
            age += PERIOD
            held[age > TIMEOUT] = 0.0
            events = ()
            for _ in range(SUBSTEPS):
                self.world.step(held, PERIOD / SUBSTEPS)
                events += self.world.task_events
                nearest = self.site.separation(self.world.true_poses)
                if nearest is not None and nearest[0] < 0:
                    self.totals.note("contacts", f"seed {self.seed}, {now:.1f} s: {nearest}")
            known = tuple(e for e in events if e.task in self.allocator.team.tasks)
            if known and any(event.active is not None for event in known):
                self._edit(edited(self.allocator.team, known), now)

    def _decided(self, observation: Observation, now: float) -> Decision | None:
        where = f"seed {self.seed}, {now - self.saboteur.clock:.1f} s"
        try:
            decision = self.allocator.step(observation, now)
        except Exception as error:
            self.totals.note("periods without a decision", f"{where}: {error!r}")
            return None
        self.totals.decisions += 1
        commands = decision.commands
        if not np.isfinite(commands).all():
            self.totals.note("non-finite commands", where)
        if (np.abs(commands) > self.limits + 1e-6).any():
            self.totals.note("limit violations", where)
        if commands[~decision.heard].any():
            self.totals.note("commands to robots not heard", where)
        self._look_at_coverage(decision, where)
        return decision

    def _look_at_coverage(self, decision: Decision, where: str) -> None:
        """An idle robot that is able excuses nothing, unless the group is full."""
        short = {shortfall.task for shortfall in decision.shortfalls}
        self.totals.uncovered_s += PERIOD * len(short)
        self._lacking = {task: t for task, t in self._lacking.items() if task in short}
        idle = (decision.assignment < 0) & decision.heard
        for task in short:
            m = decision.tasks.index(task)
            full = (decision.assignment == m).sum() >= self.allocator._model.most[m]
            if full or not (idle & decision.able[:, m]).any():
                self._lacking.pop(task, None)
                continue
            self._lacking[task] = self._lacking.get(task, 0.0) + PERIOD
            if self._lacking[task] > PATIENCE:
                self.totals.note("unexcused uncovered seconds", f"{where}: {task}", PERIOD)

    def _change(self, kinds: list[str], now: float) -> None:
        if now > self._hold_until and self.allocator.orders.hold:
            self.allocator.orders = replace(self.allocator.orders, hold=False)
        for kind in kinds:
            match kind:
                case "restart":
                    former = self.allocator
                    self.allocator = Allocator(former.team, former.settings, PERIOD)
                    self.allocator.orders = former.orders
                    self.allocator.recall(former.memory())
                case "hold":
                    self._hold_until = now + self.random.uniform(0.5, 10.0)
                    self.allocator.orders = replace(self.allocator.orders, hold=True)
                case "pins and bans":
                    self.allocator.orders = Orders(self._pairs(2), self._pairs(3))
                case "weights":
                    self.allocator.settings = Settings(
                        kappa=10 ** self.random.uniform(-3, 0),
                        swap_distance=self.random.uniform(0, 20),
                        s_min=self.random.uniform(0.1, 0.6),
                    )
                case "task edit":
                    self._edit_by_text(now)
                case "forget":
                    self.allocator.forget()

    def _pairs(self, most: int) -> frozenset[tuple[str, str]]:
        robots, tasks = list(self.allocator.team.robots), list(self.allocator.team.tasks)
        if not tasks:
            return frozenset()
        return frozenset(
            (str(self.random.choice(robots)), str(self.random.choice(tasks)))
            for _ in range(self.random.integers(0, most + 1))
        )

    def _edit_by_text(self, now: float) -> None:
        x, y = self.random.uniform([2, 2], [38, 28])
        names = [*self.allocator.team.tasks, "extra"]
        name = str(self.random.choice(names))
        text = str(
            self.random.choice(
                [
                    f"{name}: {{priority: {self.random.integers(0, 7)}}}",
                    f"extra: {{kind: visit, at: [{x:.2f}, {y:.2f}], dwell: 5}}",
                    f"extra: {{kind: watch, at: [{x:.2f}, {y:.2f}], robots: {{max: 1}}}}",
                    f"{name}: {{active: false}}",
                    f"{name}: {{active: true, robots: {{min: 1, max: 2}}}}",
                    "extra: null",
                    f"{name}: {{after: [extra]}}",
                ]
            )
        )
        try:
            team = merge_tasks(self.allocator.team, text)
        except FileError:
            self.totals.faults["task edit, refused"] += 1
            return
        self._edit(team, now)

    def _edit(self, team, now: float) -> None:  # noqa: ANN001
        self.allocator.edit(team, now + self.saboteur.clock)


@contextmanager
def sound_solvers() -> Iterator[None]:
    """Put the solvers right again whatever happens."""
    try:
        yield
    finally:
        solvers.SOLVERS = SOUND


def one_mission(seed: int, seconds: float) -> Totals:
    """Run one mission and give its totals."""
    totals = Totals()
    with sound_solvers():
        Campaign(seed, seconds, totals).run()
    return totals


def run(
    hours: float, seed: int, jobs: int = 1, say: Callable[[str], None] = lambda text: None
) -> Totals:
    """Run the campaign, ``jobs`` missions at a time, and give its totals."""
    count = math.ceil(3600.0 * hours / MISSION - 1e-9)
    seeds = range(1000 * seed, 1000 * seed + count)
    lengths = [MISSION] * (count - 1) + [3600.0 * hours - MISSION * (count - 1)]
    totals = Totals()
    with ExitStack() as stack:
        missions: Iterable[Totals] = map(one_mission, seeds, lengths)
        if jobs > 1:
            pool = ProcessPoolExecutor(jobs, mp_context=get_context("spawn"))
            missions = stack.enter_context(pool).map(one_mission, seeds, lengths)
        for number, mission in enumerate(missions, 1):
            totals.add(mission)
            say(f"mission {number} of {count}: so far {dict(totals.never)}")
    return totals


def main() -> int:
    """Run the command; 0 where nothing happened that must not."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--hours", type=float, default=1.0, help="simulated time, h")
    parser.add_argument("--seed", type=int, default=0)
    parser.add_argument("--jobs", type=int, default=1, help="missions run at the same time")
    options = parser.parse_args()
    totals = run(
        options.hours, options.seed, options.jobs, lambda text: print(text, file=sys.stderr)
    )
    print("\n".join(totals.lines()))
    return int(any(totals.never.values()))


if __name__ == "__main__":
    sys.exit(main())
