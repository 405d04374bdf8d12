"""From a recording to the data of run.json, of which a report is made."""

from __future__ import annotations

import itertools
import math
from collections import defaultdict
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

import numpy as np

from ..sim.record import EFFICACY_STEP, Spells, site_of
from ..team import Team
from .meeting import nearest_rows
from .samples import NotARecording, Samples, read_samples, statuses

SPECIALIZATION = "specialization."
"""Prefix of the keys that give a robot's specialization for a task."""

HELD = 2.5
"""A status holds until the next, but for so long at most, s: the allocator may have ended."""

LEAP = 0.01
"""A charge that falls faster than this share a second was set, not used."""


def read_run(path: Path, team: Team | None = None) -> dict[str, Any]:
    """Read a recording and give what happened, with the keys of run.json.

    What only a simulation knows is left empty (``efficacy``) or None.

    Args:
        path: rosbag2 recording, mcap or sqlite3.
        team: The team; None: as kept with the recording.

    Raises:
        NotARecording: No report can be made of it.
    """
    samples = read_samples(path, team)
    if not samples.assignments:
        raise NotARecording(f"{path}: the allocator announced no assignment while it was recorded")
    clock = _Clock(samples)
    robots = list(samples.assignments[0][2])
    events = _events(samples, clock)
    tasks = _tasks(samples, events)
    seconds = round(clock.end, 6)
    finished = _finished(events)
    active = _active(tasks, events, finished, samples.team, seconds)
    shortfalls = _shortfalls(samples, clock)
    nearest, paths, outside = nearest_rows(
        {r: [(clock.at(t), *pose) for t, *pose in rows] for r, rows in samples.poses.items()},
        samples.team, seconds,
    )  # fmt: skip
    least = min(nearest, key=lambda row: row[1], default=None)
    charges = _charges(samples, clock, robots)
    site = site_of(samples.team) if samples.team else _site_of_markers(samples, robots)
    return {
        "seconds": seconds,
        "robots": robots,
        "tasks": tasks,
        "events": events,
        "assignments": _assignments(samples, clock),
        "coverage": {task: _share(task, shortfalls, active[task]) for task in tasks},
        "active_s": {task: round(sum(b - a for a, b in active[task]), 3) for task in tasks},
        "finished": finished,
        "shortfalls": shortfalls,
        "min_separation_m": least[1] if least else None,
        "closest": {"t": least[0], "robots": least[2:4]} if least else None,
        "boundary_violations": outside,
        "body_violations": None,
        "energy_wh": _energy(charges, site["capacity_wh"]),
        "efficacy": [],
        **_periods(samples, clock),
        "paths": {robot: paths.get(robot, []) for robot in robots},
        "charges": charges,
        "notices": _notices(samples, clock),
        "silent": _silent(samples, clock),
        "specialization": _specializations(samples, clock),
        "nearest": nearest,
        "site": site,
    }


class _Clock:
    """Turns the recorder's times into times since the first decision.

    The two clocks may differ (simulated time): what lies between them is the median
    over the assignments, which carry both.
    """

    def __init__(self, samples: Samples) -> None:
        rows = samples.assignments
        stamps = [float(v["stamp"]) for v in samples.reallocations if "stamp" in v]
        self.first = min(stamps + [stamp for _, stamp, _ in rows])
        self._apart = float(np.median([now - stamp for now, stamp, _ in rows]))
        last = max([self.at(now) for now, _, _ in rows] + [s - self.first for s in stamps])
        self.end = max(last, 1e-3)

    def at(self, now: float) -> float:
        """Give the time since the first decision, s."""
        return round(now - self._apart - self.first, 4)


def _events(samples: Samples, clock: _Clock) -> list[dict[str, Any]]:
    return sorted(
        (
            {
                "t": round(float(values["stamp"]) - clock.first, 3),
                "task": values.get("task", ""),
                "from": _names(values.get("from", "")),
                "to": _names(values.get("to", "")),
                "cause": values.get("cause", ""),
                "detail": values.get("detail", ""),
            }
            for values in samples.reallocations
            if "stamp" in values
        ),
        key=lambda event: event["t"],
    )


