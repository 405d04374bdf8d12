"""How near two bodies came to each other, over time."""

from __future__ import annotations

from .canvas import Picture, axes, finished, time_axis
from .palette import BLACK, BLUE, VERMILLION
from .story import Run, clock, meetings

SHOWN = 6.0
"""Distances beyond this are cut, m."""


def distances(run: Run) -> Picture | None:
    """Draw the smallest distance of any two bodies; None where it was never measured."""
    rows = run.get("nearest") or []
    if not rows:
        return None
    figure, ax = axes(2.3)
    ax.plot([row[0] for row in rows], [min(row[1], SHOWN) for row in rows], color=BLUE,
            linewidth=1.4)  # fmt: skip
    ax.axhline(0.0, color=BLACK, linewidth=1.2)
    for number, row in enumerate(meetings(run), start=1):
        ax.plot(row[0], row[1], "X", color=VERMILLION, markeredgecolor=BLACK, markersize=8)
        ax.annotate(chr(96 + number), (row[0], row[1]), xytext=(4, 5), textcoords="offset points",
                    fontsize=8)  # fmt: skip
    time_axis(ax, run["seconds"])
    ax.set_ylim(min(-0.1, *(row[1] for row in rows)), SHOWN + 0.2)
    ax.set_ylabel("m")
    least = min(rows, key=lambda row: row[1])
    return finished(
        figure, "distances",
        f"Smallest distance between any two bodies over time; the least is {least[1]:.2f} m at "
        f"{clock(least[0])}.",
        f"0 m would be a touch; beyond {SHOWN:g} m cut off. Letters as on the map.",
    )  # fmt: skip
