"""What a run's data say, put in the order in which it is told."""

from __future__ import annotations

import itertools
from collections.abc import Mapping
from typing import Any

Run = Mapping[str, Any]
"""The content of run.json (design of :class:`~allocator_node.sim.record.Rehearsal`)."""

MEETING = 2.0
"""Distance between two bodies below which they meet, m."""

APART = 10.0
"""Two bodies that were farther apart for so long meet again, s."""

MOST_MEETINGS = 9
"""So many meetings are told, the nearest ones."""


def stints(run: Run) -> dict[str, list[tuple[float, float, str]]]:
    """Give for each robot its times of work: from, until, task."""
    changes: dict[str, list[tuple[float, str | None]]] = {name: [] for name in run["robots"]}
    for row in run["assignments"]:
        changes[row["robot"]].append((row["t"], row["task"]))
    end = run["seconds"]
    return {
        robot: [
            (t, until, task)
            for (t, task), (until, _) in itertools.pairwise([*rows, (end, None)])
            if task is not None
        ]
        for robot, rows in changes.items()
    }


def turns(run: Run) -> list[tuple[float, list[int]]]:
    """Give the moments at which something changed, each with its events' numbers from 1."""
    moments: list[tuple[float, list[int]]] = []
    for number, event in enumerate(run["events"], start=1):
        if moments and event["t"] - moments[-1][0] < 0.15:
            moments[-1][1].append(number)
        else:
            moments.append((event["t"], [number]))
    return moments


def span(numbers: list[int]) -> str:
    """Write consecutive numbers: 3, or 3–7."""
    return str(numbers[0]) if len(numbers) == 1 else f"{numbers[0]}–{numbers[-1]}"


def change(event: Mapping[str, Any]) -> str:
    """Say how a task's group changed."""
    before, after = set(event["from"]), set(event["to"])
    joined, left = sorted(after - before), sorted(before - after)
    if joined and left:
        return f"{', '.join(left)} → {', '.join(joined)}"
    if joined:
        return f"+ {', '.join(joined)}"
    return f"− {', '.join(left)}" if left else "unchanged"


def why_short(run: Run, spell: Mapping[str, Any]) -> str:
    """Give the reason of the change of the task that came with, or last before, a shortfall."""
    former = [
        (number, event)
        for number, event in enumerate(run["events"], start=1)
        if event["task"] == spell["task"] and event["t"] <= spell["t"] + 0.15
    ]
    if not former:
        return "from the start: nobody was able and free"
    number, event = former[-1]
    return f"no. {number}, [{event['cause']}] {event['detail']}"


def meetings(run: Run) -> list[list[Any]]:
    """Give the nearest row of ``nearest`` of each meeting, the nearest meeting first.

    A meeting is a time in which the same two bodies are within :data:`MEETING`, without
    an interruption of :data:`APART`.
    """
    meeting: dict[tuple[str, str], list[Any]] = {}
    found: list[list[Any]] = []
    seen: dict[tuple[str, str], float] = {}
    for row in run.get("nearest") or []:
        t, gap, first, second = row[:4]
        if gap >= MEETING:
            continue
        pair = (first, second)
        if pair not in seen or t - seen[pair] > APART:
            meeting[pair] = list(row)
            found.append(meeting[pair])
        elif gap < meeting[pair][1]:
            meeting[pair][:] = row
        seen[pair] = t
    return sorted(found, key=lambda row: row[1])[:MOST_MEETINGS]


def energy_left(run: Run) -> dict[str, float]:
    """Give what each robot's battery held at the end, Wh, where that is known."""
    capacity = run["site"]["capacity_wh"]
    return {
        robot: rows[-1][1] * capacity[robot]
        for robot, rows in run["charges"].items()
        if rows and robot in capacity
    }


def clock(seconds: float) -> str:
    """Write a time: 75.3 s, or from ten minutes on 12:05."""
    if seconds < 600:
        return f"{seconds:.1f} s"
    return f"{int(seconds) // 60}:{int(seconds) % 60:02d} min"
