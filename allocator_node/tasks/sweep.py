"""Cover an area once, in lanes as wide as the tool."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Annotated, Any

import numpy as np
import shapely
from annotated_types import Ge, Le
from scipy.optimize import linear_sum_assignment

from ..team import Polygon, Positive
from .base import Goals, Scene, Task
from .lanes import Lanes, lanes_of

NEAR = 0.1
"""Distance at which a robot is at the beginning of a lane, m; it begins and ends so
far outside the area, so that nothing is left there."""

ASTRAY = 0.1
"""Share of the tool's width a robot may be beside its lane for its work to count."""

GAP = 0.5
"""Length of lane a robot may leave out before it has to go back, m."""

PUSHED = 1.5
"""A robot goes at most this many times its cruising speed."""

LONGEST_PERIOD = 2.0
"""Time between two decisions beyond which nobody knows what was done, s."""

ON_LANE = 0.5
"""Distance from its lane within which a robot is led along it, m."""

STEP = 0.2
"""Distance between two points of a lane that are looked at, m."""

SLOWEST = 0.15
"""Speed at the end of a lane, m/s."""

PATIENCE = 20.0
"""Time without progress after which another lane is tried first, s."""


@dataclass(frozen=True)
class Pass:
    """What one member does.

    Attributes:
        lane: Index of the lane.
        forward: Whether it goes from the lane's first point to its last.
        working: Whether it is on the lane; else on the way there.
        at: Where it is along the lane, m.
        end: Where along the lane it ends, m.
        since: When it last made progress, s.
        nearest: Least distance so far to where it begins, m.
    """

    lane: int
    forward: bool
    end: float
    since: float
    working: bool = False
    at: float = 0.0
    nearest: float = np.inf


@dataclass(frozen=True)
class Swept:
    """What is done, and who does what.

    Attributes:
        left: Part of each lane still to do, from and to, m along it; empty: done.
        passes: Member to what it does; None: nothing is left for it.
        shares: Member to its lanes.
        upward: Whether everybody goes through its share from the first lane on.
        put_off: Lanes on which somebody could not go on; they are tried again last.
        missed: Length of lanes that nobody can reach for edges of the site, m.
        time: When that was, s.
    """

    left: tuple[tuple[float, float], ...]
    passes: Mapping[int, Pass | None] = field(default_factory=dict)
    shares: Mapping[int, tuple[int, ...]] = field(default_factory=dict)
    upward: bool = True
    put_off: frozenset[int] = frozenset()
    missed: float = 0.0
    time: float = np.nan

    def todo(self) -> list[int]:
        """Give the lanes that are not done."""
        return [lane for lane, (low, high) in enumerate(self.left) if high > low]


