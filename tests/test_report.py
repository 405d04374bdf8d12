"""Reports: one file that needs no other, readable by all, for 3 robots and for 100."""

from __future__ import annotations

import itertools
import json
import re
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest
from rich.text import Text

from allocator_node.commands.team_rehearse import main
from allocator_node.report.html import of_terminal, table
from allocator_node.report.page import write_report
from allocator_node.report.palette import COLOURS, look
from allocator_node.report.story import change, meetings, stints, turns, why_short

CONFIG = Path(__file__).parents[1] / "config"
TEAM, WORLD = CONFIG / "solar_farm.yaml", CONFIG / "solar_farm_world.yaml"
VOID = {"meta", "img", "br"}


class Page(HTMLParser):
    """Tags that are open, images, links, anchors, and the text of a page."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.open: list[str] = []
        self.images: list[dict] = []
        self.targets: set[str] = set()
        self.links: set[str] = set()
        self.text = ""
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list) -> None:
        values = dict(attrs)
        if tag not in VOID:
            self.open.append(tag)
        if tag == "img":
            self.images.append(values)
        if "id" in values:
            self.targets.add(values["id"])
        self.links.add(values.get("href") or values.get("src") or "")

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        self.text += data


def invented(robots: int, tasks: int, seconds: float = 120.0) -> dict:
    """Give a run of so many robots that never was, with something of everything."""
    names, work = [f"r{i}" for i in range(robots)], [f"t{m}" for m in range(tasks)]
    return {
        "seconds": seconds, "robots": names, "tasks": work,
        "events": [
            {"t": 0.0, "task": work[0], "from": [], "to": [names[0]], "cause": "start",
             "detail": "r0 reported for the first time"},
            {"t": 40.0, "task": work[0], "from": [names[0]], "to": [], "cause": "silent",
             "detail": "r0 is <silent> & gone"},
            {"t": 50.0, "task": work[0], "from": [], "to": [names[1]], "cause": "returned",
             "detail": "r1 is heard again"},
        ],
        "assignments": [
            {"t": 0.0, "robot": names[0], "task": work[0]},
            {"t": 40.0, "robot": names[0], "task": None},
            {"t": 50.0, "robot": names[1], "task": work[0]},
        ],
        "coverage": {task: 1.0 for task in work} | {work[0]: 110 / 120},
        "active_s": dict.fromkeys(work, seconds), "finished": {work[-1]: 60.0},
        "shortfalls": [{"t": 40.0, "until": 50.0, "task": work[0], "text": "t0 lacks 1 robot"}],
        "min_separation_m": 0.4, "closest": {"t": 30.0, "robots": names[:2]},
        "boundary_violations": 0, "body_violations": 0,
        "energy_wh": dict.fromkeys(names, 3.0),
        "efficacy": [], "period_ms": {"p50": 1.0, "p99": 2.0, "max": 3.0},
        "paths": {name: [[t, t / 10 + n, n, 0, 0] for t in (0.0, 60.0, 120.0)]
                  for n, name in enumerate(names)},
        "charges": {name: [[0.0, 1.0], [120.0, 0.9]] for name in names},
        "notices": [{"t": 40.0, "until": 50.0, "about": "r0", "level": "warn", "text": "gone"}],
        "silent": [{"t": 40.0, "until": 50.0, "robot": "r0"}],
        "specialization": [{"t": 0.0, "robot": "r0", "task": work[0], "value": 1.0},
                           {"t": 20.0, "robot": "r0", "task": work[0], "value": 0.3}],
        "nearest": [[float(t), 0.4 + abs(t - 30) / 10, *names[:2], 1.0, 2.0]
                    for t in range(0, 120, 5)],
        "decision_ms": [[float(t), 2.0 + t % 3] for t in range(120)],
        "site": {
            "frame": "site", "boundary": [[-2, -2], [120, -2], [120, 120], [-2, 120]],
            "keep_out": [{"name": "shed", "polygon": [[5, 5], [9, 5], [9, 9]]}],
            "radius": dict.fromkeys(names, 0.4), "dock": dict.fromkeys(names, (0.0, 0.0)),
            "capacity_wh": dict.fromkeys(names, 500.0), "reserve": dict.fromkeys(names, 0.2),
            "needs": {},
        },
    }  # fmt: skip


@pytest.mark.parametrize(("robots", "tasks"), [(3, 2), (100, 40)])
def test_the_report_is_one_file_that_needs_no_other(robots, tasks, tmp_path) -> None:
    text = write_report(invented(robots, tasks), tmp_path, "A <run> & more").read_text("utf-8")
    page = Page(text)
    assert page.open == []
    # Everything it shows is in it, and every link leads to somewhere in it.
    assert not re.search(r'(src|href)=(?!"(data:|#))', text) and "@import" not in text
    assert "http:" not in text and "https:" not in text
    assert {link[1:] for link in page.links if link.startswith("#")} <= page.targets
    assert len(page.images) == 7
    assert all(len(image["alt"]) > 20 for image in page.images)
    assert "A <run> & more" in page.text and "r0 is <silent> & gone" in page.text
    names = {path.stem for path in tmp_path.glob("*.png")}
    assert names == {"timeline", "coverage", "specialization", "energy", "map", "distances",
                     "timing"}  # fmt: skip


def test_the_story_is_told_from_the_data() -> None:
    run = invented(3, 2)
    assert stints(run) == {"r0": [(0.0, 40.0, "t0")], "r1": [(50.0, 120.0, "t0")], "r2": []}
    assert [t for t, _ in turns(run)] == [0.0, 40.0, 50.0]
    assert [change(event) for event in run["events"]] == ["+ r0", "− r0", "+ r1"]
    assert why_short(run, run["shortfalls"][0]) == "no. 2, [silent] r0 is <silent> & gone"
    (meeting,) = meetings(run)
    assert meeting[:2] == [30.0, 0.4]


def test_a_run_in_which_nothing_happened_is_reported_too(tmp_path) -> None:
    run = invented(3, 2) | {
        "events": [], "assignments": [], "shortfalls": [], "nearest": [], "specialization": [],
        "decision_ms": [], "notices": [], "silent": [], "finished": {}, "min_separation_m": None,
        "closest": None, "paths": {}, "charges": {}, "coverage": {}, "active_s": {},
    }  # fmt: skip
    assert "No reallocation" in write_report(run, tmp_path, "quiet").read_text("utf-8")


def lightness(colour: str) -> float:
    """Give L* of a colour (CIE 1976, from sRGB by IEC 61966-2-1; both from memory)."""
    part = np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)]) / 255
    linear = np.where(part <= 0.04045, part / 12.92, ((part + 0.055) / 1.055) ** 2.4)
    y = float(linear @ [0.2126, 0.7152, 0.0722])
    return 116 * y ** (1 / 3) - 16 if y > 0.008856 else 903.3 * y


def test_looks_are_told_apart_in_grey() -> None:
    """Two tasks differ in hatch, or clearly in lightness (5 of 100 L* and more)."""
    looks = [look(number) for number in range(len(COLOURS) ** 2)]
    for one, other in itertools.combinations(looks[: len(COLOURS)], 2):
        assert one.hatch != other.hatch and one.line != other.line
    pairs = {(one.colour, one.hatch) for one in looks}
    assert len(pairs) == len(looks)
    assert all(abs(lightness(one.stroke) - 100) > 20 for one in looks)  # lines on white


def test_tables_and_texts_are_escaped() -> None:
    assert "<script>" not in table(("<script>",), [("<script>",)])
    assert of_terminal(Text("a < b", "red")) == '<p><span class="red">a &lt; b</span></p>'


def test_a_rehearsal_leaves_its_report(tmp_path, capsys) -> None:
    out = tmp_path / "out"
    assert main([str(TEAM), str(WORLD), "--seconds", "3", "--out", str(out)]) == 0
    assert "report.html" in capsys.readouterr().out
    page = Page((out / "report.html").read_text("utf-8"))
    events = json.loads((out / "run.json").read_text("utf-8"))["events"]
    assert events and all(event["detail"] in page.text for event in events)
