"""What a process uses while it runs, and how evenly it works: parts of the long measurements."""

from __future__ import annotations

import os
import time
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

EDGES_MS = (0, 80, 90, 95, 98, 102, 105, 110, 120, 150, 200, 300, 1000, np.inf)


@dataclass
class Usage:
    """What a process uses, as Linux tells it.

    Attributes:
        pid: Its number.
        times: When it was looked at, s.
        busy: Processor time it had used by then, s.
        memory: Memory it held then, MB.
    """

    pid: int
    times: list[float] = field(default_factory=list)
    busy: list[float] = field(default_factory=list)
    memory: list[float] = field(default_factory=list)

    def look(self) -> None:
        """Look at it."""
        fields = Path(f"/proc/{self.pid}/stat").read_text().rpartition(")")[2].split()
        pages = int(Path(f"/proc/{self.pid}/statm").read_text().split()[1])
        self.times.append(time.monotonic())
        self.busy.append((int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK"))
        self.memory.append(pages * os.sysconf("SC_PAGE_SIZE") / 2**20)

    @property
    def cores(self) -> float:
        """Cores it kept busy between the first and the last look."""
        return (self.busy[-1] - self.busy[0]) / (self.times[-1] - self.times[0])


def histogram(periods: np.ndarray) -> str:
    """Draw a histogram of periods, s."""
    counts, _ = np.histogram(1e3 * periods, EDGES_MS)
    lines = []
    for low, high, count in zip(EDGES_MS, EDGES_MS[1:], counts, strict=False):
        bar = "█" * int(np.ceil(50 * count / max(counts.max(), 1)))
        lines.append(f"{low:>5} … {high:<5} ms {count:>6}  {bar}")
    return "\n".join(lines)
