"""Messages out: who does what, since when, and why it changed."""

from __future__ import annotations

import numpy as np
from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus
from rclpy.node import Node
from rclpy.publisher import Publisher
from std_msgs.msg import Header, String

from ..decision import Cause, Decision, Level, Reallocation
from ..team import Team
from .conversions import stamp_of, status_of
from .qos import HISTORY, LATCHED

ANNOUNCE = 1.0
"""Assignments are published this often at least, s."""

TROUBLE = {Cause.FEATURE, Cause.EFFICACY, Cause.SILENT, Cause.ENERGY}
"""Causes that call for somebody's attention: something does not work as it should."""

ERRANDS = {
    "to dock": "goes to its dock",
    "queueing": "waits for its dock",
    "charging": "charges",
}
"""What a robot without a task does for itself, as part of a sentence."""


class Outbox:
    """Publishes decisions for people and programs, all in standard messages."""

    def __init__(self, node: Node, team: Team) -> None:
        self._node = node
        self._assigned: dict[str, Publisher] = {
            robot: node.create_publisher(String, f"{robot}/assigned_task", LATCHED)
            for robot in team.robots
        }
        self._assignments = node.create_publisher(DiagnosticArray, "~/assignments", LATCHED)
        self._reallocations = node.create_publisher(DiagnosticStatus, "~/reallocations", HISTORY)
        self._told: dict[str, str | None] = {}
        self._announced = -np.inf

    def publish(self, decision: Decision) -> None:
        """Publish what changed, and once a second how everything stands."""
        changed = self._tell_robots(decision)
        for reallocation in decision.reallocations:
            self._reallocations.publish(reallocation_status(reallocation, decision))
        since = decision.time - self._announced
        if changed or not 0 <= since < ANNOUNCE:
            self._announced = decision.time
            self._assignments.publish(assignments_message(decision))

    def _tell_robots(self, decision: Decision) -> bool:
        changed = False
        for i, robot in enumerate(decision.robots):
            task = decision.task_of(i) or ""
            if self._told.get(robot) != task:
                self._told[robot] = task
                self._assigned[robot].publish(String(data=task))
                changed = True
        return changed

    def dismiss(self) -> None:
        """Tell every robot that it has no task: decisions end here."""
        for robot, publisher in self._assigned.items():
            if self._told.pop(robot, ""):
                publisher.publish(String())

    def close(self) -> None:
        """Stop publishing."""
        for publisher in (*self._assigned.values(), self._assignments, self._reallocations):
            self._node.destroy_publisher(publisher)


def reallocation_status(reallocation: Reallocation, decision: Decision) -> DiagnosticStatus:
    """Give the message of a change; WARN where trouble caused it or the task lacks something."""
    lacking = any(shortfall.task == reallocation.task for shortfall in decision.shortfalls)
    trouble = lacking or reallocation.cause in TROUBLE
    return status_of(
        reallocation.task,
        Level.WARN.value if trouble else Level.OK.value,
        reallocation.detail,
        {
            "task": reallocation.task,
            "from": ", ".join(reallocation.before),
            "to": ", ".join(reallocation.after),
            "cause": reallocation.cause.value,
            "detail": reallocation.detail,
            "stamp": reallocation.time,
        },
    )


def assignments_message(decision: Decision) -> DiagnosticArray:
    """Give one status a robot."""
    return DiagnosticArray(
        header=Header(stamp=stamp_of(decision.time)),
        status=[robot_status(i, decision) for i in range(len(decision.robots))],
    )


def robot_status(i: int, decision: Decision) -> DiagnosticStatus:
    """Give what one robot does, how well it is able to, and what is wrong with it."""
    robot, task = decision.robots[i], decision.task_of(i)
    notices = [notice for notice in decision.notices if notice.about == robot]
    level = max((notice.level.value for notice in notices), default=Level.OK.value)
    if not decision.heard[i]:
        level = Level.ERROR.value
    activity = decision.activity[i] if decision.activity else ""
    sentence = f"{robot} does {task}" if task else f"{robot} has no task"
    if activity in ERRANDS and decision.heard[i]:
        sentence += f" and {ERRANDS[activity]}"
    if task in decision.progress:
        sentence += f", {decision.progress[task]:.0%} done"
    if not decision.heard[i]:
        sentence += ", not heard from"
    sentence = "; ".join([sentence, *(notice.text for notice in notices)])
    specialization = decision.specialization[i]
    return status_of(
        robot,
        level,
        sentence,
        {
            "task": task or "",
            "since": float(decision.since[i]) if task else "",
            "activity": activity,
            **({"progress": float(decision.progress[task])} if task in decision.progress else {}),
            **{
                f"specialization.{name}": float(specialization[m])
                for m, name in enumerate(decision.tasks)
            },
            **({"safety": "left to its own navigation"} if decision.navigates[i] else {}),
            "energy": float(decision.charge[i]),
            "energy_source": "estimated" if decision.charge_estimated[i] else "measured",
        },
        hardware=robot,
    )
