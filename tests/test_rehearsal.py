"""Rehearsals: what run.json holds, and what happens on the solar farm."""

import json
from pathlib import Path

import pytest
from jsonschema import validate

from allocator_node.commands.team_rehearse import main
from allocator_node.sim.record import write_run
from allocator_node.sim.rehearsal import rehearse
from allocator_node.sim.world_file import read_world
from allocator_node.team_file import read_team

CONFIG = Path(__file__).parents[1] / "config"
TEAM, WORLD = CONFIG / "solar_farm.yaml", CONFIG / "solar_farm_world.yaml"

NAMES = {"type": "array", "items": {"type": "string"}}
NAME_OR_NONE = {"type": ["string", "null"]}
NUMBER = {"type": "number"}
NUMBERS = {"type": "object", "additionalProperties": NUMBER}
CAUSES = "start feature efficacy silent returned energy task pin cheaper".split()


def rows(**properties):
    """Schema of a list of objects with exactly these keys."""
    return {
        "type": "array",
        "items": {
            "type": "object",
            "properties": properties,
            "required": list(properties),
            "additionalProperties": False,
        },
    }


RUN = {
    "seconds": NUMBER,
    "robots": NAMES,
    "tasks": NAMES,
    "events": rows(
        t=NUMBER, task={"type": "string"}, **{"from": NAMES}, to=NAMES,
        cause={"enum": CAUSES}, detail={"type": "string", "minLength": 1},
    ),
    "assignments": rows(t=NUMBER, robot={"type": "string"}, task=NAME_OR_NONE),
    "coverage": {"additionalProperties": {"type": "number", "minimum": 0, "maximum": 1}},
    "finished": NUMBERS,
    "min_separation_m": {"type": ["number", "null"]},
    "boundary_violations": {"type": "integer"},
    "energy_wh": NUMBERS,
    "efficacy": rows(t=NUMBER, robot={"type": "string"}, task={"type": "string"}, value=NUMBER),
    "period_ms": {
        "type": "object",
        "properties": {"p50": NUMBER, "p99": NUMBER, "max": NUMBER},
        "required": ["p50", "p99", "max"],
    },
}


@pytest.fixture(scope="module")
def farm():
    team = read_team(TEAM)
    return team, rehearse(team, read_world(WORLD, team), seconds=180.0, seed=1)


def no_such_number(name):
    raise AssertionError(f"{name} is not JSON (RFC 8259, section 6)")


def test_run_json_holds_every_key_as_strict_json(farm, tmp_path):
    team, rehearsal = farm
    path = write_run(rehearsal, tmp_path / "deep" / "er")
    run = json.loads(path.read_text(), parse_constant=no_such_number)
    validate(run, {"type": "object", "properties": RUN, "required": list(RUN)})
    assert run["robots"] == list(team.robots)
    assert set(run["coverage"]) == set(team.tasks)
    assert run["seconds"] == 180.0


def test_assignments_follow_the_events(farm):
    """Groups replayed from the robots' changes are the groups the events name."""
    _, rehearsal = farm
    for event in rehearsal.events:
        task_of = {}
        for change in rehearsal.assignments:
            if change["t"] <= event["t"]:
                task_of[change["robot"]] = change["task"]
        group = sorted(robot for robot, task in task_of.items() if task == event["task"])
        assert group == event["to"], event


def test_each_mishap_on_the_solar_farm_is_met_for_the_right_reason(farm):
    _, rehearsal = farm

    def change(cause, task, since, until, left=None, joined=None):
        """Tell whether such a change is among the events."""
        return any(
            event["cause"] == cause and event["task"] == task and since <= event["t"] <= until
            and (left is None or left in set(event["from"]) - set(event["to"]))
            and (joined is None or joined in set(event["to"]) - set(event["from"]))
            for event in rehearsal.events
        )

    assert change("start", "north_rows", 0, 0.2)
    assert change("efficacy", "drain_watch", 5, 40, left="rover_3", joined="crawler_1")
    assert change("feature", "north_rows", 50, 50.2, left="rover_1")
    assert change("silent", "south_rows", 80.9, 81.5, left="rover_2")
    assert change("returned", "south_rows", 90, 90.5, joined="rover_2")
    assert change("energy", "north_rows", 120, 135, left="drone_1")
    assert change("task", "gate_watch", 145, 145.3)


def test_the_solar_farm_stays_covered_and_nobody_touches(farm):
    team, rehearsal = farm
    uncovered = {
        task: (1 - rehearsal.coverage[task]) * rehearsal.active_s[task] for task in team.tasks
    }
    assert max(uncovered.values()) <= 5.0, uncovered
    assert "cable_test" in rehearsal.finished
    assert rehearsal.min_separation_m > 0
    assert rehearsal.boundary_violations == rehearsal.body_violations == 0


def test_the_same_seed_gives_the_same_run():
    team = read_team(TEAM)
    world = read_world(WORLD, team)
    first, second = ({**vars(rehearse(team, world, 12.0, seed=4))} for _ in range(2))
    for run in (first, second):
        del run["period_ms"], run["decision_ms"]
    assert first == second


def test_a_wrong_file_starts_nothing(tmp_path, capsys):
    wrong = tmp_path / "team.yaml"
    wrong.write_text("robots: {r1: {drive: {model: hover}}}\n")
    out = tmp_path / "out"
    assert main([str(wrong), "--seconds", "5", "--out", str(out)]) == 2
    assert str(wrong) in capsys.readouterr().err
    assert not out.exists()


def test_the_command_leaves_a_run_and_says_what_happened(tmp_path, capsys):
    out = tmp_path / "out"
    assert main([str(TEAM), str(WORLD), "--seconds", "3", "--out", str(out), "--seed", "2"]) == 0
    said = capsys.readouterr().out
    assert "north_rows" in said and "least separation" in said and "\x1b" not in said
    assert json.loads((out / "run.json").read_text())["seconds"] == 3.0
