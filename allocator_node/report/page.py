"""The report: one HTML file that needs nothing else, and its pictures as PNG files."""

from __future__ import annotations

from collections import Counter
from html import escape
from pathlib import Path

from ..files.wording import counted
from .canvas import Picture
from .coverage import coverage
from .distances import distances
from .energy import energy
from .html import card, page, picture, table
from .site_map import site_map
from .specialization import specialization
from .story import Run, change, clock, meetings, why_short
from .timeline import timeline
from .timing import timing

FEW = 10
"""More starts than this are folded away, so that the changes are seen."""


def write_report(run: Run, directory: Path, title: str) -> Path:
    """Write report.html and its pictures into a directory, made if needed.

    Args:
        run: What happened.
        directory: Where to.
        title: What ran, for a heading.

    Returns:
        The path of report.html.

    Raises:
        OSError: Something cannot be written.
    """
    directory = Path(directory)
    directory.mkdir(parents=True, exist_ok=True)
    pictures = {
        drawn.name: drawn
        for make in (timeline, coverage, specialization, energy, site_map, distances, timing)
        if (drawn := make(run)) is not None
    }
    for drawn in pictures.values():
        (directory / f"{drawn.name}.png").write_bytes(drawn.png)
    path = directory / "report.html"
    path.write_text(page(title, _body(run, title, pictures)), "utf-8")
    return path


def _body(run: Run, title: str, pictures: dict[str, Picture]) -> list[str]:
    sections = [
        ("who", "Who did what", ["timeline"], [_events(run)]),
        ("covered", "What was covered", ["coverage"], [_shortfalls(run)]),
        ("able", "Who was able", ["specialization"], []),
        ("energy", "Energy", ["energy"], []),
        ("where", "Where they went", ["map", "distances"], [_meetings(run)]),
        ("loop", "Loop", ["timing"], []),
        ("noted", "What was noted", [], [_notices(run)]),
        ("figures", "All figures", [], [_figures(run)]),
    ]
    body = [f"<h1>{escape(title)}</h1>", _lead(run), _cards(run)]
    links = " ".join(f'<a href="#{key}">{name}</a>' for key, name, *_ in sections)
    body.append(f"<nav>{links}</nav>")
    for key, name, names, tables in sections:
        shown = [picture(p.png, p.alt, p.caption) for n in names if (p := pictures.get(n))]
        if names and not shown:
            shown = ['<p class="note">Nothing changed, or nothing of this was recorded.</p>']
        body += [f'<h2 id="{key}">{name}</h2>', *shown, *tables]
    return body


def _lead(run: Run) -> str:
    causes = Counter(e["cause"] for e in run["events"] if e["cause"] != "start")
    listed = ", ".join(f"{n} × {cause}" for cause, n in causes.most_common())
    after = f"{causes.total()} reallocations after the start: {listed}." if causes else (
        "No reallocation after the start."
    )
    return (
        f'<p class="lead">{len(run["robots"])} robots and {len(run["tasks"])} tasks for '
        f"{clock(run['seconds'])}. {after}</p>"
    )


def _cards(run: Run) -> str:
    worst = min(run["coverage"], key=run["coverage"].get, default=None)
    cards = []
    if worst is not None:
        share = run["coverage"][worst]
        full = share >= 1 - 1e-9
        label = "every task covered" if full else f"least covered task: {worst}"
        cards.append(card(label, f"{100 * share:.1f} %", not full))
    gap = run["min_separation_m"]
    if gap is not None:
        label = f"least distance of two bodies: {' and '.join(run['closest']['robots'])}"
        cards.append(card(label, f"{gap:.2f} m", gap <= 0))
    out = run["boundary_violations"]
    if out is not None:
        cards.append(card("times out of bounds", str(out), out > 0))
    if run["energy_wh"]:
        cards.append(card("used by all robots", f"{sum(run['energy_wh'].values()):.1f} Wh"))
    cards.append(card("to decide, 99 % below", f"{run['period_ms']['p99']:.1f} ms"))
    if run["finished"]:
        cards.append(card("finished", counted(len(run["finished"]), "task")))
    return f'<div class="cards">{"".join(cards)}</div>'


