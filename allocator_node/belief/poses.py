"""Where the robots are at present: last poses carried forward, who is silent, who has jumped."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..observation import Observation

SMOOTHING = 0.5
"""Time constant of the velocity taken from poses where none is measured, s."""

PUSHED = 1.5
"""A robot moves at most this many times as fast as its drive allows: downhill, pushed."""

CORRECTION = np.array([1.0, 1.0])
"""Corrections of a localization taken as they are: m, rad."""

SETTLED = 0.7
"""After a jump, poses must follow from one another for so long before they count, s."""


@dataclass(frozen=True)
class Places:
    """The team's places at one moment.

    Attributes:
        poses: x, y, z (m), heading (rad), carried to now, shape (N, 4); NaN: unknown.
        known: Robots ever heard, if only by an earlier run, shape (N,).
        heard: Robots heard within the timeout, shape (N,).
        age: Age of the last pose, s, shape (N,); inf: not heard since the start.
        velocities: m/s three times, rad/s, shape (N, 4); 0 for robots not heard.
        jumped: How far the pose of a robot jumped that is not believed yet, m,
            shape (N,); 0 where poses follow from one another. Such a robot is where
            it was before.
        moved: Robots whose poses moved as robots do since the last time, shape (N,).
    """

    poses: np.ndarray
    known: np.ndarray
    heard: np.ndarray
    age: np.ndarray
    velocities: np.ndarray
    jumped: np.ndarray
    moved: np.ndarray

    @property
    def steady(self) -> np.ndarray:
        """Robots heard whose poses follow from one another: they can be driven, (N,)."""
        return self.heard & (self.jumped == 0)


class PoseBelief:
    """Carries each robot's last pose forward by its last velocity.

    A pose the robot cannot have reached since the last one, however it was
    driven or pushed, is a localization that was reset, or wrong. The last good
    pose stays, and ages, until the new ones have followed from one another for
    :data:`SETTLED` seconds. Silence excuses no leap: who gets no commands stops.
    """

    def __init__(self, fastest: np.ndarray) -> None:
        """Begin with nobody heard; ``fastest``: m/s and rad/s of each robot, shape (N, 2)."""
        count = len(fastest)
        self.fastest = PUSHED * fastest
        self.poses = np.full((count, 4), np.nan)
        self.times = np.full(count, np.nan)
        self.velocities = np.zeros((count, 4))
        self._newest = self.poses.copy()
        self._newest_times = self.times.copy()
        self._jump_times = np.full(count, np.nan)

    def update(self, observation: Observation, now: float, timeout: float) -> Places:
        """Take in an observation and give the places at ``now``.

        Args:
            observation: What was heard.
            now: Time, s.
            timeout: Age from which a robot counts as silent, s.
        """
        times = np.where(np.isfinite(observation.poses).all(axis=1), observation.pose_times, np.nan)
        # A clock that was set back leaves poses from the future: they are forgotten.
        future = self._newest_times > now + timeout
        self._begin_anew(future)
        news = np.isfinite(times) & ~(times <= self._newest_times) & (times <= now + timeout)
        jumped = news.copy()
        jumped[news] = self._leaps(news, observation.poses, times, 2 * timeout)
        # Silence settles nothing: whoever waits after it begins to wait.
        jumped |= np.isfinite(self._jump_times) & (times - self._newest_times > timeout)
        self._jump_times[jumped] = times[jumped]
        self._newest[news] = observation.poses[news]
        self._newest_times[news] = times[news]

        waiting = np.isfinite(self._jump_times)
        settled = waiting & (self._newest_times - self._jump_times >= SETTLED)
        self.times[settled] = self._jump_times[settled] = np.nan
        self.velocities[settled] = 0.0
        fresh = news & (~waiting | settled)
        self._learn_velocity(observation, times, fresh)
        self.poses[fresh] = observation.poses[fresh]
        self.times[fresh] = times[fresh]

        waiting &= ~settled
        known = np.isfinite(self.poses[:, 0])
        timed = np.isfinite(self.times)
        age = np.where(timed, np.maximum(now - np.nan_to_num(self.times), 0.0), np.inf)
        heard = age <= timeout
        # A silent robot stands where it was last seen, within a circle that grows.
        driven = heard & ~waiting
        ahead = np.where(driven, age, 0.0)[:, None]
        carried = self.poses + np.where(driven[:, None], ahead * self.velocities, 0.0)
        carried[:, 3] = np.angle(np.exp(1j * carried[:, 3]))
        velocities = np.where(driven[:, None], self.velocities, 0.0)
        leap = np.linalg.norm((self._newest - self.poses)[:, :3], axis=1)
        far = np.where(waiting, np.maximum(np.nan_to_num(leap), 1e-9), 0.0)
        return Places(carried, known, heard, age, velocities, far, driven & ~settled)

    def recall(self, robot: int, pose: tuple[float, ...]) -> None:
        """Take up where an earlier run last saw a robot: it is an obstacle until it is heard."""
        self.poses[robot] = self._newest[robot] = pose

    def forget_times(self) -> None:
        """Take the next poses as news, for the clock was set back; places stay."""
        self._begin_anew(np.ones(len(self.times), dtype=bool))

    def _begin_anew(self, robots: np.ndarray) -> None:
        """Forget the times of robots (N,), and every pose that is not believed."""
        self.times[robots] = self._newest_times[robots] = self._jump_times[robots] = np.nan
        self._newest[robots] = self.poses[robots]

    def _leaps(
        self, robots: np.ndarray, poses: np.ndarray, times: np.ndarray, longest: float
    ) -> np.ndarray:
        """Tell which of robots (N,) cannot have reached their poses since their newest ones.

        Args:
            robots: Robots asked about; n of them.
            poses: New poses, finite for them, shape (N, 4).
            times: Their times, s, shape (N,).
            longest: Longest time a robot may have moved unheard, s.

        Returns:
            The answers, shape (n,).
        """
        before = self._newest[robots]
        step = np.fmin(times - self._newest_times, longest)[robots, None]
        moved = np.where(np.isfinite(before), poses[robots] - before, 0.0)
        turn = np.abs(np.angle(np.exp(1j * moved[:, 3])))
        way = np.column_stack([np.linalg.norm(moved[:, :3], axis=1), turn])
        return (way > CORRECTION + self.fastest[robots] * step).any(axis=1)

    def _learn_velocity(
        self, observation: Observation, times: np.ndarray, fresh: np.ndarray
    ) -> None:
        speeds = np.column_stack(
            [np.linalg.norm(observation.velocities[:, :3], axis=1), observation.velocities[:, 3]]
        )
        measured = fresh & (np.abs(speeds) <= self.fastest + CORRECTION).all(axis=1)
        self.velocities[measured] = observation.velocities[measured]
        counted = fresh & ~measured & np.isfinite(self.times)
        if not counted.any():
            return
        step = (times - self.times)[counted]
        moved = observation.poses[counted] - self.poses[counted]
        moved[:, 3] = np.angle(np.exp(1j * moved[:, 3]))
        weight = (1 - np.exp(-step / SMOOTHING))[:, None]
        self.velocities[counted] += weight * (moved / step[:, None] - self.velocities[counted])
