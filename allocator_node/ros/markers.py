"""Markers: the team, its work and its site to look at in a 3D viewer."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from geometry_msgs.msg import Point, Vector3
from rclpy.duration import Duration
from std_msgs.msg import ColorRGBA, Header
from visualization_msgs.msg import Marker, MarkerArray

from ..decision import Decision
from ..program.safety import rolled
from ..settings import Settings
from ..team import Polygon, Robot, Team
from .conversions import pose_message, stamp_of

BODY = ColorRGBA(r=0.25, g=0.55, b=0.85, a=0.9)
SILENT = ColorRGBA(r=0.55, g=0.55, b=0.55, a=0.5)
GOAL = ColorRGBA(r=0.2, g=0.75, b=0.45, a=0.9)
LINK = ColorRGBA(r=0.2, g=0.75, b=0.45, a=0.45)
FORBIDDEN = ColorRGBA(r=0.85, g=0.3, b=0.2, a=0.8)
DANGER = ColorRGBA(r=0.85, g=0.3, b=0.2, a=0.3)
LIMIT = ColorRGBA(r=0.9, g=0.75, b=0.2, a=0.8)
INK = ColorRGBA(r=1.0, g=1.0, b=1.0, a=0.9)

HEIGHT = 0.5
"""Height of a body, m."""

CIRCLE = 0.05
"""Thickness of the circle around a silent robot, m."""

BAR_WIDTH, BAR_LENGTH = 0.15, 0.8
"""Width of a specialization bar and its length at 1, m."""

MOST_BARS = 10
"""With more tasks only the bar of each robot's own task is shown."""

LIFETIME = 3.0
"""Markers vanish by themselves after so long, s: of a node that died nothing stays."""


class MarkerBoard:
    """Makes the markers of each decision and the deletions of those that vanished."""

    def __init__(self, team: Team) -> None:
        self._team = team
        self._shown: set[tuple[str, int]] = set()
        self._heard_at = np.full(len(team.robots), np.nan)
        self._fastest = np.array([robot.drive.max_speed for robot in team.robots.values()])

    def note(self, decision: Decision) -> None:
        """Note who is heard from; to be called with every decision."""
        self._heard_at[decision.heard] = decision.time

    def markers(self, decision: Decision, settings: Settings | None = None) -> MarkerArray:
        """Give everything to be seen now; ``settings`` as the allocator's."""
        self.note(decision)
        header = Header(stamp=stamp_of(decision.time), frame_id=self._team.frame)
        growth = self._growth(decision, settings or Settings())
        markers = [*self._site(), *self._robots(decision, growth), *self._shortfalls(decision)]
        lifetime = Duration(seconds=LIFETIME).to_msg()
        for marker in markers:
            marker.header, marker.lifetime = header, lifetime
        now = {(marker.ns, marker.id) for marker in markers}
        gone = [
            Marker(header=header, ns=ns, id=number, action=Marker.DELETE)
            for ns, number in sorted(self._shown - now)
        ]
        self._shown = now
        return MarkerArray(markers=[*gone, *markers])

    def _growth(self, decision: Decision, settings: Settings) -> np.ndarray:
        """Give how far each silent robot may have rolled on, m, (N,), as the safety rows do."""
        silent_for = decision.time - self._heard_at + settings.pose_timeout
        growth = rolled(self._fastest, np.nan_to_num(silent_for), settings)
        return np.where(decision.heard, 0.0, growth)

    def clear(self) -> MarkerArray:
        """Give the message that takes everything away."""
        self._shown = set()
        return MarkerArray(
            markers=[Marker(header=Header(frame_id=self._team.frame), action=Marker.DELETEALL)]
        )

    def _site(self) -> Iterator[Marker]:
        if self._team.boundary is not None:
            yield _outline("boundary", 0, self._team.boundary, LIMIT)
        for number, area in enumerate(self._team.keep_out):
            yield _outline("keep_out", number, area.polygon, FORBIDDEN)
            middle = np.mean(np.array(area.polygon), axis=0)
            yield _text("keep_out_name", number, (*middle, 0.5), area.name)

    def _robots(self, decision: Decision, growth: np.ndarray) -> Iterator[Marker]:
        for i, robot in enumerate(self._team.robots.values()):
            pose = decision.poses[i]
            if np.isfinite(pose).all():
                yield from _robot(i, robot, pose, decision)
                if not decision.heard[i]:
                    yield _circle(i, pose, robot.radius + float(growth[i]))
                yield from _work(i, pose, decision)

    def _shortfalls(self, decision: Decision) -> Iterator[Marker]:
        # Beside the site, one line each: a task nobody does may have no place.
        corner = np.min(self._team.boundary, axis=0) if self._team.boundary else np.zeros(2)
        for number, shortfall in enumerate(decision.shortfalls):
            place = (corner[0], corner[1] - 1.5 * (number + 1), 0.0)
            yield _text("shortfall", number, place, str(shortfall), FORBIDDEN, 1.0)


