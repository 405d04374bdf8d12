"""What a person should know about a decision: shortfalls, silent robots, dangers."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping

import numpy as np

from .belief import TargetBelief
from .belief.poses import Places
from .decision import Level, Notice, Shortfall
from .model import Model
from .pilot import Motion
from .program import Assignment
from .program.formulate import Means
from .settings import Settings
from .team import Target, Team
from .view import View

NOISE = 4.0
"""How far into a margin a robot must be to be named, in standard deviations of the poses,
at most half the margin."""

STUCK = 20.0
"""Time without any headway after which a robot is named, s."""


def shortfalls(model: Model, found: Assignment) -> tuple[Shortfall, ...]:
    """Name what active tasks lack: robots first, then amounts of capabilities."""
    robots = [
        Shortfall(model.tasks[m], float(found.missing_robots[m]))
        for m in np.flatnonzero(found.missing_robots)
    ]
    needs = [
        Shortfall(model.tasks[m], float(found.missing_needs[m, k]), model.capabilities[k])
        for m, k in np.argwhere(found.missing_needs > 0)
    ]
    return tuple(robots + needs)


def notices(
    model: Model,
    settings: Settings,
    places: Places,
    enough: np.ndarray,
    charging: np.ndarray,
    motion: Motion,
    remarks: Mapping[str, str],
    remembered: Iterable[tuple[int, int, str]],
) -> Iterator[Notice]:
    """Name robots that are silent, astray, low, stopped, stuck or too near to something.

    And tasks of which there is something to say.

    Args:
        model: The team.
        settings: Weights and times.
        places: Where the robots are.
        enough: Where the energy suffices, shape (N, M).
        charging: Robots for which that is being seen to, shape (N,).
        motion: The commands, and what the rows did to them.
        remarks: Task to what is to be said of it.
        remembered: Robot, feature and status name of failures an earlier run heard of.
    """
    for task, text in remarks.items():
        yield Notice(task, Level.WARN, text)
    names = model.robots
    for i, f, status in remembered:
        text = (
            f"{model.features[f]} counts as failed: {status!r} said so before the restart and "
            "has said nothing since"
        )
        yield Notice(names[i], Level.WARN, text)
    for i in np.flatnonzero(~places.heard):
        timed = np.isfinite(places.age[i])
        text = f"not heard for {places.age[i]:.1f} s" if timed else "never heard"
        yield Notice(names[i], Level.WARN, text)
    for i in np.flatnonzero(places.heard & ~places.steady):
        does = "gets no other goal" if model.navigates[i] else "stands"
        text = f"its pose jumped by {places.jumped[i]:.1f} m: it {does} until its poses agree"
        yield Notice(names[i], Level.WARN, text)
    if enough.shape[1]:
        for i in np.flatnonzero(places.heard & ~enough.any(axis=1)):
            text, level = "too little energy for any task", Level.WARN
            if charging[i]:
                text, level = f"{text}: it is to charge first", Level.OK
            yield Notice(names[i], level, text)
    for i in np.flatnonzero(motion.stuck > STUCK):
        text = f"gets no nearer to where it is to go, for {motion.stuck[i]:.0f} s"
        yield Notice(names[i], Level.WARN, text)
    for i in np.flatnonzero(motion.control.stopped):
        yield Notice(names[i], Level.ERROR, "stopped: no safe command could be found")
    seen, rows = set(), motion.rows
    noise = min(NOISE * settings.pose_noise, settings.margin / 2)
    near = rows.violated & (rows.room < -noise)
    for i, other in zip(rows.first[near], rows.obstacle[near], strict=True):
        if (i, other) in seen or (other >= 0 and not places.steady[other]):
            continue
        seen.add((i, other))
        what = names[other] if other >= 0 else "the boundary or a keep-out area"
        yield Notice(names[i], Level.ERROR, f"nearer to {what} than the margin allows")


def targets_unheard(
    team: Team, active: np.ndarray, topics: TargetBelief, now: float
) -> dict[str, str]:
    """Say of active tasks that the topic they keep to is silent.

    Args:
        team: The team with its present task table.
        active: Tasks to be done now, shape (M,).
        topics: What is known of the topics.
        now: Time, s.
    """
    kept = {
        name: task.keeps_to.topic
        for (name, task), on in zip(team.tasks.items(), active, strict=True)
        if on and isinstance(task.keeps_to, Target) and task.keeps_to.topic
    }
    return {
        name: f"{topic}, which it keeps to, is not heard"
        for name, topic in kept.items()
        if topics.silent(topic, now)
    }


def out_of_reach(model: Model, active: np.ndarray, view: View, means: Means) -> dict[str, str]:
    """Say of active tasks that nobody who could do them gets there, or near enough.

    Args:
        model: The team.
        active: Tasks to be done now, shape (M,).
        view: What is known.
        means: Ways, and the room at their ends.
    """
    able = (view.suitability > 0) & view.places.heard[:, None] & active
    lost = able.any(axis=0) & ~(able & means.way).any(axis=0)
    far = np.zeros(len(lost), dtype=bool)
    if not means.admitted.all():
        alone = able & model.alone(view.capability)
        far = alone.any(axis=0) & ~(alone & means.admitted).any(axis=0)
    said = dict.fromkeys(
        np.flatnonzero(far), "the margins keep everyone that could do it from coming near enough"
    ) | dict.fromkeys(np.flatnonzero(lost), "no robot that could do it finds a way there")
    return {model.tasks[m]: text for m, text in said.items()}
