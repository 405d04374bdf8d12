"""What happened in a rehearsal, gathered period by period, and its run.json."""

from __future__ import annotations

import json
from collections import defaultdict
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from ..decision import Decision
from ..team import Team
from .site import Site
from .world import SimulatedTeam

EFFICACY_STEP = 0.01
"""Efficacies and specializations are recorded when they have changed by this much."""

PROGRESS_STEP = 0.01
"""The progress of tasks is recorded when it has changed by this much."""

TRACE_PERIOD = 1.0
"""Paths, charges and efficacies are recorded this often, s."""


@dataclass(frozen=True)
class Rehearsal:
    """The outcome of a rehearsal; the keys of run.json as attributes.

    Attributes:
        seconds: Simulated time, s.
        robots: Names of the robots.
        tasks: Names of the tasks.
        events: Reallocations: t, task, from, to, cause, detail.
        assignments: Changes of a robot's task: t, robot, task (None: none).
        coverage: Task to the share of its active time all its needs were met; 1 if
            it was never active.
        active_s: Task to the time it was to be done, s.
        finished: Task to the time it finished, s.
        shortfalls: Times in which a task lacked something: t, until, task, text.
        min_separation_m: Smallest distance between two bodies' surfaces, m; None
            where no two robots were ever near the same height.
        closest: When that was and between whom: t, robots.
        boundary_violations: Robot-steps with the body's centre out of bounds.
        body_violations: Robot-steps with any part of the body out of bounds.
        energy_wh: Robot to the energy it used, Wh.
        efficacy: Changes of learned efficacies: t, robot, task, value.
        period_ms: Wall time of a decision: p50, p99, max, ms.
        paths: Robot to rows of t, x, y, z, heading.
        charges: Robot to rows of t, charge 0..1.
        progress: Shares done of tasks that have such a thing: t, task, value.
        activities: Changes of what a robot does: t, robot, activity.
        notices: Times a person should have known something: t, until, about, level, text.
        silent: Times a robot was not heard from: t, until, robot.
        specialization: Changes of s_im = a_im · η_im from 0: t, robot, task, value.
        nearest: Each second the smallest distance between two bodies' surfaces: rows of
            t, distance (m), robot, robot, x, y of the middle between them (m).
        decision_ms: Each second the longest wall time of a decision: rows of t, ms.
        site: See :func:`site_of`.
    """

    seconds: float
    robots: list[str]
    tasks: list[str]
    events: list[dict[str, Any]]
    assignments: list[dict[str, Any]]
    coverage: dict[str, float]
    active_s: dict[str, float]
    finished: dict[str, float]
    shortfalls: list[dict[str, Any]]
    min_separation_m: float | None
    closest: dict[str, Any] | None
    boundary_violations: int
    body_violations: int
    energy_wh: dict[str, float]
    efficacy: list[dict[str, Any]]
    period_ms: dict[str, float]
    paths: dict[str, list[list[float]]]
    charges: dict[str, list[list[float]]]
    progress: list[dict[str, Any]]
    activities: list[dict[str, Any]]
    notices: list[dict[str, Any]]
    silent: list[dict[str, Any]]
    specialization: list[dict[str, Any]]
    nearest: list[list[Any]]
    decision_ms: list[list[float]]
    site: dict[str, Any]


def site_of(team: Team) -> dict[str, Any]:
    """Give what a picture of the site needs, as JSON-able data.

    The keys: frame, boundary (None: open), keep_out (name, polygon), and by robot
    radius (m), dock, capacity_wh and reserve; by task needs and head count.
    """
    robots, tasks = team.robots.values(), team.tasks.values()
    return {
        "frame": team.frame,
        "boundary": team.boundary,
        "keep_out": [{"name": area.name, "polygon": area.polygon} for area in team.keep_out],
        "radius": {robot.name: robot.radius for robot in robots},
        "dock": {robot.name: robot.dock for robot in robots},
        "capacity_wh": {robot.name: robot.battery.capacity_wh for robot in robots},
        "reserve": {robot.name: robot.battery.reserve for robot in robots},
        "needs": {task.name: dict(task.needs) for task in tasks},
    }


