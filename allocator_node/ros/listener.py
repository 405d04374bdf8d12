"""Listens to what an allocator publishes, as plain dictionaries for callbacks."""

from __future__ import annotations

import threading
from collections.abc import Callable, Mapping
from typing import Any

import rclpy
from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus
from rclpy.context import Context
from rclpy.executors import ExternalShutdownException, SingleThreadedExecutor
from rclpy.qos import DurabilityPolicy, QoSProfile, ReliabilityPolicy
from rclpy.signals import SignalHandlerOptions

Status = Mapping[str, Any]
"""One DiagnosticStatus: name, level (int), text, values (key to value)."""

HISTORY = 1000
"""Reallocations taken from before this node was there, at most."""


class Listener:
    """Subscribes to an allocator in a thread of its own until closed."""

    def __init__(
        self,
        allocator: str,
        on_assignments: Callable[[list[Status]], None],
        on_reallocation: Callable[[Status], None],
        on_diagnostics: Callable[[list[Status]], None],
    ) -> None:
        """Start listening; the callbacks run in the listener's thread.

        Args:
            allocator: Full name of the allocator's node.
            on_assignments: Called with the state of all robots.
            on_reallocation: Called with one change of a task's group.
            on_diagnostics: Called with the statuses of ``/diagnostics``.
        """
        self._context = Context()
        rclpy.init(context=self._context, signal_handler_options=SignalHandlerOptions.NO)
        self._node = rclpy.create_node("team_demo", context=self._context)
        latched = QoSProfile(
            depth=HISTORY,
            reliability=ReliabilityPolicy.RELIABLE,
            durability=DurabilityPolicy.TRANSIENT_LOCAL,
        )
        subscribe = self._node.create_subscription
        subscribe(
            DiagnosticArray, f"{allocator}/assignments",
            lambda message: on_assignments([plain(status) for status in message.status]), latched,
        )
        subscribe(
            DiagnosticStatus, f"{allocator}/reallocations",
            lambda message: on_reallocation(plain(message)), latched,
        )
        subscribe(
            DiagnosticArray, "/diagnostics",
            lambda message: on_diagnostics([plain(status) for status in message.status]), 10,
        )
        self._executor = SingleThreadedExecutor(context=self._context)
        self._executor.add_node(self._node)
        self._thread = threading.Thread(target=self._spin, name="listener", daemon=True)
        self._thread.start()

    def close(self) -> None:
        """Stop listening."""
        self._context.try_shutdown()
        self._thread.join(timeout=5.0)
        self._node.destroy_node()

    def _spin(self) -> None:
        try:
            self._executor.spin()
        except ExternalShutdownException:
            pass


def plain(status: DiagnosticStatus) -> Status:
    """Give a status as plain data."""
    return {
        "name": status.name,
        "level": int.from_bytes(status.level, "little"),
        "text": status.message,
        "values": {pair.key: pair.value for pair in status.values},
    }
