"""What each robot's own control problem costs under each task, in closed form."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .problem import Problem

SUBSETS = (np.arange(16)[:, None] >> np.arange(4) & 1).astype(float)
"""Every set of axes, one a row: 1 where it has the axis."""

GREATEST = np.tri(5, 4, -1)[:, ::-1].copy()
"""The sets of the last 0, 1, 2, 3, 4 axes."""


@dataclass(frozen=True)
class Effort:
    """Optima of many one-row control problems at once; leading shape (...).

    Attributes:
        value: vᵀ R v + ℓ δ² at the optimum, shape (...).
        command: Optimal v as a share of the limits, shape (..., 4).
        given_up: δ, m/s, shape (...).
    """

    value: np.ndarray
    command: np.ndarray
    given_up: np.ndarray


def least_effort(
    reach: np.ndarray,
    demand: np.ndarray,
    slack_weight: np.ndarray | float,
    room: np.ndarray | None = None,
) -> Effort:
    r"""Solve min uᵀu + ℓ δ² s.t. reachᵀ u + δ ≥ demand, 0 ≤ sign(reach) u ≤ room, δ ≥ 0.

    With u = v/limit this is a robot's own problem under one task: the command
    v(λ) = clip(−λ R⁻¹ Gᵀn / 2), the progress given up δ(λ) = λ / 2ℓ. What they
    bring, f(λ) = Σ_j h_j min(λ h_j / 2, room_j) + λ / 2ℓ with h = \|reach\|, is
    concave and piecewise linear: the least of its lines, one for each set of
    clipped axes. So f(λ) = demand is solved by the greatest λ among the lines.
    (Water-filling; Boyd and Vandenberghe, Convex Optimization, 2004, ch. 5.5.3.)

    Args:
        reach: Closing speed each axis brings at its limit, −limit·(Gᵀn), m/s,
            shape (..., 4).
        demand: Closing speed demanded, m/s, shape (...).
        slack_weight: ℓ, s²/m², shape (...) or ().
        room: Greatest share of the limit now allowed in the useful direction,
            shape (..., 4); default 1.

    Returns:
        The optima.
    """
    size = np.abs(reach)
    if room is None:
        # Axes of greater reach clip first, whatever λ.
        size = np.sort(size, axis=-1)
        capped, clipped = size, GREATEST
    else:
        capped, clipped = size * room, SUBSETS
    lines = len(clipped), *size.shape[:-1]
    left = np.maximum(demand, 0.0) - (clipped @ capped.reshape(-1, 4).T).reshape(lines)
    free = 0.5 * (1.0 - clipped)
    half = 0.5 / slack_weight
    slope = (free @ np.square(size).reshape(-1, 4).T).reshape(lines) + half
    multiplier = np.maximum((left / slope).max(axis=0), 0.0)
    share = np.minimum(0.5 * multiplier[..., None] * np.abs(reach), 1.0 if room is None else room)
    given_up = multiplier * half
    value = (share**2).sum(axis=-1) + slack_weight * given_up**2
    return Effort(value, np.copysign(share, reach), given_up)


def steerable(reach: np.ndarray, gear: np.ndarray) -> np.ndarray:
    r"""Give the reach of robots that turn only as they drive: its projection on the cone.

    Their shares lie in the cone K: \|u_ω\| ≤ g u_x. Without the caps the optimum is
    u(λ) = Π_K(λ h / 2) = λ Π_K(h) / 2, as a projection on a cone is positively
    homogeneous. Π_K(h) is h inside the cone; ½ (g h_x + \|h_ω\|) times the nearest edge
    (g, ±1) beside it, one variable; or 0 opposite to it. Caps that bound u_ω no tighter
    than u_x do not change that: inside, u_x clips first, and on the edge both at once. So
    the box's closed form holds with Π_K(h) in the place of h. (Projections on cones:
    Boyd and Vandenberghe, Convex Optimization, 2004, ch. 8.1.)

    Args:
        reach: Closing speed each axis brings at its limit, m/s, shape (..., 4).
        gear: 1 forward, −1 in reverse, 0: a robot whose limits are a box, shape (...).

    Returns:
        Reach to use in :func:`least_effort`, shape (..., 4).
    """
    if not gear.any():
        return reach
    ahead, turn = gear * reach[..., 0], np.abs(reach[..., 3])
    edge = np.maximum(0.5 * (ahead + turn), 0.0)
    outside = (gear != 0) & (turn > ahead)
    projected = reach.copy()
    projected[..., 0] = np.where(outside, gear * edge, reach[..., 0])
    projected[..., 3] = np.where(outside, np.copysign(edge, reach[..., 3]), reach[..., 3])
    return projected


def price(problem: Problem) -> np.ndarray:
    """Give the price κ w_im + e_im of every eligible pair, Wh, shape (N, M); else 0.

    w_im is the optimum of robot i's own control problem under task m alone.
    """
    prices = np.zeros(problem.eligible.shape)
    i, m = np.nonzero(problem.eligible)
    away, jacobians = problem.away[i, m], problem.jacobians[i]
    reach = -np.matmul(away[:, None, :], jacobians)[:, 0] * problem.limits[i]
    reach = steerable(reach, problem.gear[i])
    effort = least_effort(reach, problem.demand[i, m], problem.slack_weight[i])
    prices[i, m] = problem.kappa * effort.value + problem.energy[i, m]
    return prices