def write_run(rehearsal: Rehearsal, directory: Path) -> Path:
    """Write run.json into a directory, made if needed, and give its path.

    Raises:
        OSError: The directory cannot be made or written to.
        ValueError: A number is not finite, so that no strict JSON can hold it.
    """
    directory = Path(directory)
    directory.mkdir(parents=True, exist_ok=True)
    path = directory / "run.json"
    path.write_text(json.dumps(vars(rehearsal), indent=1, allow_nan=False) + "\n", "utf-8")
    return path


class Spells:
    """Facts that hold for a while, as rows with a beginning ``t`` and an end ``until``."""

    def __init__(self) -> None:
        self.rows: list[dict[str, Any]] = []
        self._open: dict[tuple, dict[str, Any]] = {}

    def note(self, now: float, facts: Mapping[tuple, Mapping[str, Any]]) -> None:
        """Note the facts that hold at a time, each under a key that stays while it holds."""
        for key, fact in facts.items():
            if key not in self._open:
                self._open[key] = {"t": now, "until": now, **fact}
                self.rows.append(self._open[key])
        for key in list(self._open):
            self._open[key]["until"] = now
            if key not in facts:
                del self._open[key]


@dataclass
class Recorder:
    """Gathers a rehearsal; the team may change while it runs."""

    team: Team
    site: Site
    events: list[dict[str, Any]] = field(default_factory=list)
    assignments: list[dict[str, Any]] = field(default_factory=list)
    finished: dict[str, float] = field(default_factory=dict)
    closest: dict[str, Any] | None = None
    separation: float = np.inf
    violations: np.ndarray = field(default_factory=lambda: np.zeros(2, dtype=int))
    shortfalls: Spells = field(default_factory=Spells)
    notices: Spells = field(default_factory=Spells)
    silent: Spells = field(default_factory=Spells)

    def __post_init__(self) -> None:
        self._task_of: dict[str, str | None] = {}
        self._active: dict[str, float] = dict.fromkeys(self.team.tasks, 0.0)
        self._covered: dict[str, float] = dict.fromkeys(self.team.tasks, 0.0)
        self._efficacy: dict[tuple[str, str], float] = defaultdict(lambda: 1.0)
        self._efficacies: list[dict[str, Any]] = []
        self._specialization: dict[tuple[str, str], float] = defaultdict(float)
        self._specializations: list[dict[str, Any]] = []
        self._nearest: list[list[Any]] = []
        self._decision_ms: list[list[float]] = []
        self._paths: dict[str, list[list[float]]] = {name: [] for name in self.team.robots}
        self._charges: dict[str, list[list[float]]] = {name: [] for name in self.team.robots}
        self._activity_of: dict[str, str] = {}
        self._activities: list[dict[str, Any]] = []
        self._progress: list[dict[str, Any]] = []
        self._done: dict[str, float] = {}
        self._trace_due = 0.0
        self._wall_ms: list[float] = []

    def decided(self, decision: Decision, period: float, wall_seconds: float) -> None:
        """Record a decision that holds for a period and took so long to make."""
        now = round(decision.time, 6)
        self._wall_ms.append(1000 * wall_seconds)
        if not self._decision_ms or now >= self._decision_ms[-1][0] + TRACE_PERIOD - 1e-9:
            self._decision_ms.append([now, 0.0])
        worst = max(self._decision_ms[-1][1], 1000 * wall_seconds)
        self._decision_ms[-1][1] = round(worst, 3)
        for change in decision.reallocations:
            self.events.append({
                "t": now,
                "task": change.task,
                "from": list(change.before),
                "to": list(change.after),
                "cause": change.cause.value,
                "detail": change.detail,
            })
        for index, robot in enumerate(decision.robots):
            task = decision.task_of(index)
            if robot not in self._task_of or self._task_of[robot] != task:
                self._task_of[robot] = task
                self.assignments.append({"t": now, "robot": robot, "task": task})
        for robot, activity in zip(decision.robots, decision.activity, strict=True):
            if self._activity_of.get(robot) != activity:
                self._activity_of[robot] = activity
                self._activities.append({"t": now, "robot": robot, "activity": activity})
        for task, done in decision.progress.items():
            if abs(done - self._done.get(task, 0.0)) >= PROGRESS_STEP or task not in self._done:
                self._done[task] = done
                self._progress.append({"t": now, "task": task, "value": round(done, 4)})
        for task in decision.finished:
            self.finished.setdefault(task, now)
        lacking = {shortfall.task for shortfall in decision.shortfalls}
        for name, task in self.team.tasks.items():
            waiting = not set(task.after) <= decision.finished
            if task.active and not waiting and name not in decision.finished:
                self._active[name] += period
                self._covered[name] += period * (name not in lacking)
        self.shortfalls.note(now, {
            (s.task, str(s)): {"task": s.task, "text": str(s)} for s in decision.shortfalls
        })
        self.notices.note(now, {
            (n.about, n.level): {"about": n.about, "level": n.level.name.lower(), "text": n.text}
            for n in decision.notices
        })
        self.silent.note(now, {
            (robot,): {"robot": robot}
            for robot, heard in zip(decision.robots, decision.heard, strict=True) if not heard
        })
        if now >= self._trace_due - 1e-9:
            self._note(decision, decision.efficacy, self._efficacy, self._efficacies)
            self._note(
                decision, decision.specialization, self._specialization, self._specializations
            )

    def moved(self, world: SimulatedTeam) -> None:
        """Record where the robots are after a step of the simulation."""
        nearest = self.site.separation(world.true_poses)
        if nearest is not None:
            gap, pair = nearest
            names = sorted(world.robots[i] for i in pair)
            now = round(world.now, 6)
            if gap < self.separation:
                self.separation, self.closest = gap, {"t": now, "robots": names}
            middle = np.round(world.true_poses[list(pair), :2].mean(axis=0), 3).tolist()
            row = [now, round(gap, 4), *names, *middle]
            if not self._nearest or now // TRACE_PERIOD > self._nearest[-1][0] // TRACE_PERIOD:
                self._nearest.append(row)
            elif gap < self._nearest[-1][1]:
                self._nearest[-1] = row
        self.violations += [np.count_nonzero(out) for out in self.site.outside(world.true_poses)]

    def trace(self, world: SimulatedTeam) -> None:
        """Record paths and charges, once every :data:`TRACE_PERIOD`."""
        if world.now < self._trace_due - 1e-9:
            return
        self._trace_due += TRACE_PERIOD
        now = round(world.now, 6)
        for robot, pose, charge in zip(
            world.robots, world.true_poses, world.charge, strict=True
        ):
            self._paths[robot].append([now, *(round(float(value), 4) for value in pose)])
            self._charges[robot].append([now, round(float(charge), 5)])

    def result(self, world: SimulatedTeam) -> Rehearsal:
        """Give what was recorded."""
        p50, p99 = np.percentile(self._wall_ms, [50, 99]) if self._wall_ms else (0.0, 0.0)
        return Rehearsal(
            seconds=round(world.now, 6),
            robots=list(self.team.robots),
            tasks=list(self.team.tasks),
            events=self.events,
            assignments=self.assignments,
            coverage={
                task: round(self._covered[task] / active, 6) if active else 1.0
                for task, active in self._active.items()
            },
            active_s={task: round(active, 6) for task, active in self._active.items()},
            finished=self.finished,
            shortfalls=self.shortfalls.rows,
            min_separation_m=self.separation if np.isfinite(self.separation) else None,
            closest=self.closest,
            boundary_violations=int(self.violations[0]),
            body_violations=int(self.violations[1]),
            energy_wh={
                robot: round(float(used), 6)
                for robot, used in zip(world.robots, world.energy, strict=True)
            },
            efficacy=self._efficacies,
            period_ms={
                "p50": float(p50),
                "p99": float(p99),
                "max": float(max(self._wall_ms, default=0.0)),
            },
            paths=self._paths,
            charges=self._charges,
            progress=self._progress,
            activities=self._activities,
            notices=self.notices.rows,
            silent=self.silent.rows,
            specialization=self._specializations,
            nearest=self._nearest,
            decision_ms=self._decision_ms,
            site=site_of(self.team),
        )

    @staticmethod
    def _note(
        decision: Decision,
        values: np.ndarray,
        known: dict[tuple[str, str], float],
        rows: list[dict[str, Any]],
    ) -> None:
        """Add a row for each value of a robot for a task, (N, M), that is not as known."""
        now = round(decision.time, 6)
        for i, robot in enumerate(decision.robots):
            for m, task in enumerate(decision.tasks):
                value = round(float(values[i, m]), 4)
                if abs(value - known[robot, task]) >= EFFICACY_STEP:
                    known[robot, task] = value
                    rows.append({"t": now, "robot": robot, "task": task, "value": value})
