"""The findings as tables a person can read in a terminal of 100 columns."""

from __future__ import annotations

import string
from collections.abc import Iterable, Iterator, Sequence
from itertools import groupby

from rich import box
from rich.console import RenderableType
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

from ..team import Team
from .findings import Findings
from .losses import Loss, Outcome
from .room import Tight
from .suitability import Fit

CELL = 10
"""Least width of a task's column in the matrix, with its gap."""

LISTED = 12
"""Names listed before the rest is only counted."""


def parts(findings: Findings, width: int = 100) -> Iterator[RenderableType]:
    """Give what to print, in order: the verdict first."""
    yield verdict(findings)
    yield from _suitability(findings, width)
    yield _start(findings)
    yield from _losses(findings)
    if findings.pairs is not None:
        yield _pairs(findings.pairs)
    yield _extras(findings)
    yield from _endurance(findings)
    yield from _stopping(findings)
    if findings.tight:
        yield _tight(findings.tight)
    if findings.unwatched:
        named = (f"{robot}: {feature}" for robot, feature in findings.unwatched)
        yield _note(f"No diagnostic speaks for {listed(named)}.")


def verdict(findings: Findings) -> Text:
    """Give the answer in a line or two."""
    team, harmful = findings.team, findings.harmful
    text = Text(f"{len(team.robots)} robots, {len(team.tasks)} tasks. ")
    if findings.shortfalls:
        text.append("Not covered at the start: ", "bold red")
        text.append(listed(map(str, findings.shortfalls)) + ". ")
    else:
        text.append("Covered at the start. ", "bold green")
    count = len(findings.losses)
    if harmful:
        tasks = dict.fromkeys(task for outcome in harmful for task in outcome.uncovered)
        text.append(f"{len(harmful)} of {count} single losses leave a task uncovered", "bold red")
        text.append(f": {listed(tasks)}.")
    else:
        text.append(f"None of {count} single losses leaves a task uncovered.", "bold green")
    return text


def listed(names: Iterable[str], most: int = LISTED) -> str:
    """Give names in a row, the rest of many only counted."""
    names = list(names)
    more = f" and {len(names) - most} more" if len(names) > most else ""
    return ", ".join(names[:most]) + more


def letters(team: Team) -> dict[str, list[str]]:
    """Give each way of each capability a letter of its own; after z comes aa."""
    names = (a + b for a in ("", *string.ascii_lowercase) for b in string.ascii_lowercase)
    return {
        capability: [next(names) for _ in ways] for capability, ways in team.capabilities.items()
    }


def cell(fit: Fit, way_letters: dict[str, list[str]], starts: bool) -> Text:
    """Give a suitability with the letters of its ways, bold where the robot starts."""
    if fit.suitability <= 0:
        return Text("·", "dim")
    ways = "".join(way_letters[capability][way] for capability, way in fit.ways.items())
    text = Text(f"{fit.suitability:.2f} {ways}".rstrip())
    if starts:
        text = Text(f"▶{text}", "bold cyan")
    elif not fit.able:
        text.stylize("dim")
    return text


