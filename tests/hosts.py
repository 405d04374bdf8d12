"""Two hosts on one machine: network namespaces, and a cable between them that can be bad.

Needs root, ``ip`` (iproute2) and ``/dev/net/tun``. Each namespace holds a TAP device; a
thread carries the frames from one to the other, late or not at all.
"""

from __future__ import annotations

import fcntl
import heapq
import os
import random
import select
import shutil
import struct
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from pathlib import Path

TUN = Path("/dev/net/tun")
SET_INTERFACE, TAP, NO_HEADER = 0x400454CA, 0x0002, 0x1000
"""From Linux's if_tun.h: the request, and two of its flags."""

FRAME = 2048
"""More than the longest Ethernet frame, bytes."""


def missing() -> str | None:
    """Tell what this machine lacks for two hosts; None: nothing."""
    if not hasattr(os, "geteuid") or os.geteuid() != 0:
        return "network namespaces need root"
    if shutil.which("ip") is None:
        return "ip (iproute2) is not installed"
    if not TUN.exists():
        return f"no {TUN}"
    if subprocess.run(["unshare", "-n", "true"], capture_output=True).returncode:
        return "network namespaces are not allowed here"
    return None


class Link:
    """The cable.

    Attributes:
        loss: Share of the frames that are lost.
        delay: How late the others come, s.
        cut: Whether all are lost.
    """

    def __init__(self, names: tuple[str, str]) -> None:
        """Make a TAP device of each name; they go as soon as this process does."""
        self.loss, self.delay, self.cut = 0.0, 0.0, False
        self._ends = [self._tap(name) for name in names]
        self._closed = False
        self._random = random.Random(1)
        self._thread = threading.Thread(target=self._carry, daemon=True)
        self._thread.start()

    @staticmethod
    def _tap(name: str) -> int:
        end = os.open(TUN, os.O_RDWR | os.O_NONBLOCK)
        fcntl.ioctl(end, SET_INTERFACE, struct.pack("16sH", name.encode(), TAP | NO_HEADER))
        return end

    def _carry(self) -> None:
        underway: list[tuple[float, int, int, bytes]] = []
        number = 0
        while not self._closed:
            wait = underway[0][0] - time.monotonic() if underway else 0.1
            for end in select.select(self._ends, [], [], min(max(wait, 0.0), 0.1))[0]:
                try:
                    frame = os.read(end, FRAME)
                except OSError:
                    continue  # the device is not up yet
                if not self.cut and self._random.random() >= self.loss:
                    number += 1
                    other = self._ends[1 - self._ends.index(end)]
                    heapq.heappush(
                        underway, (time.monotonic() + self.delay, number, other, frame)
                    )
            while underway and underway[0][0] <= time.monotonic():
                _, _, end, frame = heapq.heappop(underway)
                try:
                    os.write(end, frame)
                except OSError:
                    pass  # the device is not up yet, or its queue is full: lost

    def close(self) -> None:
        """End the thread and remove the devices."""
        self._closed = True
        self._thread.join()
        for end in self._ends:
            os.close(end)


class Host:
    """A network namespace with an address of its own."""

    def __init__(self, name: str) -> None:
        """Take a namespace that is there."""
        self.name = name

    def start(
        self, *command: str, log: Path, environment: dict[str, str] | None = None
    ) -> subprocess.Popen:
        """Start a Python command on this host, its output to a log file."""
        with log.open("wb") as out:
            return subprocess.Popen(
                ["ip", "netns", "exec", self.name, sys.executable, *command],
                stdin=subprocess.DEVNULL, stdout=out, stderr=subprocess.STDOUT,
                env={**os.environ, **(environment or {})}, start_new_session=True,
            )  # fmt: skip


@contextmanager
def two_hosts() -> Iterator[tuple[Host, Host, Link]]:
    """Give two hosts and the cable between them; all is gone afterwards."""
    number = os.getpid() % 100000
    names = f"near{number}", f"far{number}"
    with ExitStack() as stack:
        link = Link(names)
        stack.callback(link.close)
        for place, name in enumerate(names, 1):
            _ip("netns", "add", name)
            stack.callback(_ip, "netns", "del", name)
            _ip("link", "set", name, "netns", name)
            _ip("-n", name, "address", "add", f"10.77.0.{place}/24", "dev", name)
            _ip("-n", name, "link", "set", "lo", "up")
            _ip("-n", name, "link", "set", name, "up")
            _ip("-n", name, "route", "add", "224.0.0.0/4", "dev", name)
        near, far = (Host(name) for name in names)
        yield near, far, link


def _ip(*arguments: str) -> None:
    subprocess.run(["ip", *arguments], check=True)
