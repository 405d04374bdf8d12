"""Safe control: with the assignment fixed, one sparse QP for all robots together."""

from __future__ import annotations

from dataclasses import dataclass

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
    broken = rows.slackness(_velocities(problem, free)) < -1e-9
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
    within = (commands >= problem.lowest - KEPT) & (commands <= problem.highest + KEPT)
    speed = np.linalg.norm(commands[:, :2], axis=1)
    good = within.all(axis=1) & (~problem.round_limit | (speed <= problem.limits[:, 0] + KEPT))
    share = np.divide(commands, problem.limits, np.zeros_like(commands), where=problem.limits > 0)
    good &= (problem.gear == 0) | (np.abs(share[:, 3]) <= np.abs(share[:, 0]) + KEPT)
    commands = np.where(good[:, None], commands, 0.0)
    slackness = rows.slackness(_velocities(problem, commands))
    kept = np.where(rows.violated, slackness + rows.bound >= -2 * CALM, slackness >= -KEPT)
    wrong = np.concatenate([np.flatnonzero(~good), rows.first[~kept]])
    if len(wrong):
        stopped = stopped | _bound_to(rows, wrong, count)
        commands[stopped] = 0.0
    return commands, stopped


def _velocities(problem: ControlProblem, commands: np.ndarray) -> np.ndarray:
    return np.matmul(problem.jacobians, commands[:, :, None])[:, :, 0]


def _free(problem: ControlProblem) -> np.ndarray:
    """Give the optimum without safety rows, shape (N, 4)."""
    reach = -np.matmul(problem.away[:, None, :], problem.jacobians)[:, 0] * problem.limits
    reach = steerable(reach, problem.gear)
    useful = np.where(reach >= 0, problem.highest, -problem.lowest)
    room = np.divide(
        useful, problem.limits, out=np.zeros_like(useful), where=problem.limits > 0
    )
    geared = problem.gear != 0
    room[geared, 3] = np.minimum(room[geared, 3], room[geared, 0])
    effort = least_effort(reach, problem.demand, problem.slack_weight, room)
    unused = (effort.command == 0) | (problem.demand <= 0)[:, None]
    command = np.where(unused, problem.preferred, effort.command * problem.limits)
    command = np.clip(command, problem.lowest, problem.highest)
    speed = np.linalg.norm(command[:, :2], axis=1)
    over = problem.round_limit & (speed > problem.limits[:, 0])
    command[over, :2] *= (problem.limits[over, 0] / speed[over])[:, None]
    return _steerable(command, problem.limits, geared)


def _steerable(commands: np.ndarray, limits: np.ndarray, geared: np.ndarray) -> np.ndarray:
    """Give commands (n, 4) that turn no more than the speed allows, to the last digit."""
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
        commands[self.has] = np.clip(
            answer[:shares], self.qp.lowest[:shares], self.qp.highest[:shares]
        )
        return _steerable(commands * self.limits, self.limits, self.geared)


def joint(problem: ControlProblem, robots: np.ndarray) -> Joint:
    """Give the QP of some robots (n,) with all rows on them; no row binds them to others."""
    count = len(robots)
    limits = problem.limits[robots]
    has = limits > 0
    column = np.where(has, np.cumsum(has.ravel()).reshape(has.shape) - 1, -1)
    shares = int(has.sum())
    moving = problem.demand[robots] > 0
    rows = problem.rows
    position = np.full(len(problem.limits), -1)
    position[robots] = np.arange(count)
    index = np.flatnonzero(position[rows.first] >= 0)
    eased = rows.violated[index]

    size = shares + int(moving.sum()) + int(eased.sum())
    quadratic = np.concatenate(
        [
            np.full(shares, 2.0),
            2.0 * problem.slack_weight[robots][moving],
            np.full(eased.sum(), 2.0),
        ]
    )
    scale = np.where(has, limits, 1.0)
    linear = np.zeros(size)
    linear[:shares] = -2.0 * (problem.preferred[robots] / scale)[has]
    linear[shares + moving.sum() :] = np.where(
        rows.obstacle[index][eased] < 0, OFF_SITE, TOO_NEAR
    )
    lowest = np.concatenate(
        [(problem.lowest[robots] / scale)[has], np.zeros(size - shares)]
    )
    highest = np.concatenate(
        [(problem.highest[robots] / scale)[has], np.full(size - shares, np.inf)]
    )

    # Velocity of each control point by share of each axis, m/s: (n, 3, 4).
    speed = problem.jacobians[robots] * limits[:, None, :]
    entries: list[tuple[np.ndarray, np.ndarray, np.ndarray]] = []
    right: list[np.ndarray] = []

    def add(row: np.ndarray, who: np.ndarray, coefficients: np.ndarray) -> None:
        """Add coefficients (r, 4) on the command of robots who (r,) to rows row (r,)."""
        wanted = has[who]
        where = np.broadcast_to(row[:, None], wanted.shape)[wanted]
        entries.append((where, column[who][wanted], coefficients[wanted]))

    # Task rows: n·G v − δ ≤ −demand.
    tasks = np.flatnonzero(moving)
    row = np.arange(len(tasks))
    along = np.matmul(problem.away[robots][tasks][:, None, :], speed[tasks])[:, 0]
    add(row, tasks, along)
    entries.append((row, shares + row, -np.ones(len(tasks))))
    right.append(-problem.demand[robots][tasks])

    # Safety rows: −normal·(ṗ_first − ṗ_second) − slack ≤ −bound.
    top = len(tasks)
    row = top + np.arange(len(index))
    first, second = position[rows.first[index]], rows.second[index]
    normal = rows.normal[index]
    add(row, first, -np.matmul(normal[:, None, :], speed[first][:, :2])[:, 0])
    paired = second >= 0
    other = position[second[paired]]
    add(row[paired], other, np.matmul(normal[paired][:, None, :], speed[other][:, :2])[:, 0])
    entries.append(
        (row[eased], shares + len(tasks) + np.arange(eased.sum()), -np.ones(eased.sum()))
    )
    right.append(-rows.bound[index])

    # Speed limits that are round: an octagon with a corner in the way to go.
    top += len(index)
    rounds = np.flatnonzero(problem.round_limit[robots])
    if len(rounds):
        steer = -np.matmul(problem.away[robots][rounds][:, None, :], speed[rounds])[:, 0, :2]
        side = np.arctan2(steer[:, 1], steer[:, 0])[:, None] + CORNERS
        normals = np.zeros((*side.shape, 4))
        normals[..., 0], normals[..., 1] = np.cos(side), np.sin(side)
        normals = normals.reshape(-1, 4)
        who = np.repeat(rounds, len(CORNERS))
        row = top + np.arange(len(who))
        add(row, who, normals)
        add(row + len(who), who, -normals)
        right.append(np.full(2 * len(who), np.cos(np.pi / 8)))
        top += 2 * len(who)

    # Robots that turn only as they drive: ±u_ω − gear · u_x ≤ 0.
    geared = problem.gear[robots] != 0
    who = np.flatnonzero(geared)
    if len(who):
        for offset, sign in ((0, 1.0), (len(who), -1.0)):
            edge = np.zeros((len(who), 4))
            edge[:, 0], edge[:, 3] = -problem.gear[robots][who], sign
            add(top + offset + np.arange(len(who)), who, edge)
        right.append(np.zeros(2 * len(who)))

    parts = [np.concatenate(part) for part in zip(*entries, strict=True)]
    return Joint(
        QP(quadratic, linear, *parts, np.concatenate(right), lowest, highest),
        has,
        limits,
        geared,
    )
