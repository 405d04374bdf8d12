"""From the last good pose to a standing robot, by fault: python3 tests/benchmarks/stopping.py.

A rover drives at full speed and says 20 times a second where it is; decisions fall at any
phase of that. What becomes of it is counted in simulated time, so no machine can fail it.
"""

from __future__ import annotations

import argparse
import statistics
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import paths  # noqa: F401
from builders import robot, team_of, watch

from allocator_node.allocator import Allocator
from allocator_node.observation import Observation

POSES_EVERY, PERIOD, TICK = 0.05, 0.1, 0.001
"""Between two poses, two decisions, and the grain of time, s."""

COMMAND_TIMEOUT = 0.5
"""A robot stands when it has heard no command for so long, s."""

FAR = 30.0

Heard = Callable[[float, int], float | None]
"""Pose x at its true value, and the number of the message, to what is heard; None: nothing."""

FAULTS: dict[str, Heard] = {
    "poses stop, are refused, or repeat the last one": lambda x, k: None,
    "pose jumps by 30 m": lambda x, k: x + FAR,
    "two localizations in turn": lambda x, k: x + FAR * (k // 2 % 2),
}
COMMANDS = ("hold is called", "node is killed or its host is cut off")
"""Faults that are no matter of poses."""


def stopping_time(fault: str, random: np.random.Generator) -> float:
    """Give the time from the last good pose until the robot stands for good, s."""
    allocator = Allocator(team_of([robot("rover")], [watch("gate", 500, 0)]), period=PERIOD)
    x, speed, commanded_at = 0.0, 0.0, 0.0
    strikes = 3.0 + random.uniform(0, 1)
    pose_phase, step_phase = random.uniform(0, [POSES_EVERY, PERIOD])
    pose_due, step_due, number, last_good, stood = pose_phase, step_phase, 0, 0.0, None
    seen = Observation.nothing(1)
    for tick in range(round(8.0 / TICK)):
        now = tick * TICK
        struck = now >= strikes
        x += speed * TICK
        if now >= pose_due:
            pose_due, number = pose_due + POSES_EVERY, number + 1
            heard = FAULTS[fault](x, number) if struck and fault in FAULTS else x
            if heard == x and not (struck and fault in FAULTS):
                last_good = now
            if heard is not None:
                seen = replace(
                    seen, poses=np.array([[heard, 0, 0, 0]]), pose_times=np.array([now])
                )
        if now >= step_due and not (struck and fault == COMMANDS[1]):
            step_due += PERIOD
            if struck and fault == COMMANDS[0]:
                allocator.orders = replace(allocator.orders, hold=True)
            speed, commanded_at = allocator.step(seen, now).commands[0, 0], now
        if now - commanded_at > COMMAND_TIMEOUT:
            speed = 0.0
        # The first stand is what counts: a pose that is wrong and steady is believed later.
        if struck and stood is None and speed == 0.0:
            stood = now
    if stood is None:
        raise AssertionError(f"{fault}: the robot never stood")
    return stood - (strikes if fault in COMMANDS else last_good)


def table(repetitions: int, seed: int = 0) -> dict[str, list[float]]:
    """Give the stopping times by fault, s."""
    random = np.random.default_rng(seed)
    return {
        fault: [stopping_time(fault, random) for _ in range(repetitions)]
        for fault in (*FAULTS, *COMMANDS)
    }


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--repetitions", type=int, default=50)
    times = table(parser.parse_args().repetitions)
    print("| fault | median, s | maximum, s |\n|---|---|---|")
    for fault, seconds in times.items():
        print(f"| {fault} | {statistics.median(seconds):.2f} | {max(seconds):.2f} |")


if __name__ == "__main__":
    main()
