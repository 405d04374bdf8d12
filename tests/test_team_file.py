"""Right files: what they are read as, the defaults, and edits of the task table."""

from __future__ import annotations

import dataclasses
import math

import pytest
import yaml
from hypothesis import given, settings
from hypothesis import strategies as st

from allocator_node.drives import Aerial, Differential, Holonomic
from allocator_node.files import plugins
from allocator_node.files.document import parse_document
from allocator_node.files.free_space import overlap
from allocator_node.files.team_checks import LONGEST_TOPIC, TOPIC
from allocator_node.sim.world_file import (
    BatteryEvent,
    FeatureEvent,
    GroundPatch,
    Noise,
    PoseEvent,
    StalledEvent,
    TaskEvent,
    World,
    parse_world,
)
from allocator_node.tasks import Patrol, Visit, Watch
from allocator_node.team import (
    Battery,
    CommandSink,
    HeadCount,
    HealthRule,
    KeepOut,
    PoseSource,
    Way,
)
from allocator_node.team_file import merge_tasks, parse_team, read_team

FARM = """\
frame: site                      # fixed frame of every pose and goal (REP 105)
boundary: [[0, 0], [80, 0], [80, 50], [0, 50]]        # optional polygon, m
keep_out:
  - {name: inverter_shed, polygon: [[30, 20], [36, 20], [36, 24], [30, 24]]}
capabilities:
  thermal_scan:
    - {with: [thermal_camera, gimbal], grade: 1.0}
    - {with: [thermal_camera], grade: 0.6}
  rough_ground: [{with: [tracks]}, {with: [rotors]}]  # grade defaults to 1
robots:
  rover_1:
    drive: {model: differential, max_speed: 1.2, max_turn_rate: 1.5, lookahead: 0.25}
    radius: 0.45
    features: [wheels, thermal_camera, gimbal]
    battery: {capacity_wh: 480, reserve: 0.2, idle_w: 30, drive_w: 160}
    dock: [2, 2]
    start: [4, 3, 0]             # x, y, heading: where simulation and rehearsal put it
    pose: {topic: rover_1/odom, type: nav_msgs/msg/Odometry}
    command: {topic: rover_1/cmd_vel, type: geometry_msgs/msg/TwistStamped}
    battery_topic: rover_1/battery_state
    health: [{name: "rover_1: thermal camera", feature: thermal_camera}]
  drone_1:
    drive: {model: aerial, max_speed: 3, cruise_speed: 2, height: [5, 9]}
    features: [rotors]
    start: [8, 3, 1.57]
    pose: {tf: drone_1/base_link}
    command: {type: geometry_msgs/msg/Twist}
  omni_1:
    drive: {model: holonomic, max_speed: 1e0}
    pose: {topic: /omni_1/amcl, type: geometry_msgs/msg/PoseWithCovarianceStamped,
           frame: omni_1/odom, offset: [1, 2, 0.5]}
tasks:
  north_rows:
    kind: patrol
    waypoints: [[10, 40], [70, 40], [70, 44], [10, 44]]
    needs: {thermal_scan: 1.0}
    each: []
    robots: {min: 1, max: 2}
    priority: 2                  # 0..4, each class before all below it
    urgency: 50                  # W, optional
    after: []                    # tasks that must be finished first
  shed:
    kind: visit
    at: [29, 22, 6]
    heading: -1
    dwell: 5
  gate: {kind: watch, at: [70, 8], face: [79, 8], each: [rough_ground], after: [shed]}
"""


@pytest.fixture(scope="module")
def farm():
    return parse_team(FARM)


def test_site_and_capabilities(farm):
    assert farm.frame == "site"
    assert farm.boundary == ((0, 0), (80, 0), (80, 50), (0, 50))
    assert farm.keep_out == (KeepOut("inverter_shed", ((30, 20), (36, 20), (36, 24), (30, 24))),)
    assert farm.capabilities == {
        "thermal_scan": (Way(("thermal_camera", "gimbal")), Way(("thermal_camera",), 0.6)),
        "rough_ground": (Way(("tracks",)), Way(("rotors",))),
    }


