"""Records the topics a report needs, as raw bytes, without rosbag2 installed."""

from __future__ import annotations

import argparse
import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Sequence
from datetime import datetime
from functools import partial
from pathlib import Path

import rclpy
from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus
from rclpy.context import Context
from rclpy.executors import ExternalShutdownException, SingleThreadedExecutor
from rclpy.qos import DurabilityPolicy, QoSProfile, ReliabilityPolicy
from rclpy.signals import SignalHandlerOptions
from sensor_msgs.msg import BatteryState

from ..files.document import FileError
from ..recording import Bag, Recorded, recorded_topics
from ..team_file import read_team
from .command_topics import COMMAND_TYPES
from .poses import POSE_TYPES

TYPES: dict[str, type] = {
    **POSE_TYPES,
    **COMMAND_TYPES,
    "sensor_msgs/msg/BatteryState": BatteryState,
    "diagnostic_msgs/msg/DiagnosticArray": DiagnosticArray,
    "diagnostic_msgs/msg/DiagnosticStatus": DiagnosticStatus,
}

STREAM = QoSProfile(depth=200, reliability=ReliabilityPolicy.BEST_EFFORT)
"""Matches every publisher; a message lost on the way is lost to the recording only."""

LATCHED = QoSProfile(
    depth=1000,
    reliability=ReliabilityPolicy.RELIABLE,
    durability=DurabilityPolicy.TRANSIENT_LOCAL,
)


FINISH = 10.0
"""Time a recorder beside the node gets to finish its recording, s."""


class Recorder:
    """Writes what it hears to a recording, in a thread of its own until closed."""

    def __init__(
        self,
        path: Path,
        topics: Sequence[Recorded],
        team_file: str = "",
        namespace: str = "",
    ) -> None:
        """Start recording.

        Args:
            path: Directory of the recording, to be made.
            topics: What to record.
            team_file: Text of the team file, kept with the recording.
            namespace: Where relative topics lie.

        Raises:
            OSError: The directory is there already, or cannot be made.
        """
        self._bag = Bag(path, team_file)
        self._context = Context()
        rclpy.init(context=self._context, signal_handler_options=SignalHandlerOptions.NO)
        self._node = rclpy.create_node(
            "recorder", context=self._context, namespace=namespace,
            start_parameter_services=False,
        )  # fmt: skip
        for recorded in topics:
            full = self._node.resolve_topic_name(recorded.topic)
            self._node.create_subscription(
                TYPES[recorded.type], full, partial(self._hear, full, recorded),
                LATCHED if recorded.latched else STREAM, raw=True,
            )  # fmt: skip
        self._executor = SingleThreadedExecutor(context=self._context)
        self._executor.add_node(self._node)
        self._thread = threading.Thread(target=self._spin, name="recorder", daemon=True)
        self._thread.start()

    def close(self) -> None:
        """Stop listening and finish the recording."""
        self._context.try_shutdown()
        self._thread.join(timeout=5.0)
        self._node.destroy_node()
        self._bag.close()

    def _hear(self, topic: str, recorded: Recorded, message: bytes) -> None:
        self._bag.write(topic, recorded.type, time.time_ns(), message, recorded.latched)

    def _spin(self) -> None:
        try:
            self._executor.spin()
        except ExternalShutdownException:
            pass


class RecorderBeside:
    """A recorder in a process of its own, so that the loop keeps its period."""

    def __init__(self, directory: Path, team_file: Path, allocator: str) -> None:
        """Start it.

        Args:
            directory: A recording named after the present time is made in it.
            team_file: The team file.
            allocator: Full name of the allocator's node.
        """
        self.path = directory / f"{datetime.now():%Y%m%d-%H%M%S-%f}"
        self._process = subprocess.Popen(
            [sys.executable, "-m", __name__, str(self.path), "--team", str(team_file),
             "--allocator", allocator],
            start_new_session=True,
        )  # fmt: skip

    def close(self) -> None:
        """Let it finish the recording."""
        self._process.send_signal(signal.SIGINT)
        try:
            self._process.wait(FINISH)
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.wait()


def main(arguments: Sequence[str] | None = None) -> int:
    """Record until a signal ends it; the allocator's node starts this beside itself."""
    parser = argparse.ArgumentParser("recorder", description="Record a team's topics.")
    parser.add_argument("path", type=Path)
    parser.add_argument("--team", type=Path, required=True)
    parser.add_argument("--allocator", default="/allocator")
    asked = parser.parse_args(arguments)
    ended = threading.Event()
    for sign in (signal.SIGINT, signal.SIGTERM):
        signal.signal(sign, lambda *_: ended.set())
    try:
        team = read_team(asked.team)
        recorder = Recorder(
            asked.path, recorded_topics(team, asked.allocator), asked.team.read_text("utf-8"),
            asked.allocator.rpartition("/")[0],
        )  # fmt: skip
    except (FileError, OSError) as error:
        print(error, file=sys.stderr)
        return 2
    parent = os.getppid()
    try:
        # Without the node that started this, nobody would ever end it.
        while not ended.wait(1.0) and os.getppid() == parent:
            pass
    finally:
        recorder.close()
    return 0


if __name__ == "__main__":
    sys.exit(main())
