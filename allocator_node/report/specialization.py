"""How able each robot was for each task, over time."""

from __future__ import annotations

from collections import defaultdict

from .canvas import Picture, axes, finished, time_axis
from .palette import look
from .story import Run

PANELS, CURVES = 9, 7
"""Tasks shown, and robots in each, at most: those that changed most come first."""


def specialization(run: Run) -> Picture | None:
    """Draw a panel a task whose specializations changed; None: none did."""
    curves: dict[str, dict[str, list[tuple[float, float]]]] = defaultdict(dict)
    for row in run.get("specialization") or []:
        curves[row["task"]].setdefault(row["robot"], []).append((row["t"], row["value"]))
    changed = {
        task: dict(sorted(
            ((robot, rows) for robot, rows in by_robot.items() if len(rows) > 1),
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
    figure, panels = axes(2.3 * lines + 0.3, lines, columns) if len(shown) > 1 else axes(2.6)
    flat = panels.flat if len(shown) > 1 else [panels]
    number = {robot: n for n, robot in enumerate(run["robots"])}
    for ax, tasks in zip(flat, shown, strict=False):
        task = tasks[0]
        for robot, rows in list(changed[task].items())[:CURVES]:
            style = look(number[robot])
            times = [t for t, _ in rows] + [run["seconds"]]
            values = [value for _, value in rows] + [rows[-1][1]]
            ax.step(times, values, where="post", color=style.stroke, linestyle=style.line,
                    linewidth=2, label=robot)  # fmt: skip
        more = len(changed[task]) - CURVES
        title = _listed(tasks) + (f" ({more} more robots not shown)" if more > 0 else "")
        ax.set_title(title, fontsize=9)
        ax.set_ylim(-0.05, 1.05)
        time_axis(ax, run["seconds"])
        ax.legend(fontsize=7, loc="best")
    for ax in list(flat)[len(shown):] if len(shown) > 1 else []:
        ax.set_visible(False)
    falls = [
        f"{robot} for {_listed(tasks)} from {rows[0][1]:.2f} to {rows[-1][1]:.2f}"
        for tasks in shown for robot, rows in list(changed[tasks[0]].items())[:3]
    ]  # fmt: skip
    return finished(
        figure, "specialization",
        f"Specialization over time, where it changed: {'; '.join(falls[:12])}.",
        "Specialization s = suitability × efficacy, 0 to 1; only robots whose value changed.",
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