def test_a_robot_with_every_key(farm):
    robot = farm.robots["rover_1"]
    assert robot.name == "rover_1"
    assert robot.drive == Differential(max_speed=1.2, max_turn_rate=1.5, lookahead=0.25)
    assert robot.radius == 0.45
    assert robot.features == ("wheels", "thermal_camera", "gimbal")
    assert robot.battery == Battery(480, 0.2, 30, 160)
    assert (robot.dock, robot.start) == ((2, 2), (4, 3, 0))
    assert robot.pose == PoseSource("rover_1/odom")
    assert robot.command == CommandSink("rover_1/cmd_vel")
    assert robot.battery_topic == "rover_1/battery_state"
    assert robot.health == (HealthRule("rover_1: thermal camera", "thermal_camera"),)


def test_other_ways_to_say_where_a_robot_is(farm):
    drone, omni = farm.robots["drone_1"], farm.robots["omni_1"]
    assert drone.drive == Aerial(max_speed=3, cruise_speed=2, height=(5, 9))
    assert drone.pose.tf == "drone_1/base_link" and drone.pose.topic is None
    assert drone.command == CommandSink("drone_1/cmd_vel", "geometry_msgs/msg/Twist")
    assert omni.drive == Holonomic(max_speed=1.0)
    assert (omni.pose.frame, omni.pose.offset) == ("omni_1/odom", (1, 2, 0.5))


def test_tasks(farm):
    assert list(farm.tasks) == ["north_rows", "shed", "gate"]
    assert farm.tasks["north_rows"] == Patrol(
        name="north_rows",
        waypoints=((10, 40), (70, 40), (70, 44), (10, 44)),
        needs={"thermal_scan": 1.0},
        robots=HeadCount(1, 2),
        urgency=50,
    )
    assert farm.tasks["shed"] == Visit(name="shed", at=(29, 22, 6), heading=-1, dwell=5)
    assert farm.tasks["gate"] == Watch(
        name="gate", at=(70, 8), face=(79, 8), each=("rough_ground",), after=("shed",)
    )


def test_a_short_file_works():
    team = parse_team("robots: {a: {drive: {model: differential, max_speed: 1}}}")
    robot = team.robots["a"]
    assert (team.frame, team.boundary, team.tasks, team.capabilities) == ("map", None, {}, {})
    assert (robot.pose.topic, robot.command.topic) == ("a/odom", "a/cmd_vel")
    assert (robot.battery_topic, robot.health) == ("a/battery_state", ())


def test_empty_sections_are_like_none():
    team = parse_team("robots: {a: {drive: {model: holonomic, max_speed: 1}}}\ntasks:\n"
                      "capabilities:\n")
    assert (team.tasks, team.capabilities) == ({}, {})


def test_a_file_on_disk_and_its_byte_order_mark(tmp_path, farm):
    path = tmp_path / "farm.yaml"
    path.write_bytes(b"\xef\xbb\xbf" + FARM.encode())
    assert read_team(path) == farm


def test_aliases_share_a_value():
    team = parse_team(
        "robots:\n  a: {drive: &d {model: holonomic, max_speed: 2}}\n  b: {drive: *d}\n"
    )
    assert team.robots["b"].drive == team.robots["a"].drive == Holonomic(max_speed=2)


@pytest.mark.parametrize("site", ["", "boundary: [[0, 0], [9, 0], [9, 30], [0, 30]]\nkeep_out: "
                                      "[{name: a, polygon: [[0, 0], [4, 0], [4, 6], [0, 6]]}]\n"])
def test_missing_starts_are_put_where_there_is_room(site):
    robots = "".join(
        f"  r{i}: {{drive: {{model: holonomic, max_speed: 1}}, radius: {0.3 + 0.1 * (i % 9)}"
        + (", start: [7, 1, 0]}\n" if i == 3 else "}\n")
        for i in range(20)
    )
    team = parse_team(f"{site}robots:\n{robots}")
    discs = [(*robot.start[:2], robot.radius) for robot in team.robots.values()]
    assert team.robots["r3"].start == (7, 1, 0)
    assert not any(overlap(one, other) for i, one in enumerate(discs) for other in discs[:i])
    written = "".join(
        f"  {name}: {{drive: {{model: holonomic, max_speed: 1}}, radius: {robot.radius}, "
        f"start: {list(robot.start)}}}\n"
        for name, robot in team.robots.items()
    )
    assert parse_team(f"{site}robots:\n{written}") == team, "places found would do in a file"