def _suitability(findings: Findings, width: int) -> Iterator[RenderableType]:
    team = findings.team
    way_letters = letters(team)
    starts = {(place.robot, place.task) for place in findings.start}
    rows = list(_alike(findings.fits, starts))
    first = max([len(label) for label, _ in rows] + [5])
    fits_in = max((width - first - 2) // CELL, 1)
    tasks = list(team.tasks)
    for begin in range(0, len(tasks), fits_in):
        block = range(begin, min(begin + fits_in, len(tasks)))
        title = "Suitability" if begin == 0 else "Suitability, more tasks"
        table = _table(title)
        table.add_column("robot", no_wrap=True)
        for m in block:
            table.add_column(tasks[m].replace("_", "\n"), justify="right", no_wrap=True)
        for label, row in rows:
            table.add_row(label, *(
                cell(row[m], way_letters, (row[m].robot, row[m].task) in starts) for m in block
            ))  # fmt: skip
        yield table
    if team.capabilities:
        ways = Table.grid(padding=(0, 2))
        for capability, options in team.capabilities.items():
            named = (
                f"{letter} = {' + '.join(way.features)} ({way.grade:g})"
                for letter, way in zip(way_letters[capability], options, strict=True)
            )
            ways.add_row(capability, ", ".join(named))
        yield Padding(ways, (0, 0, 0, 2))
    yield _note("▶ would start there; · is not able.")


def _alike(
    rows: Sequence[Sequence[Fit]], starts: set[tuple[str, str]]
) -> Iterator[tuple[str, Sequence[Fit]]]:
    """Give labelled rows; in a large team neighbours that are alike share one."""
    if len(rows) <= 24:
        yield from ((row[0].robot if row else "", row) for row in rows)
        return

    def looks(row: Sequence[Fit]) -> tuple:
        return tuple(
            (f.suitability, tuple(f.ways.items()), (f.robot, f.task) in starts) for f in row
        )

    for _, group in groupby(rows, looks):
        group = list(group)
        more = f" … {group[-1][0].robot}" if len(group) > 1 else ""
        yield group[0][0].robot + more, group[0]


def _start(findings: Findings) -> Table:
    table = _table("Who would start where")
    for heading in ("task", "robot"):
        table.add_column(heading, no_wrap=True)
    for heading in ("way", "energy"):
        table.add_column(heading, justify="right", no_wrap=True)
    table.add_column("why", overflow="fold")
    order = list(findings.team.tasks)
    lacking = {shortfall.task for shortfall in findings.shortfalls}
    for place in sorted(findings.start, key=lambda place: order.index(place.task)):
        table.add_row(
            place.task, place.robot, f"{place.distance_m:.1f} m", f"{place.energy_wh:.2f} Wh",
            place.why,
        )  # fmt: skip
    for shortfall in findings.shortfalls:
        table.add_row(shortfall.task, "", "", "", Text(str(shortfall), "red"))
    busy = {place.task for place in findings.start} | lacking
    for task in findings.waiting:
        if task not in busy:
            why = findings.team.tasks[task].after
            text = f"waits for {', '.join(why)}" if why else "not active"
            table.add_row(task, "", "", "", Text(text, "dim"))
    return table


def _losses(findings: Findings) -> Iterator[RenderableType]:
    told = [o for o in findings.losses if o.harm or o.steps]
    if told:
        yield _outcomes("Single losses that matter", told)
    same = len(findings.losses) - len(told)
    docks = any(outcome.loss.kind == "dock" for outcome in findings.losses)
    late = " A lost dock tells once the batteries are spent." if docks else ""
    yield _note(f"{same} other losses change nothing.{late}")


def _pairs(pairs: Sequence[Outcome]) -> RenderableType:
    if not pairs:
        return _note("No two robots leave more uncovered together than each alone.")
    return _outcomes("Pairs of robots worse than either alone", pairs)


def _outcomes(title: str, outcomes: Sequence[Outcome]) -> Table:
    """Give a table of losses; those of one robot with one outcome share a row."""
    table = _table(title)
    table.add_column("what is lost", overflow="fold", min_width=20)
    table.add_column("leaves uncovered", overflow="fold", min_width=18)
    table.add_column("who steps in", overflow="fold")
    rows: dict[tuple, list[Outcome]] = {}
    for outcome in outcomes:
        rows.setdefault((outcome.loss.robots, harm(outcome), _steps(outcome)), []).append(outcome)
    for (_, lacks, steps), alike in rows.items():
        table.add_row(
            Text(lost([outcome.loss for outcome in alike]), "bold" if lacks else ""),
            Text(lacks, "bold red") if lacks else Text("nothing", "green"),
            steps,
        )
    return table


def lost(losses: Sequence[Loss]) -> str:
    """Name losses that concern the same robots, in one breath."""
    robots = ", ".join(losses[0].robots)
    kinds = [loss.kind for loss in losses]
    features = ", ".join(loss.feature for loss in losses if loss.kind == "feature")
    if "dock" in kinds:
        features += ", dock" if features else "dock"
    if "robot" in kinds or "pair" in kinds:
        return f"{robots}; or its {features}" if features else robots
    return f"{robots}: {features}"


def _extras(findings: Findings) -> RenderableType:
    extras = findings.extras
    if extras is None:
        return _note("Too many weak points to search for the extra feature that helps most.")
    if not extras:
        if findings.covered:
            return _note("No weak point for an extra feature to remove.")
        return _note("No single extra feature removes a weak point.")
    table = _table("Extra features that would help most")
    table.add_column("add")
    table.add_column("to", overflow="fold")
    table.add_column("removes", justify="right")
    alike: dict[tuple, list[str]] = {}
    for extra in extras:
        alike.setdefault((extra.feature, extra.removed, extra.of), []).append(extra.robot)
    for (feature, removed, of), robots in alike.items():
        table.add_row(feature, " or ".join(robots), f"{removed} of {of} weak points")
    return table


def _endurance(findings: Findings) -> Iterator[RenderableType]:
    if not findings.endurance:
        return
    table = _table("How long standing tasks can be held")
    table.add_column("task")
    table.add_column("by")
    table.add_column("on one charge", justify="right")
    table.add_column("for ever, at best", justify="right")
    for one in findings.endurance:
        hours = "–" if one.hours is None else f"{one.hours:.1f} h"
        share = Text(f"{100 * one.share:.0f} %", "" if one.share > 0.995 else "yellow")
        table.add_row(one.task, listed(one.robots, 4) or "nobody", hours, share)
    yield table
    yield _note(
        "For ever: taking turns at the docks, one robot at each, charged as charge_w says."
    )


def _stopping(findings: Findings) -> Iterator[RenderableType]:
    table = _table("Stopping distance against the margin")
    table.add_column("robots", overflow="fold")
    for heading in ("speed", "reacts in", "brakes in", "margin"):
        table.add_column(heading, justify="right", no_wrap=True)
    table.add_column("")

    def figures(one: object) -> tuple:
        return (one.within, one.speed, one.reaction_m, one.braking_m, one.safe_speed)

    for _, group in groupby(sorted(findings.stopping, key=figures), figures):
        group = list(group)
        one = group[0]
        advice = Text("stands in time", "green") if one.within else Text(
            f"too fast: {int(100 * one.safe_speed + 1e-6) / 100:.2f} m/s would do", "yellow"
        )
        table.add_row(
            listed((each.robot for each in group), 4), f"{one.speed:g} m/s",
            f"{one.reaction_m:.2f} m", f"{one.braking_m:.2f} m" if one.braking_m else "?",
            f"{one.margin_m:.2f} m", advice,
        )  # fmt: skip
    yield table
    assumed = findings.assumed
    unknown = any(not one.braking_m for one in findings.stopping)
    yield _note(
        f"Reacts: {1000 / assumed.rate:.0f} ms period (--rate) + {1000 * assumed.latency:.0f} ms "
        "latency (--latency)."
        + (" Brakes ?: no max_acceleration given, so braking is not counted." if unknown else "")
    )


def _tight(tight: Sequence[Tight]) -> Table:
    """Give a table of places too near to an edge; robots kept from them alike share a row."""
    table = _table("Too near to the boundary or a keep-out area")
    table.add_column("place")
    table.add_column("robots", overflow="fold")
    for heading in ("should come within", "margin lets it come within"):
        table.add_column(heading, justify="right")

    def figures(one: Tight) -> tuple[str, str, str]:
        return (one.place, f"{one.within_m:.2f} m", f"{one.kept_m:.2f} m")

    for (place, within, kept), alike in groupby(sorted(tight, key=figures), figures):
        robots = listed((one.robot for one in alike), 4)
        table.add_row(place, robots, within, Text(kept, "yellow"))
    return table


def harm(outcome: Outcome) -> str:
    """Say what a loss leaves uncovered, each task once; "" where nothing."""
    parts = []
    for task in outcome.uncovered:
        lacks = [str(s).removeprefix(f"{task} lacks ") for s in outcome.harm if s.task == task]
        parts.append(f"{task} lacks {', '.join(lacks)}")
    return "; ".join(parts)


def _steps(outcome: Outcome) -> str:
    return "\n".join(f"{' + '.join(robots)} → {task}" for task, robots in outcome.steps.items())


def _table(title: str) -> Table:
    return Table(
        title=Text(title, "bold"), title_justify="left", box=box.SIMPLE_HEAD, pad_edge=False,
        title_style="bold",
    )  # fmt: skip


def _note(text: str) -> Padding:
    return Padding(Text(text, "dim"), (0, 0, 0, 2))