def _names(text: str) -> list[str]:
    return [name for name in text.split(", ") if name]


def _tasks(samples: Samples, events: Iterable[Mapping[str, Any]]) -> list[str]:
    named = samples.team.tasks if samples.team else ()
    announced = (
        key.removeprefix(SPECIALIZATION)
        for _, _, robots in samples.assignments
        for status in robots.values()
        for key in status["values"]
        if key.startswith(SPECIALIZATION)
    )
    return list(dict.fromkeys([*named, *announced, *(event["task"] for event in events)]))


def _assignments(samples: Samples, clock: _Clock) -> list[dict[str, Any]]:
    rows, known = [], {}
    for _, stamp, robots in samples.assignments:
        for robot, status in robots.items():
            task = status["values"].get("task") or None
            if robot not in known or known[robot] != task:
                known[robot] = task
                t = max(round(stamp - clock.first, 3), 0.0)
                rows.append({"t": t, "robot": robot, "task": task})
    return rows


def _specializations(samples: Samples, clock: _Clock) -> list[dict[str, Any]]:
    rows: list[dict[str, Any]] = []
    known: dict[tuple[str, str], float] = defaultdict(float)
    for _, stamp, robots in samples.assignments:
        for robot, status in robots.items():
            for key, text in status["values"].items():
                if not key.startswith(SPECIALIZATION):
                    continue
                task, value = key.removeprefix(SPECIALIZATION), float(text)
                if abs(value - known[robot, task]) >= EFFICACY_STEP:
                    known[robot, task] = value
                    t = max(round(stamp - clock.first, 3), 0.0)
                    rows.append({"t": t, "robot": robot, "task": task, "value": value})
    return rows


def _finished(events: Iterable[Mapping[str, Any]]) -> dict[str, float]:
    return {
        event["task"]: event["t"] for event in events
        if event["detail"] == f"{event['task']} is finished"
    }  # fmt: skip


def _active(
    tasks: list[str],
    events: list[dict[str, Any]],
    finished: Mapping[str, float],
    team: Team | None,
    seconds: float,
) -> dict[str, list[tuple[float, float]]]:
    """Give the times in which each task was to be done, as far as the changes tell."""
    active = {}
    for task in tasks:
        own = [event for event in events if event["task"] == task]
        known = team.tasks.get(task) if team else None
        on = known is None or (known.active and not known.after)
        since, spells = 0.0, []
        for event in own:
            if on and event["detail"] in (f"{task} is switched off", f"{task} is finished"):
                spells.append((since, event["t"]))
                on = False
            elif not on and event["to"] and task not in finished:
                since, on = event["t"], True
        active[task] = spells + ([(since, seconds)] if on else [])
    return active


def _shortfalls(samples: Samples, clock: _Clock) -> list[dict[str, Any]]:
    spells = Spells()
    for now, status in _held(statuses(samples.diagnostics, "coverage")):
        texts = status["text"].split("; ") if status and status["values"].get("uncovered") else []
        spells.note(clock.at(now), {
            (text,): {"task": text.split(" lacks ")[0], "text": text} for text in texts
        })  # fmt: skip
    return [row for row in spells.rows if row["until"] > row["t"]]


def _notices(samples: Samples, clock: _Clock) -> list[dict[str, Any]]:
    spells, prefix = Spells(), "notice about "
    for now, parts in samples.diagnostics:
        spells.note(clock.at(now), {
            (name, status["level"]): {
                "about": name.removeprefix(prefix),
                "level": ("ok", "warn", "error", "stale")[min(status["level"], 3)],
                "text": status["text"],
            }
            for name, status in parts.items() if name.startswith(prefix)
        })  # fmt: skip
    return spells.rows