def _events(run: Run) -> str:
    numbered = list(enumerate(run["events"], start=1))
    starts = [(n, e) for n, e in numbered if e["cause"] == "start"]
    if len(starts) <= FEW:
        return _changes(numbered, "Reallocations and their reasons")
    later = [(n, e) for n, e in numbered if e["cause"] != "start"]
    return (
        _changes(later, "Reallocations after the start and their reasons")
        + f"<details><summary>{len(starts)} tasks were taken up at the start</summary>"
        + _changes(starts, "")
        + "</details>"
    )


def _changes(numbered: list[tuple[int, dict]], caption: str) -> str:
    rows = [
        (str(number), clock(e["t"]), e["task"], change(e), e["cause"], e["detail"])
        for number, e in numbered
    ]
    return table(
        ("no.", "when", "task", "change", "cause", "why"), rows, (0, 1), caption,
        tall=len(rows) > 40, ids=[f"event-{number}" for number, _ in numbered],
    )  # fmt: skip


def _shortfalls(run: Run) -> str:
    rows = [
        (clock(s["t"]), f"{s['until'] - s['t']:.1f} s", s["text"], why_short(run, s))
        for s in run["shortfalls"]
    ]
    if not rows:
        return '<p class="good">Every need was met all the time.</p>'
    return table(
        ("when", "for", "what was short", "after"), rows, (0, 1), "When and why tasks were short",
        tall=len(rows) > 40,
    )  # fmt: skip


def _meetings(run: Run) -> str:
    rows = [
        (chr(96 + n), clock(row[0]), f"{row[2]} and {row[3]}", f"{row[1]:.2f} m",
         f"({row[4]:.1f}, {row[5]:.1f})")
        for n, row in enumerate(meetings(run), start=1)
    ]  # fmt: skip
    if not rows:
        return "<p>No two bodies came within 2 m.</p>"
    return table(("", "when", "who", "distance", "where, m"), rows, (1, 3), "Nearest meetings")


def _notices(run: Run) -> str:
    rows = [
        (clock(n["t"]), f"{n['until'] - n['t']:.1f} s", n["about"], n["level"], n["text"])
        for n in run.get("notices") or []
    ]
    if not rows:
        return "<p>Nothing a person should have known.</p>"
    headings = ("when", "for", "about", "level", "what")
    return table(headings, rows, (0, 1), tall=len(rows) > 40)


def _figures(run: Run) -> str:
    tasks = [
        (task, f"{100 * run['coverage'].get(task, 1.0):.1f} %",
         f"{run['active_s'].get(task, 0):.0f} s",
         clock(run["finished"][task]) if task in run["finished"] else "",
         str(sum(e["task"] == task for e in run["events"])))
        for task in run["tasks"]
    ]  # fmt: skip
    done = Counter(row["robot"] for row in run["assignments"] if row["task"] is not None)
    capacity = run["site"]["capacity_wh"]
    robots = []
    for robot in run["robots"]:
        charge = run["charges"].get(robot)
        robots.append((
            robot, f"{run['energy_wh'].get(robot, 0.0):.1f}",
            f"{100 * charge[-1][1]:.0f} %" if charge else "", f"{capacity.get(robot, 0):g}",
            f"{_length(run['paths'].get(robot) or []):.0f}", str(done[robot]),
        ))  # fmt: skip
    return table(
        ("task", "covered", "active", "finished", "changes"), tasks, (1, 2, 3, 4), "Tasks"
    ) + table(
        ("robot", "used, Wh", "charge left", "capacity, Wh", "way, m", "tasks taken up"), robots,
        (1, 2, 3, 4, 5), "Robots", tall=len(robots) > 40,
    )  # fmt: skip


def _length(path: list[list[float]]) -> float:
    return sum(
        ((b[1] - a[1]) ** 2 + (b[2] - a[2]) ** 2) ** 0.5
        for a, b in zip(path, path[1:], strict=False)
    )