def test_starts_in_a_row_on_an_open_site():
    robots = "".join(f"  r{i}: {{drive: {{model: holonomic, max_speed: 1}}}}\n" for i in range(3))
    starts = [robot.start for robot in parse_team(f"robots:\n{robots}").robots.values()]
    assert starts == [(0, 0, 0), (2, 0, 0), (4, 0, 0)]


def test_a_hundred_robots():
    robots = "".join(
        f"  r{i}: {{drive: {{model: differential, max_speed: 1}}, features: [camera],"
        f" start: [{2 * i}, 0, 0], health: [{{name: r{i}, feature: camera}}]}}\n"
        for i in range(100)
    )
    assert len(parse_team(f"robots:\n{robots}").robots) == 100


# --- edits of the task table ---------------------------------------------------------------


def test_an_edit_changes_adds_and_takes_out(farm):
    edited = merge_tasks(
        farm,
        "north_rows: {robots: {min: 2}, priority: 3}\n"
        "gate: null\n"
        "dock_check: {kind: visit, at: [3, 3], after: [shed]}\n",
    )
    assert list(edited.tasks) == ["north_rows", "shed", "dock_check"]
    north = farm.tasks["north_rows"]
    assert edited.tasks["north_rows"] == dataclasses.replace(
        north, robots=HeadCount(2), priority=3
    )
    assert edited.tasks["shed"] is farm.tasks["shed"]
    assert edited.tasks["dock_check"] == Visit(name="dock_check", at=(3, 3), after=("shed",))
    assert edited.robots is farm.robots
    assert "gate" in farm.tasks, "the team before is as it was"


def test_an_edit_can_take_a_key_back_and_write_a_task_anew(farm):
    assert merge_tasks(farm, "gate: {face: null}").tasks["gate"].face is None
    anew = merge_tasks(farm, "north_rows: {kind: watch, at: [10, 40]}").tasks["north_rows"]
    assert anew == Watch(name="north_rows", at=(10, 40))


@pytest.mark.parametrize("text", ["", "# nothing\n", "{}", "north_rows: {}"])
def test_an_edit_without_a_change(farm, text):
    assert merge_tasks(farm, text) == farm


def test_every_edit_that_repeats_the_file_changes_nothing(farm):
    tasks = FARM.partition("tasks:\n")[2]
    assert merge_tasks(farm, tasks) == farm
    assert merge_tasks(farm.with_tasks({}), tasks) == farm


# --- world files ---------------------------------------------------------------------------


def test_a_world_with_everything(farm):
    world = parse_world(
        """\
noise: {position_m: 0.02, heading_rad: 0.01}
ground:
  - {name: washout, circle: [55, 41, 6], keeps: 0.05, affects: [wheels]}
events:
  - {at: 95, task: north_rows, active: false}
  - {at: 40, robot: rover_1, feature: thermal_camera, level: warn}
  - {at: 41, robot: rover_1, feature: gimbal}
  - {at: 60, robot: drone_1, pose: silent}
  - {at: 80, robot: omni_1, battery: 0.18}
  - {at: 90, robot: omni_1, stalled: true}
  - {at: 99, task: gate, move: [60, 8]}
""",
        farm,
    )
    assert world == World(
        noise=Noise(0.02, 0.01),
        ground=(GroundPatch("washout", (55, 41, 6), 0.05, ("wheels",)),),
        events=(
            FeatureEvent(40, "rover_1", "thermal_camera", "warn"),
            FeatureEvent(41, "rover_1", "gimbal", "error"),
            PoseEvent(60, "drone_1", "silent"),
            BatteryEvent(80, "omni_1", 0.18),
            StalledEvent(90, "omni_1", True),
            TaskEvent(95, "north_rows", active=False),
            TaskEvent(99, "gate", move=(60, 8)),
        ),
    )


