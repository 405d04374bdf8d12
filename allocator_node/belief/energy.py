"""What the batteries hold: measured, or counted from the commands."""

from __future__ import annotations

import numpy as np

from ..model import Model
from ..observation import Observation

SECONDS_PER_HOUR = 3600.0

DOCKED = 0.6
"""Distance of a control point from its robot's dock within which it charges, m."""

STANDING = 0.05
"""Share of full command below which a robot stands."""

LEAST = 1e-3
"""Share of its usable capacity below which a robot's energy counts as this little."""


class EnergyBelief:
    """Charge 0..1 of each robot.

    A measured charge is taken as it is. Between measurements, and where none
    comes, the charge is counted down from what was commanded, or up by what the
    dock gives; after ``battery_timeout`` it is marked as an estimate.

    Attributes:
        charge: Charge, shape (N,).
        estimated: Where it is counted, not measured, shape (N,).
    """

    def __init__(self, model: Model) -> None:
        count = len(model.robots)
        self.charge = np.ones(count)
        self.measured_at = np.full(count, -np.inf)
        self.estimated = np.ones(count, dtype=bool)

    def update(
        self,
        observation: Observation,
        model: Model,
        commands: np.ndarray,
        points: np.ndarray,
        now: float,
        dt: float,
        timeout: float,
    ) -> None:
        """Count the commands of the last ``dt`` seconds, then take in what was measured.

        Args:
            observation: What was heard.
            model: The team.
            commands: Commands sent for the last period, shape (N, 4).
            points: Control points, m, shape (N, 3).
            now: Time, s.
            dt: Length of the last period, s.
            timeout: Age from which a measurement is too old to be called one, s.
        """
        power = model.idle + model.drive * effort_share(model, commands)
        power = np.where(docked(model, points, commands), -model.charge, power)
        self.charge = np.clip(
            self.charge - power * dt / SECONDS_PER_HOUR / model.capacity, 0.0, 1.0
        )
        self.measured_at[self.measured_at > now + timeout] = -np.inf
        fresh = np.isfinite(observation.charges) & ~(
            np.nan_to_num(observation.charge_times, nan=-np.inf) <= self.measured_at
        )
        self.charge[fresh] = np.clip(observation.charges[fresh], 0.0, 1.0)
        self.measured_at[fresh] = observation.charge_times[fresh]
        self.estimated = now - self.measured_at > timeout

    def recall(self, robot: int, charge: float) -> None:
        """Take up what an earlier run knew; it counts as an estimate."""
        self.charge[robot] = charge

    def spendable(self, model: Model) -> np.ndarray:
        """Give what each robot may still spend above its reserve, Wh, shape (N,)."""
        return model.capacity * np.maximum(self.charge - model.reserve, 0.0)

    def dearness(self, model: Model) -> np.ndarray:
        """Give λ_i = mean usable capacity of the team / what i may still spend; shape (N,)."""
        usable = model.capacity * (1 - model.reserve)
        return usable.mean() / np.maximum(self.spendable(model), LEAST * usable)


def docked(model: Model, points: np.ndarray, commands: np.ndarray) -> np.ndarray:
    """Tell which robots stand in their docks; control points (N, 3), commands (N, 4)."""
    away = np.linalg.norm(points[:, :2] - model.docks, axis=1)
    return model.has_dock & (away <= DOCKED) & (effort_share(model, commands) < STANDING)


def effort_share(model: Model, commands: np.ndarray) -> np.ndarray:
    """Give the share of full drive power a command takes, 0..1, shape (N,)."""
    limits = model.fleet.limits
    used = np.divide(np.abs(commands), limits, out=np.zeros_like(commands), where=limits > 0)
    ground = np.linalg.norm(used[:, :2], axis=1)
    return np.minimum(np.maximum(ground, used[:, 2:].max(axis=1)), 1.0)


def way_energy(model: Model, path: np.ndarray) -> np.ndarray:
    """Give the energy of ways (N, ...) in metres at cruising speed, Wh."""
    shape = (-1,) + (1,) * (path.ndim - 1)
    per_metre = (model.idle + model.drive) / model.fleet.cruise / SECONDS_PER_HOUR
    return per_metre.reshape(shape) * path
