"""How able each robot was for each task, over time."""

from __future__ import annotations

from collections import defaultdict

from .canvas import Picture, axes, finished, time_axis
from .palette import BLACK, look
from .story import Run

PANELS, CURVES = 9, 7
"""Tasks shown, and robots in each, at most: those that changed most come first."""

NOTICEABLE = 0.05
"""A robot whose specialization changed by less is not shown."""

RIDGE = 0.85
"""Height of a specialization of 1, in rows."""


def specialization(run: Run) -> Picture | None:
    """Draw a panel a task whose specializations changed; None: none did."""
    curves: dict[str, dict[str, list[tuple[float, float]]]] = defaultdict(dict)
    for row in run.get("specialization") or []:
        curves[row["task"]].setdefault(row["robot"], []).append((row["t"], row["value"]))
    changed = {
        task: dict(sorted(
            ((r, rows) for r, rows in by_robot.items() if _range(rows) >= NOTICEABLE),
            key=lambda item: -_range(item[1]),
        ))
        for task, by_robot in curves.items()
    }  # fmt: skip
    shown = sorted(
        _alike({task: robots for task, robots in changed.items() if robots}),
        key=lambda tasks: -max(map(_range, changed[tasks[0]].values())),
    )[:PANELS]
    if not shown:
        return None
    columns = min(3, len(shown))
    lines = -(-len(shown) // columns)
    most = max(min(len(changed[tasks[0]]), CURVES) for tasks in shown)
    figure, panels = axes((0.9 + 0.3 * most) * lines + 0.3, lines, columns)
    flat = list(panels.flat) if lines * columns > 1 else [panels]
    number = {robot: n for n, robot in enumerate(run["robots"])}
    for ax, tasks in zip(flat, shown, strict=False):
        robots = list(changed[tasks[0]])[:CURVES]
        for row, robot in enumerate(robots):
            style, rows = look(number[robot]), changed[tasks[0]][robot]
            times = [t for t, _ in rows] + [run["seconds"]]
            values = [value for _, value in rows] + [rows[-1][1]]
            heights = [row - RIDGE * value for value in values]
            ax.fill_between(times, row, heights, step="post", facecolor=style.colour,
                            hatch=style.hatch, edgecolor="#00000088", linewidth=0.5)  # fmt: skip
            ax.axhline(row, color=BLACK, linewidth=0.6)
        more = len(changed[tasks[0]]) - CURVES
        title = _listed(tasks) + (f" ({more} more robots not shown)" if more > 0 else "")
        ax.set_title(title, fontsize=9)
        ax.set_yticks(range(len(robots)), robots)
        ax.set_ylim(most - 0.9, -1.05)
        ax.grid(False, axis="y")
        time_axis(ax, run["seconds"])
    for ax in flat[len(shown) :]:
        ax.set_visible(False)
    falls = [
        f"{robot} for {_listed(tasks)} from {rows[0][1]:.2f} to {rows[-1][1]:.2f}"
        for tasks in shown for robot, rows in list(changed[tasks[0]].items())[:3]
    ]  # fmt: skip
    return finished(
        figure, "specialization",
        f"Specialization over time, where it changed: {'; '.join(falls[:12])}.",
        "Specialization s = suitability × efficacy as the height of each robot's strip, 0 to 1; "
        "only robots whose value changed.",
    )  # fmt: skip


def _alike(changed: dict[str, dict]) -> list[list[str]]:
    """Give the tasks, those with the same curves together."""
    groups: dict[str, list[str]] = defaultdict(list)
    for task, robots in changed.items():
        groups[repr(robots)].append(task)
    return list(groups.values())


def _listed(tasks: list[str]) -> str:
    return ", ".join(tasks[:2]) + (f" and {len(tasks) - 2} more" if len(tasks) > 2 else "")


def _range(rows: list[tuple[float, float]]) -> float:
    values = [value for _, value in rows]
    return max(values) - min(values)