def _silent(samples: Samples, clock: _Clock) -> list[dict[str, Any]]:
    spells = Spells()
    for _, stamp, robots in samples.assignments:
        spells.note(round(stamp - clock.first, 3), {
            (robot,): {"robot": robot}
            for robot, status in robots.items() if ", not heard from" in status["text"]
        })  # fmt: skip
    return [row for row in spells.rows if row["until"] > row["t"]]


def _held(rows: Iterable[tuple[float, Any]]) -> Iterable[tuple[float, Any]]:
    """Give statuses with an end (None) where none follows in time."""
    for (now, status), (later, _) in itertools.pairwise([*rows, (math.inf, None)]):
        yield now, status
        if later - now > HELD:
            yield now + 1.0, None


def _share(
    task: str, shortfalls: list[dict[str, Any]], active: list[tuple[float, float]]
) -> float:
    """Give the share of a task's active time without a shortfall."""
    total = sum(end - begin for begin, end in active)
    spells = sorted((s["t"], s["until"]) for s in shortfalls if s["task"] == task)
    short, until = 0.0, -math.inf
    for begin, end in spells:
        begin = max(begin, until)
        short += sum(max(0.0, min(end, b) - max(begin, a)) for a, b in active)
        until = max(until, end)
    return round(1 - min(short / total, 1.0), 6) if total > 0 else 1.0


def _charges(samples: Samples, clock: _Clock, robots: list[str]) -> dict[str, list[list[float]]]:
    """Give charges as the batteries told them, else as the allocator believed them."""
    charges = {}
    for robot in robots:
        rows = samples.charges.get(robot)
        if not rows:
            told = (
                (now, states[robot]["values"].get("energy", "nan"))
                for now, _, states in samples.assignments if robot in states
            )  # fmt: skip
            rows = [(now, float(text)) for now, text in told if text != "nan"]
        charges[robot] = [[clock.at(now), round(float(c), 5)] for now, c in rows]
    return charges


def _energy(
    charges: Mapping[str, list[list[float]]], capacity: Mapping[str, float]
) -> dict[str, float]:
    """Give what each robot used, Wh: all that its charge fell, but for leaps."""
    used = {}
    for robot, rows in charges.items():
        if robot in capacity and rows:
            falls = (
                (a[1] - b[1], max(b[0] - a[0], 1e-9)) for a, b in itertools.pairwise(rows)
            )
            share = sum(fall for fall, dt in falls if 0 < fall <= LEAP * max(dt, 1.0))
            used[robot] = round(share * capacity[robot], 3)
    return used


def _periods(samples: Samples, clock: _Clock) -> dict[str, Any]:
    rows, medians = [], []
    for now, status in statuses(samples.diagnostics, "period"):
        values = status["values"]
        if "work_ms.max" in values:
            rows.append([clock.at(now), float(values["work_ms.max"])])
            medians.append(float(values["work_ms.median"]))
    longest = [row[1] for row in rows] or [0.0]
    return {
        "period_ms": {
            "p50": float(np.median(medians or [0.0])),
            "p99": float(np.percentile(longest, 99)),
            "max": float(max(longest)),
        },
        "decision_ms": rows,
    }


def _site_of_markers(samples: Samples, robots: list[str]) -> dict[str, Any]:
    """Give the site as the allocator's markers draw it, for recordings without a team file."""
    site: dict[str, Any] = {
        "frame": "", "boundary": None, "keep_out": [], "radius": {}, "dock": {},
        "capacity_wh": {}, "reserve": {}, "needs": {},
    }  # fmt: skip
    names = {m.id: m.text for ns, m in samples.markers if ns == "keep_out_name"}
    for ns, marker in samples.markers:
        site["frame"] = marker.header.frame_id or site["frame"]
        outline = [[point.x, point.y] for point in marker.points]
        if ns == "boundary" and outline:
            site["boundary"] = outline[:-1]
        elif ns == "keep_out" and outline:
            name = names.get(marker.id, "")
            site["keep_out"].append({"name": name, "polygon": outline[:-1]})
        elif ns == "robot" and marker.id < len(robots):
            site["radius"][robots[marker.id]] = marker.scale.x / 2
    return site
