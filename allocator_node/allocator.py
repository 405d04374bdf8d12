"""The allocator: one observation in, one decision out, at a fixed rate."""

from __future__ import annotations

import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import replace
from typing import Any

import numpy as np

from .belief import EfficacyBelief, EnergyBelief, FeatureBelief, PoseBelief, TargetBelief
from .belief.poses import Places
from .charging import Charging, Crew, Errands
from .decision import Decision
from .memory import Memory, remember
from .model import Model
from .notices import notices, out_of_reach, shortfalls, targets_unheard
from .observation import MovedGoal, Observation, Orders
from .pilot import Motion, Pilot
from .program import Assigner, Assignment, Problem, price
from .program.formulate import Known, Means, formulate
from .program.guidance import Targets
from .reasons import Reasons, Situation
from .settings import Settings
from .tasks import Goals
from .team import Team
from .view import View
from .work import Stage, Work, fingerprint

LONGEST_STEP = 1.0
"""Longest time one step counts for, if that is not less than 2.5 periods; beyond it the loop
was paused, s."""

RESTED = 20.0
"""Time constant with which a robot that was swapped may be swapped again as before, s."""

MOST_RESTLESS = 64.0
"""Each swap doubles what the next one must save, up to so many times: nobody is sent to
and fro for long where two choices take turns in looking cheaper."""

INSISTENCE = 1.4
"""How much more a robot insists on its way with each priority class of its task."""


