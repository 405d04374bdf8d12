"""Subscriptions that are read once a period instead of waking the executor.

A pose that arrives at 50 Hz is worth one look per decision. The middleware
keeps the newest messages anyway, so these subscriptions stay out of the
executor's wait set (their callback group says "not now" for ever) and cost
nothing until they are read: about 50 µs for a pose, 1 µs where none came.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

from rclpy.callback_groups import CallbackGroup
from rclpy.node import Node
from rclpy.qos import QoSProfile

from .complaints import Complaints


class NeverNow(CallbackGroup):
    """Keeps its entities out of the executor's wait set."""

    def can_execute(self, entity: Any) -> bool:
        """Say no."""
        return False

    def beginning_execution(self, entity: Any) -> bool:
        """Say no."""
        return False

    def ending_execution(self, entity: Any) -> None:
        """Do nothing: nothing ever began."""


@dataclass(frozen=True)
class Arrival:
    """A message and when it reached this machine.

    Attributes:
        message: The message.
        received: System time of its arrival, ns; 0 where the middleware does not tell.
    """

    message: Any
    received: int


class PolledSubscription:
    """A subscription that is read when it suits the reader.

    Attributes:
        topic: Full name of the topic.
    """

    def __init__(
        self, node: Node, message_type: type, topic: str, qos: QoSProfile, complaints: Complaints
    ) -> None:
        self._node = node
        self._complaints = complaints
        self._depth = qos.depth
        self._subscription = node.create_subscription(
            message_type, topic, _unused, qos, callback_group=NeverNow()
        )
        self.topic: str = self._subscription.topic_name

    def take(self) -> Arrival | None:
        """Give the oldest message kept that can be read; None when there is none."""
        subscription = self._subscription
        for _ in range(self._depth):
            try:
                with subscription.handle:
                    taken = subscription.handle.take_message(
                        subscription.msg_type, subscription.raw
                    )
            except (RuntimeError, ValueError) as error:  # cannot be decoded
                self._complaints.refuse(self.topic, str(error))
                continue
            if taken is None:
                return None
            return Arrival(taken[0], taken[1].get("received_timestamp", 0))
        return None

    def drain(self) -> Iterator[Arrival]:
        """Give all messages kept, oldest first."""
        for _ in range(self._depth):
            arrival = self.take()
            if arrival is None:
                return
            yield arrival

    def close(self) -> None:
        """End the subscription."""
        self._node.destroy_subscription(self._subscription)


def _unused(message: Any) -> None:
    raise AssertionError("a polled subscription was executed")
