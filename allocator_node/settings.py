"""The weights and times a user may set, with their ranges."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Annotated, Literal

import numpy as np
from annotated_types import Ge, Gt, Le, Lt

from .team import Checked, NonNegative, Positive, Share


@dataclass(frozen=True, kw_only=True)
class Settings(Checked):
    """Weights of the program and times of the beliefs; all may change while running.

    Attributes:
        kappa: Weight κ of effort beside energy, Wh.
        slack_weight: Weight ℓ of closing speed given up, as a share of the cruising speed.
        gamma: Gain γ of the task rows, 1/s: robots slow down within c/γ of a goal.
        gamma_s: Gain γ_s of the safety rows, 1/s.
        margin: Distance kept beside the bodies, m.
        height_clearance: Height difference from which a flying robot and another one ignore
            each other, m.
        s_min: Least specialization to be eligible.
        swap_distance: What taking a robot off a task costs, as metres of driving.
        warn_health: Health of a feature whose diagnostic says WARN.
        health_timeout: Age from which a diagnostic counts as STALE, s.
        pose_timeout: Age of the last pose from which a robot counts as silent, s.
        battery_timeout: Age of the last measured charge from which it is an estimate, s.
        silent_reach: How far a robot is assumed to roll on at most once it is silent, m.
        efficacy_law: "ratio" (measured over expected progress) or the published
            "additive" law.
        efficacy_gain: β of the additive law, 1/m².
        efficacy_window: Length of the sliding window, s.
        efficacy_tau: Time constant τ of the ratio law, s.
        allowance: Share of the expected progress that honest robots may lose.
        pose_noise: Standard deviation of the poses, m; sets the noise gate.
        retry_after: Time constant with which a failed robot is trusted again, s.
        charge_below: Charge from which a robot without a task goes to its dock.
        charge_until: Charge with which it is asked for again.
        dock_margin: Share of the capacity beside the reserve that is kept for detours
            on the way to the dock and for waiting there.
    """

    kappa: NonNegative = 0.002
    slack_weight: Positive = 100.0
    gamma: Positive = 1.0
    gamma_s: Positive = 1.5
    margin: NonNegative = 0.3
    height_clearance: Positive = 2.0
    s_min: Annotated[float, Gt(0), Le(1)] = 0.2
    swap_distance: NonNegative = 3.0
    warn_health: Share = 0.5
    health_timeout: Positive = 5.0
    pose_timeout: Positive = 1.0
    battery_timeout: Positive = 30.0
    silent_reach: NonNegative = 1.0
    efficacy_law: Literal["ratio", "additive"] = "ratio"
    efficacy_gain: NonNegative = 0.05
    efficacy_window: Positive = 4.0
    efficacy_tau: Positive = 4.0
    allowance: Annotated[float, Ge(0), Lt(1)] = 0.2
    pose_noise: NonNegative = 0.05
    retry_after: Positive = 120.0
    charge_below: Share = 0.5
    charge_until: Share = 0.9
    dock_margin: Share = 0.03

    def slack_weights(self, cruise: np.ndarray) -> np.ndarray:
        """Give ℓ_i = ℓ / c_i², s²/m², of robots with cruising speeds c (N,) in m/s."""
        return self.slack_weight / cruise**2
