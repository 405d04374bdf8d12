"""Safe control: with the assignment fixed, one sparse QP for all robots together."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from .pricing import least_effort, steerable
from .safety import CALM, SafetyRows
from .solvers import QP, SolverFailure, solve_qp

TOO_NEAR = 1e3
"""Price of each m/s by which a row between robots that is violated already is missed."""

OFF_SITE = 4e3
"""The same for edges of areas: robots that crowd each other push nobody over one."""

KEPT = 1e-4
"""How far a solved row may be missed before its robots are stopped, m/s."""

CORNERS = np.pi / 8 + np.arange(4) * np.pi / 4
"""Directions of the sides of an octagon inscribed in the disc of allowed speeds."""


@dataclass(frozen=True, kw_only=True)
class ControlProblem:
    """The safe-control QP; N robots.

    Attributes:
        jacobians: G_i, shape (N, 3, 4).
        limits: Greatest size of each command axis; R_i = diag(1/limits²), shape (N, 4).
        lowest, highest: What is allowed this period, within the limits, shape (N, 4).
        gear: 1 where a robot turns only as it drives and is to drive forward, −1 in
            reverse, |ω| / limit ≤ gear · vx / limit; 0: no such bound; shape (N,).
        round_limit: Robots whose speed (vx, vy) is bounded in length, shape (N,).
        away: n_i, unit vector from where to steer to the robot, shape (N, 3).
        demand: Closing speed demanded, m/s, shape (N,); 0: no task row.
        preferred: Commands preferred to standing still, only in axes and for
            robots that no task row uses, shape (N, 4).
        rows: Safety rows.
        slack_weight: ℓ_i, s²/m², shape (N,): who gives up less where two meet.
    """

    jacobians: np.ndarray
    limits: np.ndarray
    lowest: np.ndarray
    highest: np.ndarray
    gear: np.ndarray
    round_limit: np.ndarray
    away: np.ndarray
    demand: np.ndarray
    preferred: np.ndarray
    rows: SafetyRows
    slack_weight: np.ndarray

    @cached_property
    def scale(self) -> np.ndarray:
        """Limits to divide by: 1 where a robot lacks the axis, shape (N, 4)."""
        return np.where(self.limits > 0, self.limits, 1.0)

    @cached_property
    def dearer(self) -> float:
        """Factor of the prices of rows: progress of slow robots weighs more than 100 s²/m²."""
        return max(1.0, float(np.sqrt(self.slack_weight.max(initial=0.0))) / 10.0)

    @cached_property
    def speed(self) -> np.ndarray:
        """Velocity of each control point by share of each axis, m/s, shape (N, 3, 4)."""
        return self.jacobians * self.limits[:, None, :]

    @cached_property
    def reach(self) -> np.ndarray:
        """Closing speed each axis brings at its limit, m/s, shape (N, 4)."""
        return -np.einsum("ni,nij->nj", self.away, self.speed)

    def velocities(self, commands: np.ndarray) -> np.ndarray:
        """Give the velocities of the control points under commands (N, 4), m/s, (N, 3)."""
        return np.einsum("nij,nj->ni", self.jacobians, commands)


@dataclass(frozen=True)
class Control:
    """Commands, and what the safety rows did to them.

    Attributes:
        commands: v_i, shape (N, 4).
        stopped: Robots that stand because no solver could vouch for them, shape (N,).
        free: Commands without the safety rows, shape (N, 4).
        solved: Robots whose commands a QP had to find, shape (N,).
    """

    commands: np.ndarray
    stopped: np.ndarray
    free: np.ndarray
    solved: np.ndarray


def solve_control(problem: ControlProblem) -> Control:
    """Find the commands.

    Without the safety rows the QP falls apart into one closed form a robot.
    Where that optimum meets the rows it is the optimum with them too, so only
    the groups of robots bound together by rows, one of which is broken, go to
    a solver.

    Returns:
        The optimum; robots no solver could vouch for stand still.
    """
    free = _free(problem)
    count = len(free)
    solved = np.zeros(count, dtype=bool)
    rows = problem.rows
    if not len(rows):
        return Control(*_vouched(problem, free, solved.copy()), free, solved)
    broken = rows.slackness(problem.velocities(free)) < -1e-9
    solved = _bound_to(rows, rows.first[broken], count)
    commands, stopped = free.copy(), np.zeros(count, dtype=bool)
    if solved.any():
        robots = np.flatnonzero(solved)
        program = joint(problem, robots)
        try:
            commands[robots] = program.commands(solve_qp(program.qp))
        except SolverFailure:
            commands[robots] = 0.0
            stopped = solved.copy()
    return Control(*_vouched(problem, commands, stopped), free, solved)


def _vouched(
    problem: ControlProblem, commands: np.ndarray, stopped: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Check every command, whoever found it, and let robots stand where one does not hold.

    Commands must be finite and within the limits, and keep every row. Where the
    distance is not kept already, robots must not come nearer faster than twice
    :data:`~allocator_node.program.safety.CALM`: between two others, or an area and
    another, it may be that leaving the one means nearing the other.

    Args:
        problem: The QP.
        commands: v_i, shape (N, 4).
        stopped: Robots that stand already, shape (N,).

    Returns:
        Commands, shape (N, 4), and who stands, shape (N,).
    """
    rows, count = problem.rows, len(commands)
    good = ((commands >= problem.lowest - KEPT) & (commands <= problem.highest + KEPT)).all(axis=1)
    speed = np.hypot(commands[:, 0], commands[:, 1])
    good &= ~problem.round_limit | (speed <= problem.limits[:, 0] + KEPT)
    share = np.abs(commands / problem.scale)
    good &= (problem.gear == 0) | (share[:, 3] <= share[:, 0] + KEPT)
    commands = np.where(good[:, None], commands, 0.0)
    slackness = rows.slackness(problem.velocities(commands))
    kept = np.where(rows.violated, slackness + rows.bound >= -2 * CALM, slackness >= -KEPT)
    wrong = np.concatenate([np.flatnonzero(~good), rows.first[~kept]])
    if len(wrong):
        stopped = stopped | _bound_to(rows, wrong, count)
        commands[stopped] = 0.0
    return commands, stopped


