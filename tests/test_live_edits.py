"""Any sequence of edits, orders and mishaps: never an exception, every decision in order."""

from __future__ import annotations

import numpy as np
from builders import ERROR, OK, WARN, Crew
from hypothesis import HealthCheck, settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, initialize, invariant, rule

from allocator_node.files.document import FileError
from allocator_node.observation import MovedGoal
from allocator_node.settings import Settings
from allocator_node.team_file import merge_tasks, parse_team

TEAM = """
frame: site
boundary: [[-5, -5], [45, -5], [45, 25], [-5, 25]]
keep_out: [{name: shed, polygon: [[18, 6], [22, 6], [22, 12], [18, 12]]}]
capabilities:
  scan: [{with: [camera, gimbal]}, {with: [camera], grade: 0.6}]
robots:
  rover_1: {drive: {model: differential, max_speed: 1}, features: [camera, gimbal], start: [0, 0, 0]}
  rover_2: {drive: {model: holonomic, max_speed: 1}, features: [camera], start: [0, 5, 0]}
  rover_3: {drive: {model: differential, max_speed: 1.5}, start: [0, 10, 0], dock: [0, 10]}
  drone_1: {drive: {model: aerial, max_speed: 3, height: [4, 8]}, features: [camera], start: [0, 15, 0]}
tasks:
  gate: {kind: watch, at: [30, 10], needs: {scan: 1.0}, priority: 3}
  rows: {kind: patrol, waypoints: [[10, 0], [30, 0]], robots: {min: 1, max: 2}}
"""  # noqa: E501

NAMES = st.sampled_from(["gate", "rows", "one", "two", "three"])
ROBOTS = st.sampled_from(["rover_1", "rover_2", "rover_3", "drone_1"])
PLACES = st.tuples(st.floats(-9, 49).map(lambda x: round(x, 1)), st.floats(-9, 29).map(round))

KINDS = st.one_of(
    PLACES.map(lambda at: f"kind: watch, at: [{at[0]}, {at[1]}]"),
    PLACES.map(lambda at: f"kind: visit, at: [{at[0]}, {at[1]}], dwell: 1"),
    PLACES.map(lambda at: f"kind: patrol, waypoints: [[1, 1], [{at[0]}, {at[1]}]], laps: 1"),
    PLACES.map(lambda at: f"kind: encircle, around: [{at[0]}, {at[1]}], radius: 4"),
    NAMES.map(lambda task: f"kind: follow, target: {{task: {task}}}, offset: [-2, 0]"),
    ROBOTS.map(lambda robot: f"kind: encircle, around: {{robot: {robot}}}, radius: 3"),
    st.just("kind: cover, area: [[2, 14], [16, 14], [16, 22], [2, 22]]"),
    st.just("kind: sweep, area: [[2, 14], [9, 14], [9, 20], [2, 20]], lane_width: 2"),
    st.just("kind: formation, at: [30, 18], heading: 0, offsets: [[0, 0], [0, 3]]"),
)
KEYS = st.one_of(
    st.integers(-1, 5).map(lambda q: f"priority: {q}"),
    st.tuples(st.integers(0, 3), st.integers(0, 4)).map(
        lambda heads: f"robots: {{min: {heads[0]}, max: {heads[1]}}}"
    ),
    st.sampled_from(["active: false", "active: true", "needs: {scan: 1.6}", "each: [scan]",
                     "needs: {flight: 1}", "each: []", "urgency: 80", "urgency: -1"]),
    NAMES.map(lambda task: f"after: [{task}]"),
)  # fmt: skip
EDITS = st.one_of(
    st.tuples(NAMES, KINDS, KEYS).map(lambda e: f"{e[0]}: {{{e[1]}, {e[2]}}}"),
    st.tuples(NAMES, KINDS).map(lambda e: f"{e[0]}: {{{e[1]}}}"),
    st.tuples(NAMES, KEYS).map(lambda e: f"{e[0]}: {{{e[1]}}}"),
    NAMES.map(lambda name: f"{name}: null"),
    st.sampled_from(["", "[", "rows: 3", "{}"]),
)
PAIRS = st.frozensets(st.tuples(ROBOTS, NAMES), max_size=3)


