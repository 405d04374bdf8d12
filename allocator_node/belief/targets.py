"""Where the pose topics that tasks keep to say their targets are."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from ..observation import TargetPose
from .poses import SMOOTHING

SILENT = 5.0
"""Time after which a person is told that a target is not heard, s."""


@dataclass(frozen=True)
class _Track:
    """Attributes: last pose (4,), when it held, s, and the velocity since (4,)."""

    pose: np.ndarray
    time: float
    velocity: np.ndarray

    def after(self, news: TargetPose) -> _Track:
        """Give the track with another pose, its velocity smoothed."""
        step = news.time - self.time
        moved = news.pose - self.pose
        moved[3] = np.angle(np.exp(1j * moved[3]))
        weight = 1 - np.exp(-step / SMOOTHING)
        velocity = self.velocity + weight * (np.nan_to_num(moved) / step - self.velocity)
        return _Track(news.pose, news.time, velocity)


class TargetBelief:
    """Carries the last pose of each topic forward; one gone silent stands where it was."""

    def __init__(self) -> None:
        self._tracks: dict[str, _Track] = {}

    def silent(self, topic: str, now: float) -> bool:
        """Tell whether a topic was never heard, or not for :data:`SILENT` seconds."""
        track = self._tracks.get(topic)
        return track is None or now - track.time > SILENT

    def update(
        self, targets: Mapping[str, TargetPose], now: float, timeout: float
    ) -> dict[str, tuple[np.ndarray, np.ndarray]]:
        """Take in what was heard; give each topic's pose and velocity now.

        Args:
            targets: Topic to its newest pose.
            now: Time, s.
            timeout: Age from which a target counts as standing still, s.

        Returns:
            Topic to pose, x, y, z (m), heading (rad), and its velocity; each (4,).
        """
        for topic, news in targets.items():
            track = self._tracks.get(topic)
            if track is None or track.time > now + timeout:
                self._tracks[topic] = _Track(news.pose, news.time, np.zeros(4))
            elif news.time > track.time:
                self._tracks[topic] = track.after(news)
        placed = {}
        for topic in self._tracks.keys() & targets.keys():
            track = self._tracks[topic]
            age = now - track.time
            moving = track.velocity if age <= timeout else np.zeros(4)
            placed[topic] = track.pose + max(age, 0.0) * moving, moving
        return placed
