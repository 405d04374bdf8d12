"""Random faults: failures and repairs at the rates of a world file, as events."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

import numpy as np

from ..team import Team
from .world_file import Event, Faults, FeatureEvent, PoseEvent, StalledEvent, World

STREAM = 1
"""Second part of the seed, so that faults do not hang together with the pose noise."""

SECONDS_PER_HOUR = 3600.0


def with_faults(world: World, team: Team, seconds: float, seed: int) -> World:
    """Give the world with its random faults drawn as events, and no rates left.

    The same seed gives the same faults, however long the time.

    Args:
        world: The world.
        team: The team.
        seconds: Time to draw for, s.
        seed: Seed.
    """
    if world.faults is None:
        return world
    drawn = drawn_events(world.faults, team, seconds, seed)
    events = sorted((*world.events, *drawn), key=lambda event: event.at)
    return replace(world, faults=None, events=tuple(events))


def drawn_events(faults: Faults, team: Team, seconds: float, seed: int) -> list[Event]:
    """Draw failures and repairs: times between them are exponential."""
    events: list[Event] = []
    sources = np.random.SeedSequence((seed, STREAM))
    for robot in team.robots.values():
        for feature in robot.features:
            often = faults.feature_mtbf_h
            if faults.features and feature not in faults.features:
                often = None
            for at, fails in _turns(sources, often, faults.feature_mttr_h, seconds):
                level = "error" if fails else "ok"
                events.append(FeatureEvent(at, robot.name, feature, level))
        for at, fails in _turns(sources, faults.robot_mtbf_h, faults.robot_mttr_h, seconds):
            events.append(PoseEvent(at, robot.name, "silent" if fails else "resumed"))
        for at, fails in _turns(sources, faults.stall_mtbf_h, faults.stall_mttr_h, seconds):
            events.append(StalledEvent(at, robot.name, fails))
    return events


def _turns(
    sources: np.random.SeedSequence, mtbf: float | None, mttr: float | None, seconds: float
) -> Iterator[tuple[float, bool]]:
    """Give the times at which one thing fails (True) and works again (False)."""
    random = np.random.default_rng(sources.spawn(1)[0])
    now, works = 0.0, True
    while (mean := mtbf if works else mttr) is not None:
        now += float(random.exponential(mean * SECONDS_PER_HOUR))
        if now >= seconds:
            return
        yield round(now, 6), works
        works = not works
