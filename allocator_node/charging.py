"""Robots without a task that are low on energy: to the dock, in turn, until charged."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

from .belief.energy import DOCKED
from .model import Model
from .settings import Settings

SAME_DOCK = 1.0
"""Docks of several robots no farther apart than this are one, m."""

ENOUGH_MORE = 0.05
"""Charge above ``charge_below`` from which the dock is left to one that can do nothing."""

HEAD_START = 0.05
"""Charge by which the one in the dock must be ahead to make room for one at its last."""

LAST = 1 / 3
"""Share of ``dock_margin`` above the reserve from which a robot is at its last."""

APART = 0.5
"""Distance between bodies that wait, beside the margin, m."""

AT_DOCK, AT_SPOT = 0.15, 0.5
"""Distance at which a robot stands in the dock, and where it waits, m."""

BEARINGS = 16
"""Directions from the dock in which a place to wait is looked for."""

FALSE = 0.1
"""Charge gained away from the dock from which the lower one was measured wrongly."""

May = Callable[[np.ndarray, int], np.ndarray]
"""Tells at which of the points (n, 2) a robot may stand, shape (n,)."""


@dataclass(frozen=True)
class Crew:
    """What one period's charging is decided by.

    Attributes:
        now: Time, s.
        points: Control points, m, shape (N, 3).
        known, heard: Robots ever heard, heard now, shape (N,).
        charge: 0..1, shape (N,).
        spare: Robots without a task, shape (N,).
        exhausted: Robots whose energy allows none of their tasks, shape (N,).
        above: Charge above the reserve, shape (N,).
        called: Robots that an operator's order takes off the dock, shape (N,).
        reach: Distance from the control point that holds the body, m, shape (N,).
    """

    now: float
    points: np.ndarray
    known: np.ndarray
    heard: np.ndarray
    charge: np.ndarray
    spare: np.ndarray
    exhausted: np.ndarray
    above: np.ndarray
    called: np.ndarray
    reach: np.ndarray


@dataclass(frozen=True)
class Errands:
    """Where charging sends robots without a task.

    Attributes:
        points: Where to, m, shape (N, 3); NaN: nowhere.
        tolerance: Distance at which they stand, m, shape (N,).
        activity: "to dock", "charging", "queueing" or "" for each robot.
    """

    points: np.ndarray
    tolerance: np.ndarray
    activity: tuple[str, ...]


def dock_of(model: Model) -> np.ndarray:
    """Give the number of each robot's dock, −1: none, (N,); docks that near are one."""
    dock = np.full(len(model.robots), -1)
    having = np.flatnonzero(model.has_dock)
    if len(having):
        pairs = cKDTree(model.docks[having]).query_pairs(SAME_DOCK, output_type="ndarray")
        shared = coo_array((np.ones(len(pairs)), tuple(pairs.T)), shape=(len(having),) * 2)
        dock[having] = connected_components(shared)[1]
    return dock


