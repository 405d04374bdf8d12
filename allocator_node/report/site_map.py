"""Where everybody went."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.patches import Circle
from matplotlib.patches import Polygon as Patch

from .canvas import Picture, axes, finished
from .palette import BLACK, GREY, VERMILLION, look
from .story import Run, clock, meetings

NAMED = 14
"""Up to so many robots have a look and a name of their own."""

FARTHEST_STEP = 30.0
"""A longer step between two recorded poses breaks the path, m."""


def site_map(run: Run) -> Picture:
    """Draw paths, keep-out areas, boundary, docks and meetings."""
    site = run["site"]
    places = [np.array(rows)[:, 1:3] for rows in run["paths"].values() if rows]
    corners = [np.array(site["boundary"])] if site["boundary"] else []
    everything = np.concatenate([*places, *corners]) if places or corners else np.zeros((1, 2))
    low, high = everything.min(axis=0) - 1.5, everything.max(axis=0) + 1.5
    wide, tall = high - low
    figure, ax = axes(float(np.clip(9.0 * tall / wide + 0.8, 3.0, 10.0)))
    if site["boundary"]:
        ax.add_patch(Patch(site["boundary"], fill=False, edgecolor=BLACK, linewidth=1.6))
    for area in site["keep_out"]:
        ax.add_patch(Patch(area["polygon"], facecolor="#dddddd", edgecolor=BLACK, hatch="xxx",
                           linewidth=1))  # fmt: skip
        _write(ax, np.mean(area["polygon"], axis=0), area["name"])
    robots = run["robots"]
    few = len(robots) <= NAMED
    for number, robot in enumerate(robots):
        _path(ax, run, robot, number, few)
    for number, row in enumerate(meetings(run), start=1):
        x, y = row[4:6]
        ax.plot(x, y, "X", color=VERMILLION, markeredgecolor=BLACK, markersize=9, zorder=5)
        _write(ax, (x, y), chr(96 + number), below=True)
    ax.set_xlim(low[0], high[0])
    ax.set_ylim(low[1], high[1])
    ax.set_aspect("equal")
    ax.set_xlabel("x, m")
    ax.set_ylabel("y, m")
    if few and any(run["paths"].values()):
        ax.legend(loc="upper left", bbox_to_anchor=(1.0, 1.0), fontsize=8)
    closest = run["min_separation_m"]
    return finished(
        figure, "map",
        f"Map of the site with the paths of {len(robots)} robots and {len(site['keep_out'])} "
        "keep-out areas. "
        + ("No two robots met." if closest is None else
           f"Smallest distance between two bodies {closest:.2f} m, "
           f"{' and '.join(run['closest']['robots'])} at {clock(run['closest']['t'])}."),
        "Circle: start; square: end; cross-hatched: keep-out; plus: dock; X: a meeting, two bodies "
        "within 2 m, with its letter in the table below.",
    )  # fmt: skip


def _path(ax: Axes, run: Run, robot: str, number: int, few: bool) -> None:
    rows = run["paths"].get(robot)
    style = look(number)
    colour, line = (style.stroke, style.line) if few else (GREY, "-")
    dock = run["site"]["dock"].get(robot)
    if dock:
        ax.plot(*dock[:2], "+", color=BLACK, markersize=6, zorder=2)
    if not rows:
        return
    x, y = np.array(rows)[:, 1:3].T
    leaps = np.flatnonzero(np.hypot(np.diff(x), np.diff(y)) > FARTHEST_STEP) + 1
    ax.plot(np.insert(x, leaps, np.nan), np.insert(y, leaps, np.nan), color=colour, linestyle=line,
            linewidth=1.6 if few else 0.7, label=robot if few else None)  # fmt: skip
    ax.plot(x[0], y[0], "o", color="white", markeredgecolor=colour, markersize=7 if few else 3)
    radius = run["site"]["radius"].get(robot, 0.3)
    ax.plot(x[-1], y[-1], "s", color=colour, markeredgecolor=BLACK, markersize=6 if few else 3)
    ax.add_patch(Circle((x[-1], y[-1]), radius, fill=False, edgecolor=BLACK, linewidth=0.5))
    if few:
        _write(ax, (x[-1], y[-1]), robot)


def _write(ax: Axes, place: object, text: str, below: bool = False) -> None:
    ax.annotate(
        text, tuple(place), xytext=(5, -11 if below else 5), textcoords="offset points",
        fontsize=8, zorder=6,
        bbox={"facecolor": "white", "alpha": 0.75, "linewidth": 0, "pad": 0.8},
    )  # fmt: skip