def _free(problem: ControlProblem) -> np.ndarray:
    """Give the optimum without safety rows, shape (N, 4)."""
    reach = steerable(problem.reach, problem.gear)
    room = np.where(reach >= 0, problem.highest, -problem.lowest) / problem.scale
    geared = problem.gear != 0
    room[geared, 3] = np.minimum(room[geared, 3], room[geared, 0])
    effort = least_effort(reach, problem.demand, problem.slack_weight, room)
    unused = (effort.command == 0) | (problem.demand <= 0)[:, None]
    command = np.where(unused, problem.preferred, effort.command * problem.limits)
    command = np.minimum(np.maximum(command, problem.lowest), problem.highest)
    speed = np.hypot(command[:, 0], command[:, 1])
    over = problem.round_limit & (speed > problem.limits[:, 0])
    command[over, :2] *= (problem.limits[over, 0] / speed[over])[:, None]
    return _steerable(command, problem.limits, geared)


def _steerable(commands: np.ndarray, limits: np.ndarray, geared: np.ndarray) -> np.ndarray:
    """Give commands (n, 4) that turn no more than the speed allows, to the last digit."""
    if not geared.any():
        return commands
    speed = np.abs(commands[geared, 0])
    turn = limits[geared, 3] * (speed / limits[geared, 0])
    commands[geared, 3] = np.clip(commands[geared, 3], -turn, turn)
    return commands


def _bound_to(rows: SafetyRows, robots: np.ndarray, count: int) -> np.ndarray:
    """Tell which robots rows bind to any of the given ones, directly or by others, (N,)."""
    bound = np.zeros(count, dtype=bool)
    bound[robots] = True
    pair = rows.second >= 0
    first, second = rows.first[pair], rows.second[pair]
    while len(split := np.flatnonzero(bound[first] != bound[second])):
        bound[first[split]] = bound[second[split]] = True
    return bound


@dataclass(frozen=True)
class Joint:
    """The QP of a group of robots; n robots.

    Attributes:
        qp: The QP. Its unknowns, in this order: the commands as shares u = v/limit of
            the axes a robot has, δ of the robots with a task row, one slack for each
            row that is violated already.
        has: The axes each robot has, shape (n, 4).
        limits: Greatest size of each command axis, shape (n, 4).
        geared: Robots that turn only as they drive, shape (n,).
    """

    qp: QP
    has: np.ndarray
    limits: np.ndarray
    geared: np.ndarray

    def commands(self, answer: np.ndarray) -> np.ndarray:
        """Give the commands in an answer, shape (n, 4)."""
        shares = int(self.has.sum())
        commands = np.zeros(self.has.shape)
        lowest, highest = self.qp.lowest[:shares], self.qp.highest[:shares]
        commands[self.has] = np.minimum(np.maximum(answer[:shares], lowest), highest)
        return _steerable(commands * self.limits, self.limits, self.geared)


