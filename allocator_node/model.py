"""The team as arrays: which features make which capabilities serve which tasks."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from .drives import Fleet
from .team import Team


class Model:
    """Index and constants of a team; built once for each task table.

    Attributes:
        robots, tasks, features, capabilities: Names in order; positions are the
            indices i, m, f, k.
        robot_of, task_of: Name to index.
        declared: Which robot has which feature, shape (N, F).
        ways: For each capability its ways as (feature indices, grade).
        needs: Amounts T_mk, shape (M, K).
        each: Capabilities demanded of every member, shape (M, K).
        least, most: Head counts, shape (M,).
        priority: Priority classes, shape (M,).
        urgency: W, shape (M,).
        radius: Body radii, m, shape (N,).
        capacity: Battery capacities, Wh, shape (N,).
        reserve: Reserved share of the capacity, shape (N,).
        idle, drive: Powers standing and added by driving, W, shape (N,).
        charge: Power that docks put into the batteries, W, shape (N,).
        docks: Docks, m, shape (N, 2); 0 without one.
        has_dock: Which robots have one, shape (N,).
        navigates: Which robots bring their own navigation, shape (N,).
        fleet: The drives. A robot with its own navigation is led by its axle, and how it
            turns is its own affair.
        itself: Where a task keeps to that very robot, shape (N, M).
    """

    def __init__(self, team: Team) -> None:
        self.team = team
        self.robots = tuple(team.robots)
        self.tasks = tuple(team.tasks)
        self.robot_of = {name: i for i, name in enumerate(self.robots)}
        self.task_of = {name: m for m, name in enumerate(self.tasks)}
        self.capabilities = tuple(team.capabilities)
        self.features = tuple(
            sorted(
                {feature for robot in team.robots.values() for feature in robot.features}
                | {f for ways in team.capabilities.values() for way in ways for f in way.features}
            )
        )
        robots, tasks = list(team.robots.values()), list(team.tasks.values())
        self.declared = np.array(
            [[feature in robot.features for feature in self.features] for robot in robots]
        ).reshape(len(robots), len(self.features))
        feature_index = {name: f for f, name in enumerate(self.features)}
        self.ways = [
            [(np.array([feature_index[f] for f in way.features]), way.grade) for way in ways]
            for ways in team.capabilities.values()
        ]
        shape = (len(tasks), len(self.capabilities))
        self.needs = np.array(
            [[task.needs.get(name, 0.0) for name in self.capabilities] for task in tasks]
        ).reshape(shape)
        self.each = np.array(
            [[name in task.each for name in self.capabilities] for task in tasks], dtype=bool
        ).reshape(shape)
        self.least = np.array([task.robots.min for task in tasks], dtype=int)
        self.most = np.array(
            [len(robots) if task.robots.max is None else task.robots.max for task in tasks],
            dtype=int,
        )
        self.priority = np.array([task.priority for task in tasks], dtype=int)
        self.urgency = np.array([task.urgency for task in tasks], dtype=float)
        self.radius = np.array([robot.radius for robot in robots])
        self.capacity = np.array([robot.battery.capacity_wh for robot in robots])
        self.reserve = np.array([robot.battery.reserve for robot in robots])
        self.idle = np.array([robot.battery.idle_w for robot in robots])
        self.drive = np.array([robot.battery.drive_w for robot in robots])
        self.charge = np.array([robot.battery.charge_w for robot in robots])
        self.docks = np.array([robot.dock or (0.0, 0.0) for robot in robots]).reshape(-1, 2)
        self.has_dock = np.array([robot.dock is not None for robot in robots])
        self.navigates = np.array([robot.navigates for robot in robots], dtype=bool)
        self.fleet = Fleet([robot.drive for robot in robots])
        self.fleet.ahead[self.navigates] = 0.0
        self.fleet.steered &= ~self.navigates
        targets = [getattr(task.keeps_to, "robot", None) for task in tasks]
        self.itself = np.array(
            [[name == target for target in targets] for name in self.robots], dtype=bool
        ).reshape(len(robots), len(tasks))

    def mask(self, pairs: Iterable[tuple[str, str]]) -> np.ndarray:
        """Give (robot, task) pairs as a mask, shape (N, M); unknown names say nothing."""
        mask = np.zeros((len(self.robots), len(self.tasks)), dtype=bool)
        for robot, task in pairs:
            if robot in self.robot_of and task in self.task_of:
                mask[self.robot_of[robot], self.task_of[task]] = True
        return mask

    def capability(self, health: np.ndarray) -> np.ndarray:
        """Give c_ik = max over ways w of k: g_w · min over f in w of φ_if.

        Args:
            health: φ_if in [0, 1], shape (N, F); 0 where not declared.

        Returns:
            Capabilities, shape (N, K).
        """
        capability = np.zeros((len(self.robots), len(self.capabilities)))
        for k, ways in enumerate(self.ways):
            for features, grade in ways:
                by_way = grade * health[:, features].min(axis=1)
                np.maximum(capability[:, k], by_way, out=capability[:, k])
        return capability

    def alone(self, capability: np.ndarray) -> np.ndarray:
        """Tell which robots would meet head count and needs alone, shape (N, M).

        Args:
            capability: c_ik, shape (N, K).
        """
        enough = (capability[:, None, :] >= self.needs - 1e-9).all(axis=2)
        return enough & (self.least <= 1)

    def suitability(self, capability: np.ndarray) -> np.ndarray:
        """Give a_im = Σ_k T_mk c_ik / Σ_k T_mk, capped at 1; 1 where m needs nothing.

        It is 0 if some ``each`` capability of m has c_ik = 0, if m has needs
        and robot i contributes to none of them, or if m keeps to robot i itself.

        Args:
            capability: c_ik, shape (N, K).

        Returns:
            Suitability, shape (N, M).
        """
        total = self.needs.sum(axis=1)
        suitability = np.ones((len(self.robots), len(self.tasks)))
        needy = total > 0
        suitability[:, needy] = np.minimum(
            capability @ self.needs[needy].T / total[needy], 1.0
        )
        lacking = (capability <= 0).astype(int) @ self.each.T.astype(int)
        suitability[(lacking > 0) | self.itself] = 0.0
        return suitability