@dataclass(frozen=True, kw_only=True)
class Sweep(Task):
    """Finishes when every lane is done; what is done stays done, whoever did it.

    What the margins of keep-out areas and the boundary forbid is left out, and said.

    The group shares out the lanes that are left in blocks of equal length, anew
    whenever somebody joins, leaves, or has nothing left to do.

    Attributes:
        area: Area to cover, m; lanes run along its longest side.
        lane_width: Width of the tool, which is at the robot's control point, m.
        overlap: Least share of the width that neighbouring lanes have in common.
    """

    kind = "sweep"

    area: Polygon
    lane_width: Positive
    overlap: Annotated[float, Ge(0), Le(0.9)] = 0.1

    @property
    def ends(self) -> bool:
        """A sweep ends."""
        return True

    @cached_property
    def lanes(self) -> Lanes:
        """The lanes."""
        return lanes_of(self.area, self.lane_width, self.overlap)

    def begin(self) -> Swept:
        """Give the state with everything to do."""
        return Swept(tuple((-NEAR, float(length) + NEAR) for length in self.lanes.length))

    def ended(self) -> Swept:
        """Give the state with nothing left to do."""
        return Swept(((0.0, 0.0),) * len(self.lanes.length))

    def finished(self, state: Swept) -> bool:
        """Tell whether every lane is done."""
        return not state.todo()

    def saved(self, state: Swept) -> dict[str, list]:
        """Give what is left of each lane, m along it, and of which area."""
        return {
            "area": [list(corner) for corner in self.area],
            "left": [list(part) for part in state.left],
            "missed": state.missed,
        }

    def restored(self, saved: Any) -> Swept:
        """Give the state in which that much is left; nobody is on a lane yet."""
        whole = self.begin()
        try:
            area = tuple((float(x), float(y)) for x, y in saved["area"])
            left = tuple((float(low), float(high)) for low, high in saved["left"])
            missed = float(saved["missed"])
        except (LookupError, TypeError, OverflowError) as error:
            raise ValueError(f"not what is left of a sweep: {error!r}") from error
        within = (
            low == high == 0.0 or first <= low < high <= last
            for (low, high), (first, last) in zip(left, whole.left, strict=False)
        )
        if area != self.area or len(left) != len(whole.left) or not all(within):
            raise ValueError("what is left is of another sweep")
        if not 0 <= missed <= self._whole:
            raise ValueError("more was missed than there is")
        return replace(whole, left=left, missed=missed)

    def progress(self, state: Swept) -> float:
        """Give the share of the lanes' length that is done."""
        left = state.missed + sum(high - low for low, high in state.left)
        return min(max(1.0 - left / self._whole, 0.0), 1.0)

    @property
    def _whole(self) -> float:
        """Length of all lanes, m."""
        return float((self.lanes.length + 2 * NEAR).sum())

    def remark(self, state: Swept) -> str | None:
        """Say how much of its lanes is left out."""
        if state.missed < GAP:
            return None
        return f"{state.missed:.1f} m of its lanes left out: too near to edges of the site"

    def advance(self, state: Swept, scene: Scene) -> Swept:
        """Take off what was swept since, and give whoever is free the next lane."""
        left, passes, put_off = list(state.left), {}, set(state.put_off)
        period = np.nan_to_num(np.clip(scene.now - state.time, 0.0, LONGEST_PERIOD))
        for robot in map(int, scene.members):
            before = state.passes.get(robot)
            gap = GAP + PUSHED * period * scene.cruise[robot]
            passes[robot] = before and self._worked(before, left, scene, robot, gap)
            if before and passes[robot] and scene.now - passes[robot].since > PATIENCE:
                passes[robot] = None
                put_off.add(before.lane)
        state = replace(
            state, left=tuple(left), passes=passes, put_off=frozenset(put_off), time=scene.now
        )
        if set(state.shares) != set(passes):
            state = self._shared_out(state, scene)
        state = self._next(state, scene)
        begun = {done.lane for done in state.passes.values() if done}
        if None in state.passes.values() and set(state.todo()) - begun:
            state = self._next(self._shared_out(state, scene), scene)
        return state

    def _worked(
        self,
        before: Pass,
        left: list[tuple[float, float]],
        scene: Scene,
        robot: int,
        gap: float,
    ) -> Pass | None:
        """Go on with a pass, taking off what is done of its lane; None when that is all.

        Up to ``gap`` metres may lie between two periods.
        """
        low, high = left[before.lane]
        at, beside = self.lanes.seen(before.lane, scene.points[robot, :2])
        ahead = at - low if before.forward else high - at
        working, since, nearest = before.working, before.since, before.nearest
        if not working:
            away = float(np.hypot(ahead, beside))
            working = away <= min(NEAR, self._astray)
            if away < nearest - NEAR / 2:
                since, nearest = scene.now, away
        elif abs(beside) <= self._astray and 0 < ahead <= gap:
            low, high = (at, high) if before.forward else (low, at)
            since = scene.now
        if high <= low:
            low = high = 0.0
        left[before.lane] = (low, high)
        after = replace(before, working=working, at=at, since=since, nearest=nearest)
        goes_on = low < before.end if before.forward else high > before.end
        return after if high > low and goes_on else None

    @property
    def _astray(self) -> float:
        """Distance beside a lane from which work does not count, m."""
        return ASTRAY * self.lane_width

    def _next(self, state: Swept, scene: Scene) -> Swept:
        """Give members without a lane the next of their own share."""
        passes, todo, put_off = dict(state.passes), set(state.todo()), state.put_off
        left = list(state.left)
        for robot, done in passes.items():
            mine = [lane for lane in state.shares[robot] if lane in todo]
            if done is None and mine:
                fresh = [lane for lane in mine if lane not in put_off]
                put_off = put_off if fresh else put_off - set(mine)
                lane = (fresh or mine)[0 if state.upward else -1]
                forward = self._forward(state, lane, scene.points[robot, :2])
                passes[robot], left[lane] = self._begun(lane, left[lane], forward, robot, scene)
        skipped = sum(np.ptp(part) for part in state.left) - sum(np.ptp(part) for part in left)
        return replace(
            state, left=tuple(left), passes=passes, put_off=put_off,
            missed=state.missed + float(skipped),
        )  # fmt: skip

    def _begun(
        self, lane: int, left: tuple[float, float], forward: bool, robot: int, scene: Scene
    ) -> tuple[Pass | None, tuple[float, float]]:
        """Begin the first stretch of a lane that a robot can reach, leaving out what is before.

        Args:
            lane: Index of the lane.
            left: What is left of it, from and to, m along it.
            forward: Whether the robot begins at the lane's first end.
            robot: Index of the robot.
            scene: What the task sees.

        Returns:
            The pass, None where no stretch can be reached; what is left of the lane then.
        """
        sign = 1 if forward else -1
        way = np.linspace(*left, 2 + int(np.ptp(left) / STEP))[::sign]
        clear = scene.clear(self.lanes.at(lane, way), robot)
        turns = np.flatnonzero(np.diff(clear.astype(int), prepend=0, append=0))
        for first, after in zip(turns[0::2], turns[1::2], strict=True):
            begin, end = float(way[first]), float(way[after - 1])
            if after < len(way):
                end -= sign * NEAR
            if sign * (end - begin) > NEAR:
                rest = (begin, left[1]) if forward else (left[0], begin)
                return Pass(lane, forward, end, scene.now), rest
        return None, (0.0, 0.0)

    def _forward(self, state: Swept, lane: int, point: np.ndarray) -> bool:
        """Tell whether a lane's first end is the nearer one."""
        away = np.linalg.norm(self._ends(state, lane) - point, axis=1)
        return bool(away[0] <= away[1])

    def _ends(self, state: Swept, lane: int) -> np.ndarray:
        """Give both ends of what is left of a lane, m, shape (2, 2)."""
        return self.lanes.start[lane] + np.outer(state.left[lane], self.lanes.along)

    def _shared_out(self, state: Swept, scene: Scene) -> Swept:
        """Share the lanes that are left out anew; whoever is on a lane of its share stays."""
        members, todo = list(state.passes), state.todo()
        if not members or not todo:
            return replace(state, shares={robot: () for robot in members})
        blocks = self._blocks(state, todo, len(members))
        best = None
        for upward in (True, False):
            cost = np.array(
                [[self._way(state, robot, b, upward, scene) for b in blocks] for robot in members]
            )
            rows, columns = linear_sum_assignment(cost)
            total = cost[rows, columns].sum()
            if best is None or total < best[0]:
                taken = {members[r]: blocks[c] for r, c in zip(rows, columns, strict=True)}
                best = total, upward, taken
        _, upward, shares = best
        passes = {
            robot: done if done and done.lane in shares[robot] else None
            for robot, done in state.passes.items()
        }
        return replace(state, passes=passes, shares=shares, upward=upward)

    def _blocks(self, state: Swept, todo: list[int], count: int) -> list[tuple[int, ...]]:
        """Part lanes into blocks of neighbours of about equal length; some may be empty."""
        length = np.array([state.left[lane][1] - state.left[lane][0] for lane in todo])
        middle = np.cumsum(length) - length / 2
        part = np.minimum((middle * count / length.sum()).astype(int), count - 1)
        return [tuple(np.array(todo)[part == k].tolist()) for k in range(count)]

    def _way(
        self, state: Swept, robot: int, block: tuple[int, ...], upward: bool, scene: Scene
    ) -> float:
        """Give a robot's way to the first lane of a block, m; none to a lane it is on."""
        done = state.passes[robot]
        if not block or (done and done.lane in block):
            return 0.0
        ends = self._ends(state, block[0] if upward else block[-1])
        return float(np.linalg.norm(ends - scene.points[robot, :2], axis=1).min())

    def goals(self, state: Swept, scene: Scene) -> Goals:
        """Lead members on a lane along it, others to the end they begin at."""
        count = len(scene.points)
        points, velocities = np.full((count, 3), np.nan), np.zeros((count, 3))
        tolerance = np.zeros(count)
        lanes = state.todo() or range(len(state.left))
        ends = np.concatenate([self._ends(state, lane) for lane in lanes])
        apart = scene.points[:, None, :2] - ends[None]
        points[:, :2] = ends[np.linalg.norm(apart, axis=2).argmin(axis=1)]
        for robot, done in state.passes.items():
            if done is None:
                points[robot, :2] = scene.points[robot, :2]
                continue
            low, high = state.left[done.lane]
            begin, sign = (low, 1.0) if done.forward else (high, -1.0)
            points[robot, :2] = self.lanes.at(done.lane, begin)
            if done.working and sign * (done.at - begin) <= GAP:
                speed = min(sign * (done.end - done.at) + SLOWEST, scene.cruise[robot])
                points[robot, :2] = self.lanes.at(done.lane, done.at)
                velocities[robot, :2] = sign * max(speed, SLOWEST) * self.lanes.along
                tolerance[robot] = ON_LANE
        away = shapely.distance(shapely.Polygon(self.area), shapely.points(scene.points[:, :2]))
        return Goals(points, tolerance, path=away, velocities=velocities)

    def moved(self, at: tuple[float, float, float], heading: float | None) -> Sweep:
        """Give the same area with its middle at another place, with everything to do."""
        middle = shapely.Polygon(self.area).centroid
        dx, dy = at[0] - middle.x, at[1] - middle.y
        return replace(self, area=tuple((x + dx, y + dy) for x, y in self.area))