def joint(problem: ControlProblem, robots: np.ndarray) -> Joint:
    """Give the QP of some robots (n,) with all rows on them; no row binds them to others."""
    limits = problem.limits[robots]
    has = limits > 0
    column = has.ravel().cumsum().reshape(has.shape) - 1
    demand = problem.demand[robots]
    tasks = np.flatnonzero(demand > 0)
    position = np.full(len(problem.limits), -1)
    position[robots] = np.arange(len(robots))
    rows = problem.rows
    index = np.flatnonzero(position[rows.first] >= 0)
    second = rows.second[index]
    paired = np.flatnonzero(second >= 0)
    eased = np.flatnonzero(rows.violated[index])

    shares = int(column[-1, -1]) + 1
    slacks = shares + len(tasks)
    size = slacks + len(eased)
    scale = limits[has]
    quadratic, linear = np.full(size, 2.0), np.zeros(size)
    lowest, highest = np.zeros(size), np.full(size, np.inf)
    quadratic[shares:slacks] *= problem.slack_weight[robots[tasks]]
    linear[:shares] = -2.0 * problem.preferred[robots][has] / scale
    price = np.where(rows.obstacle[index[eased]] < 0, OFF_SITE, TOO_NEAR)
    linear[slacks:] = problem.dearer * price
    lowest[:shares] = problem.lowest[robots][has] / scale
    highest[:shares] = problem.highest[robots][has] / scale

    # Task rows: n·G v − δ ≤ −demand. Safety rows: −normal·(ṗ_first − ṗ_second) − slack ≤ −bound.
    # Each is a sum of direction · G v over one or two robots.
    safety = len(tasks) + np.arange(len(index))
    who = [tasks, position[rows.first[index]], position[second[paired]]]
    normal = rows.normal[index]
    direction = [problem.away[robots[tasks], :2], -normal, normal[paired]]
    along = np.einsum(
        "ri,rij->rj", np.concatenate(direction), problem.speed[robots[np.concatenate(who)], :2]
    )
    along[: len(tasks)] = -problem.reach[robots[tasks]]
    coefficients = [along]
    row = [np.arange(len(tasks)), safety, safety[paired]]
    right = [-demand[tasks], -rows.bound[index]]
    top = len(tasks) + len(index)

    # Speed limits that are round: an octagon with a corner in the way to go.
    rounds = np.flatnonzero(problem.round_limit[robots])
    if len(rounds):
        steer = problem.reach[robots[rounds]]
        side = np.arctan2(steer[:, 1], steer[:, 0])[:, None] + CORNERS
        normals = np.zeros((*side.shape, 4))
        normals[..., 0], normals[..., 1] = np.cos(side), np.sin(side)
        normals = normals.reshape(-1, 4)
        who += 2 * [np.repeat(rounds, len(CORNERS))]
        coefficients += [normals, -normals]
        right.append(np.full(2 * len(normals), np.cos(np.pi / 8)))
        row.append(top + np.arange(2 * len(normals)))
        top += 2 * len(normals)

    # Robots that turn only as they drive: ±u_ω − gear · u_x ≤ 0.
    geared = problem.gear[robots] != 0
    if geared.any():
        edge = np.zeros((geared.sum(), 4))
        edge[:, 0], edge[:, 3] = -problem.gear[robots[geared]], 1.0
        who += 2 * [np.flatnonzero(geared)]
        coefficients += [edge, edge * [1, 1, 1, -1]]
        right.append(np.zeros(2 * len(edge)))
        row.append(top + np.arange(2 * len(edge)))

    wanted = has[who := np.concatenate(who)]
    entry, axis = wanted.nonzero()
    given_up = np.concatenate([np.arange(len(tasks)), len(tasks) + eased])
    value = np.concatenate(coefficients)[entry, axis]
    return Joint(
        QP(
            quadratic,
            linear,
            np.concatenate([np.concatenate(row)[entry], given_up]),
            np.concatenate([column[who[entry], axis], np.arange(shares, size)]),
            np.concatenate([value, np.full(size - shares, -1.0)]),
            np.concatenate(right),
            lowest,
            highest,
        ),
        has,
        limits,
        geared,
    )