class Live(RuleBasedStateMachine):
    """An operator who cannot leave it alone, and robots that have a bad day."""

    @initialize(budget=st.sampled_from([np.inf, -1.0]))
    def begin(self, budget: float) -> None:
        self.crew = Crew(parse_team(TEAM))
        self.crew.allocator.assigner.budget = budget  # -1: every search beside the loop
        self.crew.charges = np.full(4, 0.9)
        self.decision = self.crew.step()

    @rule(text=EDITS)
    def edit(self, text: str) -> None:
        before = self.crew.allocator.team
        try:
            team = merge_tasks(before, text)
        except FileError as error:
            assert error.problems
            assert self.crew.allocator.team is before
            return
        self.crew.allocator.edit(team, self.crew.now)
        self.decision = self.crew.step()
        assert self.decision.tasks == tuple(team.tasks)

    @rule(pins=PAIRS, bans=PAIRS)
    def pin_and_ban(self, pins: frozenset, bans: frozenset) -> None:
        self.crew.order(pins=pins - bans, bans=bans)

    @rule(hold=st.booleans())
    def hold(self, hold: bool) -> None:
        self.crew.order(hold=hold)

    @rule(kappa=st.floats(0, 1), s_min=st.floats(0.05, 1), swap=st.floats(0, 50))
    def weigh(self, kappa: float, s_min: float, swap: float) -> None:
        self.crew.allocator.settings = Settings(kappa=kappa, s_min=s_min, swap_distance=swap)

    @rule(robot=ROBOTS, level=st.sampled_from([OK, WARN, ERROR]))
    def break_camera(self, robot: str, level: int) -> None:
        self.crew.says(f"{robot}: camera", level)

    @rule(robot=ROBOTS)
    def silence(self, robot: str) -> None:
        self.crew.silent ^= {robot}

    @rule(robot=st.integers(0, 3), by=st.floats(-40, 40))
    def carry_away(self, robot: int, by: float) -> None:
        self.crew.poses[robot, 0] = np.clip(self.crew.poses[robot, 0] + by, -4, 44)

    @rule(robot=st.integers(0, 3), charge=st.sampled_from([0.0, 0.05, 0.25, 1.0, np.nan]))
    def drain(self, robot: int, charge: float) -> None:
        self.crew.charges[robot] = charge

    @rule(robot=st.integers(0, 3), grip=st.sampled_from([0.0, 0.3, 1.0]))
    def slip(self, robot: int, grip: float) -> None:
        self.crew.grip[robot] = grip

    @rule(task=NAMES, at=PLACES)
    def move_goal(self, task: str, at: tuple) -> None:
        self.crew.goals.append(MovedGoal(task, (*at, 0.0), None))

    @rule()
    def restart(self) -> None:
        memory = self.crew.allocator.memory()
        former = self.crew.allocator
        again = Crew(former.team)
        again.allocator.settings, again.allocator.orders = former.settings, former.orders
        again.allocator.recall(memory)
        self.crew.allocator = again.allocator

    @rule(seconds=st.sampled_from([0.1, 0.5, 3.0]))
    def go_on(self, seconds: float) -> None:
        self.decision = self.crew.drive(seconds)

    @invariant()
    def decisions_are_in_order(self) -> None:
        if not hasattr(self, "crew"):
            return
        decision, crew = self.crew.step(), self.crew
        model = crew.allocator._model
        assert np.isfinite(decision.commands).all()
        assert (np.abs(decision.commands) <= model.fleet.limits + 1e-6).all()
        assert not decision.commands[~decision.heard].any()
        if crew.allocator.orders.hold:
            assert not decision.commands.any()
        busy = np.flatnonzero(decision.assignment >= 0)
        assert decision.able[busy, decision.assignment[busy]].all()
        heads = np.bincount(decision.assignment[busy], minlength=len(model.most))
        # Pins are obeyed beyond the head count.
        pinned = model.mask(crew.allocator.orders.pins).sum(axis=0)
        assert (heads <= np.maximum(model.most, pinned)).all()
        for robot, task in crew.allocator.orders.bans:
            assert decision.task_of(decision.robots.index(robot)) != task
        assert ((decision.efficacy >= 0) & (decision.efficacy <= 1)).all()
        assert ((decision.charge >= 0) & (decision.charge <= 1)).all()


Live.TestCase.settings = settings(
    max_examples=12, stateful_step_count=20, deadline=None,
    suppress_health_check=[HealthCheck.too_slow],
)  # fmt: skip
TestLive = Live.TestCase