class Charging:
    """Keeps who is to charge, who has the dock, and where the others wait.

    A robot without a task goes when its energy allows none of the tasks it is able
    to do, or is down to ``charge_below``, and is not asked for again before
    ``charge_until``. A dock goes first to those that are at their last, then to those
    that can do nothing else, then to whoever came first. The one that has it leaves
    early only for one of the former, and steps aside once it is charged, if somebody
    waits: so nobody that waits falls below its reserve.

    Attributes:
        on: Robots that are to charge, shape (N,).
    """

    def __init__(self, model: Model) -> None:
        count = len(model.robots)
        self.on = np.zeros(count, dtype=bool)
        self._since = np.zeros(count)
        self._lowest = np.ones(count)
        self._holder: dict[int, int] = {}
        self._spots: dict[int, tuple[tuple, np.ndarray]] = {}
        self._docks = model.docks
        self._dock = dock_of(model)

    def update(self, crew: Crew, settings: Settings, may: May) -> Errands:
        """Decide who charges now, and where everybody concerned goes."""
        starts = crew.spare & crew.heard & (self._dock >= 0) & ~crew.called & (
            (crew.exhausted & (crew.charge < settings.charge_until))
            | (crew.charge <= settings.charge_below)
        )
        away = np.linalg.norm(crew.points[:, :2] - self._docks, axis=1)
        at_dock = crew.known & (away <= DOCKED)
        lowest = np.where(self.on & ~at_dock, self._lowest, np.inf)
        self._lowest = np.minimum(lowest, crew.charge)
        # No battery fills on the way: what sent it there was a false measurement.
        mistaken = crew.charge > self._lowest + FALSE
        goes_on = self.on & crew.spare & ~crew.called & ~mistaken & (
            crew.charge < settings.charge_until
        )
        on = starts | goes_on
        self._since[on & ~self.on] = crew.now
        self.on = on
        count = len(on)
        points, tolerance = np.full((count, 3), np.nan), np.full(count, AT_SPOT)
        activity = [""] * count
        wanted = set(self._dock[on].tolist())
        self._holder = {dock: i for dock, i in self._holder.items() if dock in wanted}
        for dock in sorted(wanted):
            self._serve(dock, crew, settings, may, points, tolerance, activity)
        self._spots = {i: spot for i, spot in self._spots.items() if np.isfinite(points[i, 0])}
        return Errands(points, tolerance, tuple(activity))

    def _serve(
        self,
        dock: int,
        crew: Crew,
        settings: Settings,
        may: May,
        points: np.ndarray,
        tolerance: np.ndarray,
        activity: list[str],
    ) -> None:
        """Give the dock to one robot, and the others places around it."""
        users = np.flatnonzero(self._dock == dock)
        last = crew.above <= LAST * settings.dock_margin
        queue = sorted(
            users[self.on[users] & crew.heard[users]],
            key=lambda i: (not last[i], not crew.exhausted[i], self._since[i], i),
        )
        holder = self._holder.get(dock)
        if holder not in queue:
            holder = queue[0] if queue else None
        elif last[queue[0]] and crew.above[holder] > crew.above[queue[0]] + HEAD_START:
            holder = queue[0]
        elif (
            crew.exhausted[queue[0]]
            and not crew.exhausted[holder]
            and crew.charge[holder] > settings.charge_below + ENOUGH_MORE
        ):
            self.on[holder] = False
            queue.remove(holder)
            holder = queue[0]
        self._holder[dock] = holder
        if holder is None:
            return
        waiting = [i for i in queue if i != holder]
        place = self._docks[holder]
        away = np.linalg.norm(crew.points[:, :2] - place, axis=1)
        keep = crew.reach[holder] + crew.reach + settings.margin
        others = crew.known & (np.arange(len(away)) != holder)
        if away[holder] > DOCKED and (others & (away < keep)).any():
            waiting.insert(0, holder)
        else:
            points[holder, :2], tolerance[holder] = place, AT_DOCK
            activity[holder] = "charging" if away[holder] <= DOCKED else "to dock"
        first = 2 * crew.reach[users].max() + settings.margin + APART
        for turn, robot in enumerate(waiting):
            distance = first * (1 + turn)
            points[robot, :2] = self._spot(robot, place, distance, crew, settings, may)
            activity[robot] = "queueing"
        blocks = crew.spare & crew.heard & ~self.on & (away < keep)
        for robot in np.flatnonzero(blocks) if activity[holder] != "charging" else ():
            points[robot, :2] = self._spot(robot, place, first, crew, settings, may)

    def _spot(
        self,
        robot: int,
        place: np.ndarray,
        distance: float,
        crew: Crew,
        settings: Settings,
        may: May,
    ) -> np.ndarray:
        """Give a robot's place at a distance from a dock, m, shape (2,); it stays the same."""
        key = (*place, round(distance, 3))
        known = self._spots.get(robot)
        if known is not None and known[0] == key:
            return known[1]
        bearings = 2 * np.pi * np.arange(BEARINGS) / BEARINGS
        spots = place + distance * np.column_stack([np.cos(bearings), np.sin(bearings)])
        others = [i for i in np.flatnonzero(crew.known) if i != robot]
        taken = [crew.points[others, :2], *(s[None] for i, (_, s) in self._spots.items()
                                            if i != robot)]  # fmt: skip
        room = np.linalg.norm(spots[:, None] - np.concatenate(taken)[None], axis=2)
        crowded = (room < 2 * crew.reach[robot] + settings.margin + APART).any(axis=1)
        way = np.linalg.norm(spots - crew.points[robot, :2], axis=1)
        cost = way + 1e3 * crowded + 1e6 * ~may(spots, robot)
        self._spots[robot] = key, spots[cost.argmin()]
        return self._spots[robot][1]
