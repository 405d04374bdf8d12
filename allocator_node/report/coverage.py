"""When each task had what it needs, and when it was short."""

from __future__ import annotations

from .canvas import Picture, axes, finished, time_axis
from .palette import BLACK, SKY, VERMILLION
from .story import Run, stints


def coverage(run: Run) -> Picture:
    """Draw a row a task: served, short, finished."""
    tasks, seconds = run["tasks"], run["seconds"]
    figure, ax = axes(1.0 + (0.3 if len(tasks) <= 15 else 0.19) * max(len(tasks), 2))
    served = stints(run)
    for row, task in enumerate(tasks):
        for spells in served.values():
            for begin, end, what in spells:
                if what == task:
                    ax.barh(row, end - begin, left=begin, height=0.6, color=SKY, linewidth=0)
        for spell in run["shortfalls"]:
            if spell["task"] == task:
                width = max(spell["until"] - spell["t"], seconds / 400)
                ax.barh(row, width, left=spell["t"], height=0.6, color=VERMILLION, hatch="xxx",
                        edgecolor=BLACK, linewidth=0.5)  # fmt: skip
        if task in run["finished"]:
            ax.plot(run["finished"][task], row, marker="D", color=BLACK, markersize=6)
        share = f"{100 * run['coverage'].get(task, 1.0):.1f} %"
        ax.text(1.005, row, share, transform=ax.get_yaxis_transform(), va="center", fontsize=8)
    ax.set_yticks(range(len(tasks)), tasks)
    ax.set_ylim(len(tasks) - 0.4, -0.6)
    ax.grid(False, axis="y")
    time_axis(ax, seconds)
    short = [task for task in tasks if run["coverage"].get(task, 1.0) < 1]
    text = ", ".join(f"{task} {100 * run['coverage'][task]:.1f} %" for task in short[:12])
    return finished(
        figure, "coverage",
        f"Coverage of {len(tasks)} tasks: "
        + (f"short at times: {text}." if short else "every need was met all the time."),
        "Plain: somebody is on the task. Crossed: something it needs was missing. Diamond: "
        "finished. At the right: share of the active time with all needs met.",
    )  # fmt: skip