@pytest.mark.parametrize("text", ["", "{}", "events:\n", "noise: {}"])
def test_an_empty_world(farm, text):
    assert parse_world(text, farm) == World()


# --- other packages ------------------------------------------------------------------------


@dataclasses.dataclass(frozen=True, kw_only=True)
class Hover(Visit):
    """A task kind of another package."""

    kind = "hover"

    wobble: float = 0.1


class HoverEntry:
    name, value, group, dist = "hover", "x:Hover", "allocator_node.tasks", None

    @staticmethod
    def load():
        return Hover


def test_a_task_kind_of_another_package(monkeypatch):
    monkeypatch.setattr(plugins, "_entries", lambda g: (HoverEntry,) if "tasks" in g else ())
    team = parse_team(
        "robots: {a: {drive: {model: holonomic, max_speed: 1}}}\n"
        "tasks: {h: {kind: hover, at: [1, 2], wobble: 0.3}}"
    )
    assert team.tasks["h"] == Hover(name="h", at=(1, 2), wobble=0.3)


# --- against outside sources ---------------------------------------------------------------

CORE_SCHEMA = {
    # YAML 1.2.2, section 10.3.2, the table of tag resolution and its example (from memory).
    "null": None, "~": None, "true": True, "True": True, "false": False, "FALSE": False,
    "0": 0, "0o7": 7, "0x3A": 58, "-19": -19, "+12": 12,
    "0.": 0.0, "-0.0": -0.0, ".5": 0.5, "+12e03": 12000.0, "-2E+05": -200000.0, "1e3": 1000.0,
    ".inf": math.inf, "-.Inf": -math.inf, "+.INF": math.inf,
    # Text in 1.2, though something else in YAML 1.1.
    "no": "no", "yes": "yes", "on": "on", "Off": "Off", "1_000": "1_000", "1:30": "1:30",
    "2024-01-31": "2024-01-31", "nULL": "nULL",
    # Octal in 1.1, decimal in 1.2.
    "012": 12,
}


@pytest.mark.parametrize(("written", "value"), CORE_SCHEMA.items())
def test_scalars_follow_yaml_1_2(written, value):
    read = parse_document(f"a: {written}", "text").value["a"]
    assert read == value and type(read) is type(value)
    assert parse_document(f"a: '{written}'", "text").value["a"] == written


def test_not_a_number_of_yaml_1_2():
    assert math.isnan(parse_document("a: .NAN", "text").value["a"])


def test_structure_against_a_general_yaml_reader():
    """Where YAML 1.1 and 1.2 agree, the general reader of PyYAML sees the same."""

    def listed(value):
        if isinstance(value, dict):
            return {key: listed(item) for key, item in value.items()}
        return [listed(item) for item in value] if isinstance(value, tuple) else value

    text = FARM.replace("1e0", "1.0") + 'more: &m {"a b": |\n  two\n  lines\n\n}\n'.replace(
        "|\n  two\n  lines\n\n", '"two\\nlines"') + "again: [*m, *m]\n"
    assert listed(parse_document(text, "text").value) == yaml.safe_load(text)


NAMES = st.lists(
    st.sampled_from(["/", "_", "a", "Z", "9", "__", "//", "-", " ", ".", "é", "odom"]), max_size=6
).map("".join)


@settings(max_examples=200, deadline=None)
@given(NAMES)
def test_topic_names_against_ros(name):
    """The validations of rcl and rmw are the reference; the rules stand in the ROS 2 design
    article "Topic and Service name mapping to DDS" (from memory)."""
    given = pytest.importorskip("rclpy.validate_topic_name")
    full = pytest.importorskip("rclpy.validate_full_topic_name")
    from rclpy.exceptions import InvalidTopicNameException

    try:
        allowed = given.validate_topic_name(name)
        allowed &= full.validate_full_topic_name(name if name[:1] == "/" else f"/{name}")
    except InvalidTopicNameException:
        allowed = False
    assert bool(TOPIC.fullmatch(name)) == allowed


def test_longest_topic_name_leaves_room_for_a_namespace():
    full = pytest.importorskip("rclpy.validate_full_topic_name")
    assert full.validate_full_topic_name("/" + "n" * 40 + "/" + "t" * LONGEST_TOPIC)
