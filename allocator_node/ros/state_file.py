"""The file that lets what was learned survive a restart."""

from __future__ import annotations

import json
import os
from concurrent.futures import Future, ThreadPoolExecutor
from pathlib import Path
from typing import Any

VERSION = 1
"""Version of the format; another one is not read."""

LARGEST = 16 * 2**20
"""A state file above this size is not one of ours, bytes."""


class StateFile:
    """Keeps a memory (JSON-able) in a file, written atomically, beside the loop.

    A crash at any time leaves either the old file or the new one, whole.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self._writer = ThreadPoolExecutor(max_workers=1, thread_name_prefix="state_file")
        self._pending: Future[None] | None = None

    def load(self) -> dict[str, Any] | None:
        """Give the memory kept, None if there is no file.

        Raises:
            ValueError: The file is damaged or of another version.
            OSError: The file cannot be read.
        """
        if not self.path.exists():
            return None
        if self.path.stat().st_size > LARGEST:
            raise ValueError(f"larger than {LARGEST} bytes")
        try:
            kept = json.loads(self.path.read_text(encoding="utf-8"))
        except RecursionError as error:
            raise ValueError("nested too deeply") from error
        if not isinstance(kept, dict) or not isinstance(kept.get("memory"), dict):
            raise ValueError("there is no memory in it")
        if kept.get("version") != VERSION:
            raise ValueError(f"its version is {kept.get('version')!r}, this node reads {VERSION}")
        return kept["memory"]

    def set_aside(self) -> Path:
        """Rename the file to ``*.damaged`` and give that path.

        Raises:
            OSError: It cannot be renamed.
        """
        aside = self.path.with_name(self.path.name + ".damaged")
        os.replace(self.path, aside)
        return aside

    def save_soon(self, memory: dict[str, Any], surely: bool = False) -> None:
        """Write in the background, unless the last write is still under way.

        Args:
            memory: What is kept.
            surely: Write it in that case too, after the last one.

        Raises:
            OSError: The write before this one failed.
        """
        if self._pending is not None and self._pending.done():
            pending, self._pending = self._pending, None
            pending.result()
        if self._pending is not None and not surely:
            return
        self._pending = self._writer.submit(self._write, _text(memory))

    def save(self, memory: dict[str, Any]) -> None:
        """Write now.

        Raises:
            OSError: The file cannot be written.
        """
        self._pending = None
        self._writer.submit(self._write, _text(memory)).result()

    def close(self) -> None:
        """Wait for the last write and end the writer."""
        self._writer.shutdown()

    def _write(self, text: str) -> None:
        self.path.parent.mkdir(parents=True, exist_ok=True)
        new = self.path.with_name(self.path.name + ".new")
        # Never through a link that somebody left there, and for nobody else to write.
        new.unlink(missing_ok=True)
        handle = os.open(new, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600)
        with open(handle, "w", encoding="utf-8") as file:
            file.write(text)
            file.flush()
            os.fsync(file.fileno())
        os.replace(new, self.path)
        directory = os.open(self.path.parent, os.O_RDONLY)
        try:
            os.fsync(directory)
        finally:
            os.close(directory)


def _text(memory: dict[str, Any]) -> str:
    return json.dumps({"version": VERSION, "memory": memory}, indent=1)
