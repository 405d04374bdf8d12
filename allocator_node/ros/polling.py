"""Subscriptions that are read once a period instead of waking the executor.

A pose that arrives at 50 Hz is worth one look per decision. The middleware
keeps the newest messages anyway, so these subscriptions stay out of the
executor's wait set (their callback group says "not now" for ever) and cost
nothing until they are read: about 50 µs for a pose, 1 µs where none came.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

from rclpy.callback_groups import CallbackGroup
from rclpy.node import Node
from rclpy.qos import QoSProfile
from rclpy.serialization import deserialize_message

from .complaints import Complaints

LARGEST = 2**18
"""A message above this size would take too much of a period to decode, bytes."""


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
        message_type: Type of its messages.
    """

    def __init__(
        self,
        node: Node,
        message_type: type,
        topic: str,
        qos: QoSProfile,
        complaints: Complaints,
        sift: Callable[[bytes], object] | None = None,
    ) -> None:
        """Subscribe.

        Args:
            node: The node that listens.
            message_type: Type of the messages.
            topic: Name of the topic.
            qos: Quality of service.
            complaints: Where to say what cannot be read.
            sift: Tells of a message as it came whether it is worth decoding, which
                takes a thousand times as long; None: all are.
        """
        self._node = node
        self._complaints = complaints
        self._depth = qos.depth
        self._sift = sift
        self.message_type = message_type
        self._subscription = node.create_subscription(
            message_type, topic, _unused, qos, callback_group=NeverNow(), raw=sift is not None
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
                if taken is None:
                    return None
                message = taken[0] if self._sift is None else self._decoded(taken[0])
            except (RuntimeError, ValueError) as error:  # cannot be decoded
                self._complaints.refuse(self.topic, str(error))
                continue
            if message is not None:
                return Arrival(message, taken[1].get("received_timestamp", 0))
        return None

    def _decoded(self, data: bytes) -> Any:
        """Decode a message; None where that is not worth it.

        Raises:
            ValueError: It is too large.
            RuntimeError: It cannot be decoded.
        """
        if not self._sift(data):
            return None
        if len(data) > LARGEST:
            raise ValueError(f"a message of {len(data)} bytes, at most {LARGEST} are read")
        return deserialize_message(data, self.message_type)

    def drain(self, budget: float = math.inf) -> Iterator[Arrival]:
        """Give the messages kept, oldest first; those left after ``budget`` s the next time."""
        end = time.monotonic() + budget
        for _ in range(self._depth):
            arrival = self.take()
            if arrival is None:
                return
            yield arrival
            if time.monotonic() > end:
                self._complaints.warn(self.topic, "more messages than there is time to read")
                return

    def close(self) -> None:
        """End the subscription."""
        self._node.destroy_subscription(self._subscription)


def _unused(message: Any) -> None:
    raise AssertionError("a polled subscription was executed")