class Allocator:
    """Decides who does what and how everybody moves; knows nothing of ROS.

    Attributes:
        orders: What the operator asks for; assign another to change it.
        assigner: What finds the assignment; its ``budget`` may be changed while running.
    """

    def __init__(
        self,
        team: Team,
        settings: Settings | None = None,
        period: float = 0.1,
        budget: float = np.inf,
    ) -> None:
        """Begin with nobody heard and nothing assigned.

        Args:
            team: The team.
            settings: Weights and times.
            period: Time between two steps, s; used for the first one.
            budget: Time the search for an assignment may take within a step, s;
                longer ones go on beside the steps. inf: always within, which makes
                the decisions independent of the machine's speed.
        """
        self.period = period
        self.orders = Orders()
        self._settings = settings or Settings()
        self._now: float | None = None
        count = len(team.robots)
        self._topics = TargetBelief()
        self.assigner = Assigner(budget)
        self._since = np.full(count, np.nan)
        self._restless = np.ones(count)
        self._work = Work(team)
        self._moved: dict[str, tuple[MovedGoal, str]] = {}
        self._model = Model(team)
        self._poses = PoseBelief(self._model.fleet.fastest)
        self._assignment = np.full(count, -1)
        self._energy = EnergyBelief(self._model)
        self._features = FeatureBelief(team, self._model.features, self._model.declared)
        self._efficacy = EfficacyBelief(count, len(team.tasks))
        self._charging = Charging(self._model)
        self._reasons = Reasons(self._model, self._say_feature)
        self._pilot = Pilot(team, self._model, self._settings)

    @property
    def team(self) -> Team:
        """The team with its present task table; :meth:`edit` changes it."""
        return self._work.team

    @property
    def settings(self) -> Settings:
        """Weights and times; assign another to change them while running."""
        return self._settings

    @settings.setter
    def settings(self, settings: Settings) -> None:
        former, self._settings = self._settings, settings
        if settings != former:
            self._pilot.survey(self.team, self._model, settings)

    # -- one period ---------------------------------------------------------------

    def step(self, observation: Observation, now: float) -> Decision:
        """Take in what was heard and decide.

        Args:
            observation: What was heard since the last step.
            now: Time, s, on the clock of the observation's times.

        Returns:
            The decision; its commands are zero for robots that are not heard or whose pose jumped.
        """
        seconds: dict[str, float] = {}
        with _timed(seconds, "belief"):
            view = self._believe(observation, now)
        with _timed(seconds, "pricing"):
            stage = self._stage(view)
            goals = [self._work.advance(m, stage) for m in range(len(self._model.tasks))]
            problem, means = self._formulate(view, goals)
            prices = price(problem)
        with _timed(seconds, "assignment"):
            found = self.assigner.assign(problem, prices)
        situation = self._situation(view, means, prices)
        before, self._assignment = self._assignment, found.task
        reallocations = self._reasons.explain(
            situation, before, found.task, problem.swap_cost, now, not self.assigner.searching
        )
        self._take_up(before, view, goals, problem)
        errands = self._charge(view, means.enough)
        with _timed(seconds, "control"):
            targets = self._targets(goals, errands, view.places.steady)
            motion = self._pilot.drive(
                view, self._model, targets, self._insistence(), self.orders.hold, self._settings
            )
        return self._decision(
            view, found, targets, means, problem, reallocations, motion, seconds, errands
        )

    def _believe(self, observation: Observation, now: float) -> View:
        settings = self._settings
        dt = self.period if self._now is None else now - self._now
        if not 0 < dt <= max(LONGEST_STEP, 2.5 * self.period):
            # The clock jumped or the loop was paused: nothing is learned from the gap.
            dt = self.period
            self._pilot.forget()
            self._features.forget_times(now)
        if self._now is not None and now < self._now:
            self._poses.forget_times()
        self._now = now
        for moved in observation.goals:
            self._move(moved)
        model = self._model
        places = self._poses.update(observation, now, settings.pose_timeout)
        health = self._features.update(observation.health, now, settings)
        poses = np.where(places.known[:, None], places.poses, 0.0)
        points = model.fleet.control_points(poses)
        self._energy.update(
            observation, model, self._pilot.commands, points, now, dt, settings.battery_timeout
        )
        self._learn(observation, places, points, now, dt)
        capability = model.capability(health)
        return View(
            now, dt, places, poses, points, model.fleet.jacobians(poses), health, capability,
            model.suitability(capability),
            self._topics.update(observation.targets, now, settings.pose_timeout),
        )  # fmt: skip

    def _learn(
        self, observation: Observation, places: Places, points: np.ndarray, now: float, dt: float
    ) -> None:
        """Compare the motion since the last step with what its commands implied."""
        settings, model = self._settings, self._model
        for (robot, task), quality in observation.quality.items():
            if robot in model.robot_of and task in model.task_of:
                i, m = model.robot_of[robot], model.task_of[task]
                self._efficacy.outside(i, m, quality, settings)
        progress = self._pilot.progress(points, now, dt)
        if progress is None:
            return
        counted = progress.step.counted & places.moved & self.orders.driving
        step = replace(progress.step, counted=counted)
        self._efficacy.update(step, self._assignment, progress.distance, dt, settings)

    def _stage(self, view: View) -> Stage:
        return Stage(self._model, view, self._assignment, self._pilot.safety)

    def _formulate(self, view: View, goals: list[Goals]) -> tuple[Problem, Means]:
        known = Known(
            poses=view.poses,
            points=view.points,
            jacobians=view.jacobians,
            # Priced as if driving forward: nobody loses a task for backing up a little.
            gear=self._model.fleet.steered.astype(int),
            heard=view.places.heard,
            capability=view.capability,
            suitability=view.suitability,
            efficacy=self._efficacy.eta,
            trusted=self._trusted(view),
            spendable=self._energy.spendable(self._model),
            dearness=self._energy.dearness(self._model),
            restless=self._restless,
            admitted=self._admitted(),
            active=self._work.active(),
            charging=self._charging.on,
            pinned=self._model.mask(self.orders.pins),
            banned=self._model.mask(self.orders.bans),
            previous=self._assignment,
        )
        return formulate(self._model, self._settings, known, goals, self._pilot.ways)

    def _admitted(self) -> np.ndarray:
        """Tell where a robot can come near enough to the task's places, shape (N, M)."""
        rows = [self._pilot.ways.admitted(task.stops) for task in self.team.tasks.values()]
        return np.array(rows, dtype=bool).reshape(self._model.itself.T.shape).T

    def _trusted(self, view: View) -> np.ndarray:
        """Tell where the specialization suffices, or would but for the features, (N, M)."""
        s = np.where(view.suitability > 0, view.suitability, 1.0) * self._efficacy.eta
        return (s >= self._settings.s_min) & ~self._efficacy.barred

    def _situation(self, view: View, means: Means, prices: np.ndarray) -> Situation:
        return Situation(
            known=view.places.known,
            heard=view.places.heard,
            health=view.health,
            suitability=view.suitability,
            efficacy=self._efficacy.eta.copy(),
            trusted=self._trusted(view),
            enough=means.enough & ~self._charging.on[:, None],
            way=means.way,
            dearness=self._energy.dearness(self._model),
            prices=prices,
            pinned=self._model.mask(self.orders.pins),
            banned=self._model.mask(self.orders.bans),
            active=self._work.active(),
            tasks=tuple(self.team.tasks.values()),
            finished=self._work.finished(),
        )

    def _take_up(
        self, before: np.ndarray, view: View, goals: list[Goals], problem: Problem
    ) -> None:
        """Hand the changed robots their new tasks, and these their new groups."""
        self._restless = 1.0 + (self._restless - 1.0) * np.exp(-view.dt / RESTED)
        swapped = problem.settled[before[problem.settled] != self._assignment[problem.settled]]
        self._restless[swapped] = np.minimum(2.0 * self._restless[swapped], MOST_RESTLESS)
        # What an earlier run assigned counts from now on.
        self._since[(self._assignment >= 0) & np.isnan(self._since)] = view.now
        changed = np.flatnonzero(before != self._assignment)
        if not len(changed):
            return
        self._since[changed] = view.now
        self._pilot.restart(changed)
        self._efficacy.reassigned(changed, before[changed], view.now, self._settings)
        groups = (set(before[changed]) | set(self._assignment[changed])) - {-1}
        stage = self._stage(view)
        for m in groups | self._work.keeping_to(groups):
            goals[m] = self._work.advance(int(m), stage)

    def _charge(self, view: View, enough: np.ndarray) -> Errands:
        """Send robots without a task to their docks where their energy is low."""
        pinned = self._model.mask(self.orders.pins)
        wanted = (view.suitability > 0) & self._work.active()
        crew = Crew(
            now=view.now,
            points=view.points,
            known=view.places.known,
            heard=view.places.heard,
            charge=self._energy.charge,
            spare=self._assignment < 0,
            exhausted=wanted.any(axis=1) & ~(wanted & enough).any(axis=1),
            above=self._energy.charge - self._model.reserve,
            called=(pinned & wanted & enough).any(axis=1),
            reach=self._pilot.safety.reach,
        )
        return self._charging.update(crew, self._settings, self._pilot.safety.clear)

    def _targets(self, goals: list[Goals], errands: Errands, steady: np.ndarray) -> Targets:
        """Give the goal of each robot's own task or errand; those not steady have none now."""
        count = len(self._assignment)
        points, velocities = np.full((count, 3), np.nan), np.zeros((count, 3))
        facing, pace, tolerance = np.full(count, np.nan), np.ones(count), np.zeros(count)
        for m in np.unique(self._assignment[self._assignment >= 0]):
            group, goal = np.flatnonzero(self._assignment == m), goals[m]
            for part, value in (
                (points, goal.points),
                (velocities, goal.velocities),
                (facing, goal.facing),
                (pace, goal.pace),
                (tolerance, goal.tolerance),
            ):
                part[group] = value[group] if np.ndim(value) == part.ndim else value
        sent = (self._assignment < 0) & np.isfinite(errands.points[:, 0])
        points[sent], tolerance[sent] = errands.points[sent], errands.tolerance[sent]
        busy = ((self._assignment >= 0) | sent) & steady
        return Targets(busy, points, velocities, facing, pace, tolerance)

    def _insistence(self) -> np.ndarray:
        """Give how much each robot insists on its way: more with each priority class, (N,)."""
        busy = self._assignment >= 0
        priority = np.zeros(len(busy), dtype=int)
        priority[busy] = self._model.priority[self._assignment[busy]]
        return INSISTENCE ** (priority - 2)

    # -- what comes out -----------------------------------------------------------

    def _decision(
        self,
        view: View,
        found: Assignment,
        targets: Targets,
        means: Means,
        problem: Problem,
        reallocations: tuple,
        motion: Motion,
        seconds: Mapping[str, float],
        errands: Errands,
    ) -> Decision:
        model = self._model
        return Decision(
            time=view.now,
            robots=model.robots,
            tasks=model.tasks,
            assignment=found.task.copy(),
            since=self._since.copy(),
            commands=motion.control.commands,
            goals=np.where(view.places.steady[:, None], targets.points, np.nan),
            facing=targets.facing,
            navigates=model.navigates,
            poses=view.places.poses,
            heard=view.places.heard,
            steady=view.places.steady,
            able=problem.eligible,
            suitability=view.suitability,
            efficacy=self._efficacy.eta.copy(),
            charge=self._energy.charge.copy(),
            charge_estimated=self._energy.estimated.copy(),
            finished=self._work.finished(),
            progress=self._work.progress(),
            activity=self._activity(view, errands),
            reallocations=reallocations,
            shortfalls=shortfalls(model, found),
            notices=tuple(
                notices(
                    model, self._settings, view.places, means.enough, self._charging.on, motion,
                    self._remarks(view, means), self._features.remembered(),
                )
            ),
            seconds=seconds,
            gap=found.gap,
        )

    def _remarks(self, view: View, means: Means) -> dict[str, str]:
        """Give what is to be said of tasks: by themselves, of their targets, of the way."""
        active = self._work.active()
        return (
            self._work.remarks()
            | targets_unheard(self.team, active, self._topics, view.now)
            | out_of_reach(self._model, active, view, means)
        )

    def _activity(self, view: View, errands: Errands) -> tuple[str, ...]:
        """Say in a word what each robot does."""
        return tuple(
            "silent" if not heard
            else "held" if self.orders.hold or not (steady or navigates)
            else "working" if task >= 0
            else errand or "idle"
            for heard, steady, navigates, task, errand in zip(
                view.places.heard,
                view.places.steady,
                self._model.navigates,
                self._assignment,
                errands.activity,
                strict=True,
            )
        )  # fmt: skip

    def _say_feature(self, robot: int, feature: int) -> str:
        return self._features.says(robot, feature, self._now or 0.0, self._settings)

    def unheard_health(self) -> list[tuple[str, str, str]]:
        """Give (robot, feature, status name) of features no diagnostic ever spoke of."""
        return self._features.unheard()

    # -- live changes -------------------------------------------------------------

    def edit(self, team: Team, now: float) -> None:
        """Go on with another task table of the same robots.

        What was learned stays with a task's name. What was done stays too, unless the
        task's place or kind of work changed: then its work begins anew.
        """
        same = {name for name, task in team.tasks.items() if self.team.tasks.get(name) == task}
        self._moved = {name: move for name, move in self._moved.items() if name in same}
        model = Model(team)
        former = self._model.task_of
        kept = np.array([former.get(name, -1) for name in model.tasks], dtype=int)
        self._work.edit(team)
        self._efficacy.retable(kept)
        self._reasons.retable(model, kept)
        position = {old: m for m, old in enumerate(kept) if old >= 0}
        self._assignment = np.array(
            [position.get(int(m), -1) for m in self._assignment], dtype=int
        )
        if model.tasks != self._model.tasks:
            self.assigner.forget()
        self._model = model

    def _move(self, moved: MovedGoal) -> None:
        task = self.team.tasks.get(moved.task)
        if task is None or (there := task.moved(moved.at, moved.heading)) == task:
            return
        _, origin = self._moved.get(moved.task, (moved, fingerprint(task)))
        tasks = dict(self.team.tasks) | {moved.task: there}
        self.edit(self.team.with_tasks(tasks), self._now or 0.0)
        self._moved[moved.task] = moved, origin

    def _move_again(self, moved: MovedGoal, origin: str) -> None:
        """Move a task as in an earlier run, unless it is defined in another way now."""
        task = self.team.tasks.get(moved.task)
        if task is None:
            return
        if task.moved(moved.at, moved.heading) == task:
            self._moved[moved.task] = moved, origin
        elif origin == fingerprint(task):
            self._move(moved)

    def close(self) -> None:
        """End what runs beside the steps."""
        self.assigner.close()

    def forget(self) -> None:
        """Set every efficacy back to 1."""
        self._efficacy.forget()

    def memory(self) -> dict[str, Any]:
        """Give what should survive a restart, as plain JSON-able data."""
        return remember(
            self._model,
            self._efficacy,
            self._work,
            self._assignment,
            self._features.troubles(self._now or 0.0, self._settings),
            self._energy.charge,
            self._charging.on,
            self._poses.poses,
            self.orders.hold,
            self._moved,
        )

    def recall(self, data: Mapping[str, Any]) -> None:
        """Take up what an earlier run left; names that no longer exist are passed over.

        So are the ends and moves of tasks whose definition is another one now. Whoever
        was told to stand still stands.

        Raises:
            ValueError: The data is not of the form :meth:`memory` gives.
        """
        memory = Memory.read(data)
        robot_of, task_of = self._model.robot_of, self._model.task_of
        for robot, task, value, failures, barred in memory.learned:
            if robot in robot_of and task in task_of:
                self._efficacy.recall(robot_of[robot], task_of[task], value, failures, barred)
        for moved, origin in memory.moved:
            self._move_again(moved, origin)
        for name, saved in memory.work.items():
            self._work.restore(name, saved)
        for name, work in memory.finished.items():
            if name in task_of and work in ("", self._work.fingerprint(name)):
                self._work.end(name)
        self.orders = replace(self.orders, hold=self.orders.hold or memory.hold)
        for robot, task in memory.assignment.items():
            if robot in robot_of and task in task_of:
                self._assignment[robot_of[robot]] = task_of[task]
        for name, (level, text) in memory.troubles.items():
            self._features.recall(name, level, text)
        for robot, charge in memory.charges.items():
            if robot in robot_of:
                self._energy.recall(robot_of[robot], charge)
        for robot, pose in memory.places.items():
            if robot in robot_of:
                self._poses.recall(robot_of[robot], pose)
        for robot in memory.charging:
            if robot in robot_of:
                self._charging.on[robot_of[robot]] = True


@contextmanager
def _timed(seconds: dict[str, float], part: str) -> Iterator[None]:
    start = time.perf_counter()
    yield
    seconds[part] = time.perf_counter() - start
