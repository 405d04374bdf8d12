"""The same allocator against the simulated team, without ROS, as fast as it goes."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from time import perf_counter

import numpy as np

from ..allocator import Allocator
from ..decision import Decision, goal_pose
from ..program import Assigner
from ..settings import Settings
from ..team import Team
from .faults import with_faults
from .navigation import steer
from .record import Recorder, Rehearsal
from .site import Site
from .world import SimulatedTeam, moved_goal
from .world_file import TaskEvent, World

SUBSTEP = 0.05
"""The simulation moves in steps of this length at most, s."""


def rehearse(
    team: Team,
    world: World | None,
    seconds: float,
    seed: int = 0,
    settings: Settings | None = None,
    period: float = 0.1,
    on_progress: Callable[[float], None] | None = None,
    assigner: Assigner | None = None,
) -> Rehearsal:
    """Rehearse a team's work.

    Args:
        team: The team.
        world: Noise, ground, events and faults; None: good ground and nothing happens.
        seconds: How long, s of simulated time.
        seed: Seed of the pose noise and of the faults.
        settings: Weights and times; default as in :class:`Settings`.
        period: Time between two decisions, s.
        on_progress: Called with the simulated time, s, after every period.
        assigner: What finds the assignments; None: the optimum in every period.

    Returns:
        What happened.
    """
    settings = settings or Settings()
    allocator = Allocator(team, settings=settings, period=period)
    if assigner is not None:
        allocator.assigner = assigner
    world = with_faults(world or World(), team, seconds, seed)
    simulated = SimulatedTeam(team, world, seed)
    recorder = Recorder(team, Site(team, settings.height_clearance))
    substeps = math.ceil(period / SUBSTEP - 1e-9)
    events = simulated.task_events
    for step in range(round(seconds / period)):
        now = step * period
        if events:
            recorder.team = edited(recorder.team, events)
            if any(event.active is not None for event in events):
                allocator.edit(recorder.team, now)
        observation = simulated.observation()
        began = perf_counter()
        decision = allocator.step(observation, now)
        recorder.decided(decision, period, perf_counter() - began)
        recorder.trace(simulated)
        events = ()
        for _ in range(substeps):
            simulated.step(driven(team, decision, simulated.true_poses), period / substeps)
            recorder.moved(simulated)
            events += simulated.task_events
        if on_progress is not None:
            on_progress(simulated.now)
    return recorder.result(simulated)


def driven(team: Team, decision: Decision, poses: np.ndarray) -> np.ndarray:
    """Give what robots at poses (N, 4) do: as commanded, or as their own navigation goes."""
    commands = decision.commands.copy()
    for i, robot in enumerate(team.robots.values()):
        if robot.navigates and decision.heard[i]:
            goal = goal_pose(poses[i], decision.goals[i], decision.facing[i])
            commands[i] = steer(robot.drive, poses[i], goal)
    return commands


def edited(team: Team, events: tuple[TaskEvent, ...]) -> Team:
    """Give the team with its tasks as the events leave them."""
    tasks = dict(team.tasks)
    for event in events:
        task = tasks[event.task]
        if event.active is not None:
            task = replace(task, active=event.active)
        if event.move is not None:
            task = task.moved(moved_goal(team, event).at, None)
        tasks[event.task] = task
    return team.with_tasks(tasks)
