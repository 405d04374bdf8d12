"""What a task kind must give."""

from __future__ import annotations

import abc
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Annotated, Any, ClassVar

import numpy as np
from annotated_types import Ge, Le

from ..team import Checked, HeadCount, Name, NonNegative, Point, Positive, Target
from .target import Located


def everywhere(points: np.ndarray, robot: int) -> np.ndarray:
    """Tell that points (n, 2) are clear of edges where there are none, (n,)."""
    return np.ones(len(points), dtype=bool)


@dataclass(frozen=True)
class Scene:
    """What a task sees of the team in one period.

    Attributes:
        now: Time, s.
        points: Control points of all robots, m, shape (N, 3); 0 where unknown.
        headings: Headings, rad, shape (N,).
        ahead: Distance of each control point ahead of its axle, m, shape (N,).
        members: Indices of the robots on the task, increasing, shape (n,).
        spacing: Distance to leave between two places of a group, m.
        suffices: Whether robots with these indices meet head count and needs.
        cruise: Cruising speeds, m/s, shape (N,).
        find: Where a target is now; None where that is not known.
        bands: Lowest and highest height of each robot, m, shape (N, 2); NaN: on the ground.
        clear: At which points (n, 2) a robot keeps all distances from edges of the site, (n,).
    """

    now: float
    points: np.ndarray
    headings: np.ndarray
    ahead: np.ndarray
    members: np.ndarray
    spacing: float
    suffices: Callable[[np.ndarray], bool]
    cruise: np.ndarray
    find: Callable[[Target], Located | None]
    clear: Callable[[np.ndarray, int], np.ndarray] = everywhere
    bands: np.ndarray | None = None

    def taken(self, points: np.ndarray) -> np.ndarray:
        """Give goal points (3,) or (N, 3) with the heights robots can take there, (N, 3)."""
        taken = np.broadcast_to(points, self.points.shape).copy()
        if self.bands is not None:
            taken[:, 2] = np.clip(taken[:, 2], self.bands[:, 0], self.bands[:, 1])
        return taken

    def locate(self, target: Point | Target) -> Located | None:
        """Give where a target or a point of the site is; None where that is not known."""
        return self.find(target) if isinstance(target, Target) else Located.fixed(target)


@dataclass(frozen=True)
class Goals:
    """Where each robot would go if it did the task.

    What is the same for all robots may be given once instead of N times.

    Attributes:
        points: Goal points p*, m, shape (3,) or (N, 3); a NaN height means "any".
        tolerance: Distance at which a robot stands, m, shape () or (N,); 0 for a goal
            passed through. Within it a robot keeps up with a goal that moves.
        dwell: Time to serve at the goal, s, for a task that ends.
        path: Way to the place of work, m, shape (N,): what the energy is priced
            by; None: straight to the goal point.
        velocities: Velocities ṗ* of the goal points, m/s, shape (3,) or (N, 3).
        facing: Heading to take at the goal, rad, shape () or (N,); NaN: any.
        pace: Share of the cruising speed to travel at, shape () or (N,).
    """

    points: np.ndarray
    tolerance: np.ndarray | float
    dwell: float = 0.0
    path: np.ndarray | None = None
    velocities: np.ndarray | float = 0.0
    facing: np.ndarray | float = np.nan
    pace: np.ndarray | float = 1.0


@dataclass(frozen=True, kw_only=True)
class Task(Checked, abc.ABC):
    """Base of the task kinds: what every task has, and what a kind must give.

    A task is data and never changes; its progress is a *state*, any immutable
    object, which the allocator keeps and hands back.

    Attributes:
        name: Name.
        needs: Capability to the amount T_mk the group must bring in total.
        each: Capabilities that every member must have.
        robots: Head count of the group.
        priority: Class 0..4; each is served before all below it.
        urgency: Power the owner would pay to have somebody there sooner, W.
        after: Tasks that must be finished first.
        active: Whether the task is to be done now.
    """

    kind: ClassVar[str]
    """Name of the kind in a team file."""

    name: Name
    needs: Mapping[Name, Positive] = field(default_factory=dict)
    each: tuple[Name, ...] = ()
    robots: HeadCount = field(default_factory=HeadCount)
    priority: Annotated[int, Ge(0), Le(4)] = 2
    urgency: NonNegative = 0.0
    after: tuple[Name, ...] = ()
    active: bool = True

    @property
    def ends(self) -> bool:
        """Whether it comes to an end of its own, so that others may wait for it."""
        return False

    @property
    def keeps_to(self) -> Point | Target | None:
        """What it keeps to, where that may move."""
        return None

    @property
    def stops(self) -> tuple[tuple[Point, float], ...]:
        """Points that a robot working alone must come to, each with how near, m.

        Only such as are fixed; a kind that leaves out what cannot be reached has none.
        """
        return ()

    @abc.abstractmethod
    def begin(self) -> Any:
        """Give the state before anything is done."""

    @abc.abstractmethod
    def advance(self, state: Any, scene: Scene) -> Any:
        """Give the state after what the scene shows.

        Called once a period, and once more where the task's group has changed in it.
        """

    @abc.abstractmethod
    def goals(self, state: Any, scene: Scene) -> Goals:
        """Give the goal of every robot, members or not."""

    @abc.abstractmethod
    def moved(self, at: tuple[float, float, float], heading: float | None) -> Task:
        """Give the same task at another place: x, y, z (m) and heading (rad)."""

    def finished(self, state: Any) -> bool:
        """Tell whether the task has come to its end; standing tasks never do."""
        return False

    def progress(self, state: Any) -> float | None:
        """Give the share 0..1 that is done; None where there is no such thing."""
        return None

    def remark(self, state: Any) -> str | None:
        """Say what a person should know of it in a plain sentence; None: nothing."""
        return None

    def ended(self) -> Any:
        """Give the state of a task that has come to its end; standing tasks begin anew."""
        return self.begin()

    def saved(self, state: Any) -> Any:
        """Give what is done and must survive a restart, as JSON-able data; None: nothing."""
        return None

    def restored(self, saved: Any) -> Any:
        """Give the state to go on from.

        Args:
            saved: What :meth:`saved` gave in an earlier run, or anything a file may hold.

        Raises:
            ValueError: It is not of this task.
        """
        raise ValueError(f"{self.kind} saves nothing")


def hold(scene: Scene) -> Goals:
    """Let every robot stay where it is: what the task keeps to is not known."""
    return Goals(scene.points.copy(), tolerance=np.inf, path=np.zeros(len(scene.points)))


def distance(points: np.ndarray, others: np.ndarray) -> np.ndarray:
    """Give distances in metres along the last axis; a NaN height counts as no difference."""
    apart = points - others
    apart[..., 2] = np.nan_to_num(apart[..., 2])
    return np.linalg.norm(apart, axis=-1)