def _robot(i: int, robot: Robot, pose: np.ndarray, decision: Decision) -> Iterator[Marker]:
    heard = decision.heard[i]
    width = 2 * robot.radius
    body = pose.copy()
    body[2] += HEIGHT / 2
    yield _marker(
        "robot", i, Marker.CYLINDER, BODY if heard else SILENT, (width, width, HEIGHT), body
    )
    nose = pose.copy()
    nose[2] += HEIGHT
    size = (robot.radius * 1.4, 0.08, 0.08)
    yield _marker("heading", i, Marker.ARROW, INK, size, nose)
    label = robot.name if heard else f"{robot.name}: silent"
    yield _text("name", i, (pose[0], pose[1], pose[2] + HEIGHT + 0.6), label)
    many = len(decision.tasks) > MOST_BARS
    for m, share in enumerate(decision.specialization[i]):
        if share > 0 and (not many or decision.assignment[i] == m):
            place = 0 if many else m
            middle = (
                pose[0] + robot.radius + 0.2 + place * 1.3 * BAR_WIDTH,
                pose[1],
                pose[2] + share * BAR_LENGTH / 2,
                0.0,
            )
            chosen = decision.assignment[i] == m
            yield _marker(
                "specialization",
                i * len(decision.tasks) + m,
                Marker.CUBE,
                GOAL if chosen else BODY,
                (BAR_WIDTH, BAR_WIDTH, float(share) * BAR_LENGTH),
                middle,
            )


def _circle(i: int, pose: np.ndarray, radius: float) -> Marker:
    """Give the ground on which a silent robot may be by now."""
    place = (pose[0], pose[1], pose[2] + CIRCLE / 2, 0.0)
    size = (2 * radius, 2 * radius, CIRCLE)
    return _marker("silent", i, Marker.CYLINDER, DANGER, size, place)


def _work(i: int, pose: np.ndarray, decision: Decision) -> Iterator[Marker]:
    goal = decision.goals[i].copy()
    task = decision.task_of(i)
    if task is None or not np.isfinite(goal[:2]).all():
        return
    goal[2] = pose[2] if np.isnan(goal[2]) else goal[2]
    yield _marker("goal", i, Marker.SPHERE, GOAL, (0.4, 0.4, 0.4), (*goal, 0.0))
    yield _text("goal_name", i, (goal[0], goal[1], goal[2] + 0.6), task, GOAL)
    link = _marker("link", i, Marker.LINE_STRIP, LINK, (0.06, 0.0, 0.0))
    link.points = [_point(pose[:3]), _point(goal)]
    yield link


def _marker(
    ns: str,
    number: int,
    kind: int,
    color: ColorRGBA,
    size: tuple[float, float, float],
    pose: object = (0.0, 0.0, 0.0, 0.0),
) -> Marker:
    x, y, z = map(float, size)
    return Marker(
        ns=ns, id=number, type=kind, color=color, scale=Vector3(x=x, y=y, z=z),
        pose=pose_message(pose),
    )


def _text(
    ns: str, number: int, place: tuple, text: str, color: ColorRGBA = INK, height: float = 0.5
) -> Marker:
    marker = _marker(ns, number, Marker.TEXT_VIEW_FACING, color, (0.0, 0.0, height), (*place, 0.0))
    marker.text = text
    return marker


def _outline(ns: str, number: int, polygon: Polygon, color: ColorRGBA) -> Marker:
    marker = _marker(ns, number, Marker.LINE_STRIP, color, (0.1, 0.0, 0.0))
    marker.points = [_point((x, y, 0.0)) for x, y in (*polygon, polygon[0])]
    return marker


def _point(place: object) -> Point:
    x, y, z = map(float, place)
    return Point(x=x, y=y, z=z)
