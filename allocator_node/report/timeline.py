"""Who did what, with every reallocation marked."""

from __future__ import annotations

import math

from matplotlib.axes import Axes

from ..files.wording import counted
from .canvas import WIDTH, Picture, axes, finished, time_axis
from .palette import BLACK, GREY, look
from .story import Run, change, span, stints, turns

ROW, FLAT_ROW = 0.3, 0.19
"""Height of a robot's row, and of one in a large team, inches."""

LARGE = 30
"""A team of more robots is large: those that never had a task get no row."""

LETTER = 0.075
"""Width of a letter, inches."""


def timeline(run: Run) -> Picture:
    """Draw a row a robot."""
    tasks, seconds = run["tasks"], run["seconds"]
    looks = {task: look(number) for number, task in enumerate(tasks)}
    work = stints(run)
    large = len(run["robots"]) > LARGE
    robots = [robot for robot in run["robots"] if work[robot] or not large]
    idle = len(run["robots"]) - len(robots)
    figure, ax = axes(1.3 + (FLAT_ROW if large else ROW) * max(len(robots), 2))
    inches = (WIDTH - 1.8) / max(seconds, 1e-9)
    for row, robot in enumerate(robots):
        for begin, end, task in work[robot]:
            style = looks[task]
            ax.barh(row, end - begin, left=begin, height=0.72, color=style.colour,
                    hatch=style.hatch, edgecolor="#00000055", linewidth=0.5)  # fmt: skip
            _name(ax, begin, end, row, task, inches)
    for spell in run.get("silent") or []:
        if spell["robot"] in robots:
            ax.barh(robots.index(spell["robot"]), spell["until"] - spell["t"], left=spell["t"],
                    height=0.24, color="white", edgecolor=BLACK, hatch="//////",
                    linewidth=0.8)  # fmt: skip
    _mark(ax, run, inches)
    ax.set_yticks(range(len(robots)), robots)
    ax.set_ylim(len(robots) - 0.4, -0.6)
    ax.grid(False, axis="y")
    time_axis(ax, seconds)
    return finished(
        figure, "timeline", _alt(run),
        "A bar is a task being done; numbers are reallocations, with their reasons in the table "
        "below. A narrow hatched white bar: not heard from. No bar: no task."
        + (f" Not shown: {counted(idle, 'robot')} without a task all the time." if idle else ""),
    )  # fmt: skip


def _name(ax: Axes, begin: float, end: float, row: int, task: str, inches: float) -> None:
    """Write a task into its bar where there is room, shortened if need be."""
    room = int((end - begin) * inches / LETTER) - 1
    if room < 4:
        return
    text = task if len(task) <= room else task[: room - 1] + "…"
    ax.text(begin + 0.05 / inches, row, text, va="center", ha="left", fontsize=8, clip_on=True,
            bbox={"facecolor": "white", "alpha": 0.8, "linewidth": 0, "pad": 1})  # fmt: skip


def _mark(ax: Axes, run: Run, inches: float) -> None:
    """Mark the moments of change; numbers are left out where they would overlap."""
    free = [-math.inf, -math.inf]
    for t, numbers in turns(run):
        ax.axvline(t, color=GREY, linewidth=0.7, linestyle=":", zorder=3)
        label = span(numbers)
        width = LETTER * (len(label) + 1) / inches
        for level, until in enumerate(free):
            if t - width / 2 >= until:
                ax.annotate(
                    label, (t, 1.0), xycoords=("data", "axes fraction"), ha="center", va="bottom",
                    xytext=(0, 2 + 11 * level), textcoords="offset points", fontsize=8,
                    fontweight="bold", annotation_clip=False,
                )  # fmt: skip
                free[level] = t + width / 2
                break


def _alt(run: Run) -> str:
    told = [
        f"at {event['t']:.1f} s {event['task']}: {change(event)} ({event['cause']})"
        for event in run["events"][:12]
    ]
    more = len(run["events"]) - len(told)
    rest = f"; and {more} more" if more > 0 else ""
    return (
        f"Timeline of {len(run['robots'])} robots over {run['seconds']:.0f} seconds: "
        + ("; ".join(told) + rest if told else "no reallocation")
        + "."
    )
