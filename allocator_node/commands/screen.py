"""How a team and its reallocations look in a terminal, readable in 100 columns."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterable, Sequence

from rich import box
from rich.console import Console, Group, RenderableType
from rich.markup import escape
from rich.table import Table
from rich.text import Text

from .board import Change, Row

WIDTH = 100
"""Columns used, and assumed where the output is not a terminal."""

BAR = 6
"""Characters of a bar."""

STATES = ("ok", "warning", "error", "stale")
"""Names of DiagnosticStatus levels 0..3."""

EIGHTHS = " ▏▎▍▌▋▊▉█"
STYLES = ("green", "yellow", "red", "magenta")


def console() -> Console:
    """Give a console: plain and :data:`WIDTH` wide where the output is not a terminal."""
    found = Console(highlight=False)
    if found.is_terminal:
        return found
    return Console(highlight=False, width=WIDTH, color_system=None, soft_wrap=True)


def bar(share: float, width: int = BAR) -> str:
    """Give a bar for a share 0..1, in eighths of a character; NaN: question marks."""
    if math.isnan(share):
        return "?" * width
    eighths = round(min(max(share, 0.0), 1.0) * width * 8)
    full, rest = divmod(eighths, 8)
    text = "█" * full + (EIGHTHS[rest] if rest else "")
    return (text or "·").ljust(width)


def percent(share: float) -> str:
    """Give a share as whole per cent, or a dash."""
    return "–" if math.isnan(share) else f"{100 * share:.0f}\N{NO-BREAK SPACE}%"


def team_table(rows: Sequence[Row], width: int = WIDTH) -> Table:
    """Give the table of robots: task, specialization for each task as bars, battery, state.

    Where not all tasks find room, the bar is that of the robot's present task.
    """
    tasks = list(dict.fromkeys(task for row in rows for task in row.specialization))
    fits = 60 + len(tasks) * (BAR + 2) <= width
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, width=width)
    table.add_column("robot", no_wrap=True)
    table.add_column("task", no_wrap=True)
    for heading in map(heading_of, tasks if fits else ["able"]):
        table.add_column(heading, width=BAR, overflow="crop")
    table.add_column("battery", justify="right", no_wrap=True)
    table.add_column("state", overflow="ellipsis", no_wrap=True, ratio=1, min_width=8)
    for row in rows:
        shown = tasks if fits else [row.task]
        bars = [
            Text(bar(row.specialization.get(task, 0.0)), "bold cyan" if task == row.task else "dim")
            for task in shown
        ]
        state = Text(row.text or STATES[row.level], STYLES[min(row.level, 3)])
        table.add_row(row.robot, row.task or "–", *bars, percent(row.charge), state)
    return table


def heading_of(task: str) -> str:
    """Give a task's name over as many short lines as it has parts."""
    return "\n".join(part[:BAR] for part in task.split("_"))


def change_text(change: Change) -> Text:
    """Give one reallocation in colours."""
    text = Text(folded(str(change)))
    text.highlight_regex(r"\[\w+\]", "bold yellow")
    return text


def live_view(
    rows: Sequence[Row], changes: Sequence[Change], uncovered: str, progress: RenderableType,
    width: int = WIDTH, last: int = 8,
) -> Group:
    """Give the whole screen: robots, last reallocations, what is uncovered, progress."""
    state = (
        Text(f"uncovered: {uncovered}", "bold red") if uncovered
        else Text("every need is covered", "green")
    )
    shown = [change_text(change) for change in changes[-last:]]
    return Group(
        team_table(rows, width),
        Text("last reallocations", "bold"),
        *shown,
        *[Text("")] * (last - len(shown)),
        state,
        progress,
    )


def status_lines(t: float, rows: Iterable[Row], uncovered: str) -> str:
    """Give the state of the team without colours, within :data:`WIDTH` columns."""
    tasks = ", ".join(f"{row.robot}: {row.task or 'none'} ({percent(row.charge)})" for row in rows)
    return folded(f"{t:6.1f} s  {tasks}; uncovered: {uncovered or 'nothing'}")


def folded(text: str) -> str:
    """Give a text that starts with a time over lines of :data:`WIDTH` columns."""
    start = len(text) - len(text.lstrip())
    return textwrap.fill(
        text[start:], WIDTH, initial_indent=" " * start, subsequent_indent=" " * 10
    )


def facts_table(title: str, facts: Iterable[tuple[str, str]]) -> Table:
    """Give a table of plain facts."""
    table = Table(title=title, title_justify="left", show_header=False, box=None, pad_edge=False)
    table.add_column(style="bold", no_wrap=True)
    table.add_column(overflow="fold")
    for name, value in facts:
        table.add_row(name, escape(value))
    return table
