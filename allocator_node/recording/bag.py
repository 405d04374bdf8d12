"""Writes a recording as rosbag2 does, with mcap as its storage."""

from __future__ import annotations

import threading
from pathlib import Path
from types import TracebackType

from rosbags.interfaces import (
    Connection,
    Qos,
    QosDurability,
    QosHistory,
    QosLiveliness,
    QosReliability,
    QosTime,
)
from rosbags.rosbag2 import StoragePlugin, Writer, WriterError
from rosbags.typesys import Stores, get_typestore

TEAM = "team_file"
"""Key under which rosbag2's metadata holds the text of the team file."""

TYPES = get_typestore(Stores.ROS2_JAZZY)
"""Definitions of the standard messages; the same in every distribution we run on."""

FOR_EVER = QosTime(2147483647, 4294967295)
"""rosbag2's way to write an unlimited duration."""


class Bag:
    """A recording being written; several threads may write to it.

    It is whole once it is closed.
    """

    def __init__(self, path: Path, team_file: str = "") -> None:
        """Begin a recording.

        Args:
            path: Directory to make.
            team_file: Text of the team file, kept with the recording.

        Raises:
            OSError: The directory is there already, or cannot be made.
        """
        path.parent.mkdir(parents=True, exist_ok=True)
        try:
            self._writer = Writer(path, version=9, storage_plugin=StoragePlugin.MCAP)
        except WriterError as error:
            raise FileExistsError(f"{path} cannot be recorded to: {error}") from error
        self._writer.set_custom_data(TEAM, team_file)
        self._writer.open()
        self._connections: dict[str, Connection] = {}
        self._lock = threading.Lock()
        self._open = True

    def __enter__(self) -> Bag:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def write(
        self, topic: str, message_type: str, stamp: int, message: bytes, latched: bool = False
    ) -> None:
        """Write one message.

        Args:
            topic: Full name of its topic.
            message_type: Its type.
            stamp: When it arrived, ns.
            message: Its bytes, as they were on the wire (CDR).
            latched: Whether the topic gives late joiners what was published before.
        """
        with self._lock:
            if not self._open:
                return
            if topic not in self._connections:
                self._connections[topic] = self._writer.add_connection(
                    topic, message_type, typestore=TYPES, offered_qos_profiles=[_qos(latched)]
                )
            self._writer.write(self._connections[topic], stamp, message)

    def close(self) -> None:
        """Finish the recording; later messages are dropped."""
        with self._lock:
            if self._open:
                self._open = False
                self._writer.close()


def _qos(latched: bool) -> Qos:
    durability = QosDurability.TRANSIENT_LOCAL if latched else QosDurability.VOLATILE
    return Qos(
        QosHistory.KEEP_LAST, 1000 if latched else 10, QosReliability.RELIABLE, durability,
        FOR_EVER, FOR_EVER, QosLiveliness.AUTOMATIC, FOR_EVER, False,
    )  # fmt: skip
