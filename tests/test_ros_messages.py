"""Single messages, without topics: REP 103, REP 105 and the definitions of the types."""

from __future__ import annotations

import math
import re
from dataclasses import replace
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
import yaml

pytest.importorskip("rclpy", reason="needs ROS 2: rclpy is not installed")

from diagnostic_msgs.msg import DiagnosticStatus  # noqa: E402
from geometry_msgs.msg import PoseStamped, Quaternion  # noqa: E402
from sensor_msgs.msg import BatteryState  # noqa: E402
from std_msgs.msg import Header  # noqa: E402
from visualization_msgs.msg import Marker  # noqa: E402

from allocator_node.decision import (  # noqa: E402
    Cause,
    Decision,
    Level,
    Notice,
    Reallocation,
    Shortfall,
)
from allocator_node.drives import Differential, Holonomic  # noqa: E402
from allocator_node.ros import conversions, markers, outbox, parameters, sim_node  # noqa: E402
from allocator_node.ros.command_topics import CommandTopics  # noqa: E402
from allocator_node.ros.loop import MARKERS_EVERY  # noqa: E402
from allocator_node.ros.state_file import StateFile  # noqa: E402
from allocator_node.settings import Settings  # noqa: E402
from allocator_node.team import CommandSink, KeepOut, Robot, Team  # noqa: E402
from allocator_node.team_file import read_team  # noqa: E402

pytestmark = pytest.mark.ros

TEAM = Team(
    robots={
        "rover_1": Robot("rover_1", Differential(max_speed=1.0)),
        "rover_2": Robot("rover_2", Holonomic(max_speed=1.0)),
    },
    boundary=((0, 0), (9, 0), (9, 9)),
    keep_out=(KeepOut("shed", ((1, 1), (2, 1), (2, 2))),),
    frame="site",
)


def decision(**changes) -> Decision:
    """Give a decision: rover_1 does the gate, rover_2 nothing."""
    usual = {
        "time": 12.0,
        "robots": ("rover_1", "rover_2"),
        "tasks": ("gate", "pond"),
        "assignment": np.array([0, -1]),
        "since": np.array([10.0, 0.0]),
        "commands": np.zeros((2, 4)),
        "goals": np.array([[5.0, 5.0, np.nan], [np.nan] * 3]),
        "facing": np.array([np.nan, np.nan]),
        "navigates": np.array([False, False]),
        "poses": np.array([[1.0, 2.0, 0.0, 0.5], [3.0, 4.0, 0.0, 0.0]]),
        "heard": np.array([True, True]),
        "steady": np.array([True, True]),
        "able": np.ones((2, 2), dtype=bool),
        "suitability": np.array([[1.0, 0.5], [0.0, 1.0]]),
        "efficacy": np.array([[0.5, 1.0], [1.0, 1.0]]),
        "charge": np.array([0.75, 0.5]),
        "charge_estimated": np.array([False, True]),
        "finished": frozenset(),
        "reallocations": (),
        "shortfalls": (),
        "notices": (),
        "seconds": {},
        "activity": ("working", "charging"),
    }
    return Decision(**(usual | changes))


def values_of(status: DiagnosticStatus) -> dict[str, str]:
    return {pair.key: pair.value for pair in status.values}


def test_yaw_agrees_with_scipy() -> None:
    """Outside check: ``scipy.spatial.transform``, intrinsic z-y-x as in REP 103."""
    from scipy.spatial.transform import Rotation

    for rotation in Rotation.random(50, rng=np.random.default_rng(1)):
        x, y, z, w = map(float, rotation.as_quat())
        expected = rotation.as_euler("ZYX")[0]
        assert conversions.yaw_of(Quaternion(x=x, y=y, z=z, w=w)) == pytest.approx(expected)
    for yaw in np.linspace(-3.1, 3.1, 20):
        x, y, z, w = Rotation.from_euler("z", yaw).as_quat()
        made = conversions.quaternion_of(float(yaw))
        sign = math.copysign(1.0, made.w * w)
        assert (made.x, made.y, made.z, made.w) == pytest.approx(
            (x * sign, y * sign, z * sign, w * sign)
        )


def test_placing_and_seeing_from_undo_each_other() -> None:
    """A pose placed in the site frame and seen from its own frame again."""
    random = np.random.default_rng(2)
    for _ in range(50):
        pose, offset = random.uniform(-3, 3, 4), random.uniform(-3, 3, 3)
        back = conversions.seen_from(conversions.placed(pose, offset), offset)
        assert back == pytest.approx(pose)


def test_a_twist_has_the_signs_of_rep_103() -> None:
    """REP 103: x ahead, y left, z up, positive turn to the left."""
    twist = conversions.twist_of((1.0, 2.0, 3.0, 4.0))
    assert (twist.linear.x, twist.linear.y, twist.linear.z, twist.angular.z) == (1, 2, 3, 4)
    assert (twist.angular.x, twist.angular.y) == (0, 0)
    north = conversions.turned((1.0, 0.0, 0.0, 0.0), math.pi / 2)
    assert north == pytest.approx([0, 1, 0, 0], abs=1e-12)


def test_levels_are_those_of_diagnostic_status() -> None:
    """diagnostic_msgs/DiagnosticStatus: OK 0, WARN 1, ERROR 2."""
    for level in Level:
        assert bytes([level.value]) == getattr(DiagnosticStatus, level.name)


def test_the_status_tells_progress_and_errands() -> None:
    """How far the work is, and what a robot without a task does."""
    busy, free = (outbox.robot_status(i, decision(progress={"gate": 0.25})) for i in (0, 1))
    assert busy.message == "rover_1 does gate, 25% done"
    assert values_of(busy)["progress"] == "0.250"
    assert free.message == "rover_2 has no task and charges"
    assert values_of(free)["activity"] == "charging" and "progress" not in values_of(free)


def test_the_status_of_a_robot() -> None:
    """Task, since, specialization and energy, and the worst of what is wrong with it."""
    notices = (Notice("rover_1", Level.WARN, "its camera is weak"),)
    status = outbox.robot_status(0, decision(notices=notices))
    assert (status.name, status.hardware_id) == ("rover_1", "rover_1")
    assert status.level == DiagnosticStatus.WARN
    assert status.message == "rover_1 does gate; its camera is weak"
    assert values_of(status) == {
        "task": "gate",
        "since": "10.000",
        "activity": "working",
        "specialization.gate": "0.500",
        "specialization.pond": "0.500",
        "energy": "0.750",
        "energy_source": "measured",
    }
    silent = outbox.robot_status(1, decision(heard=np.array([True, False])))
    assert silent.level == DiagnosticStatus.ERROR
    assert silent.message == "rover_2 has no task, not heard from"
    assert values_of(silent)["energy_source"] == "estimated"


@pytest.mark.parametrize(
    ("cause", "shortfalls", "level"),
    [
        (Cause.START, (), DiagnosticStatus.OK),
        (Cause.CHEAPER, (), DiagnosticStatus.OK),
        (Cause.FEATURE, (), DiagnosticStatus.WARN),
        (Cause.SILENT, (), DiagnosticStatus.WARN),
        (Cause.TASK, (Shortfall("gate", 1.0),), DiagnosticStatus.WARN),
        (Cause.TASK, (Shortfall("pond", 1.0),), DiagnosticStatus.OK),
    ],
)
def test_the_level_of_a_reallocation(cause: Cause, shortfalls: tuple, level: bytes) -> None:
    """WARN where trouble caused it, or where the task now lacks something."""
    change = Reallocation(12.0, "gate", ("rover_1",), ("rover_2", "rover_3"), cause, "because")
    status = outbox.reallocation_status(change, decision(shortfalls=shortfalls))
    assert status.level == level
    assert (status.name, status.message) == ("gate", "because")
    assert values_of(status) == {
        "task": "gate",
        "from": "rover_1",
        "to": "rover_2, rover_3",
        "cause": cause.value,
        "detail": "because",
        "stamp": "12.000",
    }


def test_markers_that_vanish_are_deleted() -> None:
    """By the namespace and id under which they were added."""
    board = markers.MarkerBoard(TEAM)
    shown = board.markers(decision(shortfalls=(Shortfall("pond", 2.0),))).markers
    assert {m.action for m in shown} == {Marker.ADD}
    assert "pond lacks 2 robots" in [m.text for m in shown if m.ns == "shortfall"]
    lost = decision(
        assignment=np.array([-1, -1]), goals=np.full((2, 3), np.nan), heard=np.array([True, False])
    )
    later = board.markers(lost).markers
    gone = {(m.ns, m.id) for m in later if m.action == Marker.DELETE}
    assert gone == {("goal", 0), ("goal_name", 0), ("link", 0), ("shortfall", 0)}
    assert "rover_2: silent" in [m.text for m in later if m.ns == "name"]
    assert not {(m.ns, m.id) for m in board.markers(lost).markers if m.action == Marker.DELETE}


def test_nothing_stale_stays_in_a_viewer() -> None:
    """Every marker has a lifetime longer than the time between two messages."""
    shown = markers.MarkerBoard(TEAM).markers(decision()).markers
    lifetimes = {m.lifetime.sec + 1e-9 * m.lifetime.nanosec for m in shown}
    assert lifetimes == {markers.LIFETIME} and markers.LIFETIME > 2 * MARKERS_EVERY


def test_the_circle_of_a_silent_robot_grows_as_the_safety_rows_say() -> None:
    """Speed times silence, ``silent_reach`` at most once it is silent, around its body."""
    board, settings = markers.MarkerBoard(TEAM), Settings()
    board.note(decision())
    robot = list(TEAM.robots.values())[1]
    radii = []
    for later in (1.0, 1.5, 60.0):
        gone = replace(decision(heard=np.array([True, False])), time=decision().time + later)
        (circle,) = (m for m in board.markers(gone, settings).markers if m.ns == "silent")
        silent_for = later + settings.pose_timeout
        speed = robot.drive.max_speed
        most = speed * settings.pose_timeout + settings.silent_reach
        grown = min(speed * silent_for, most)
        assert circle.scale.x == pytest.approx(2 * (robot.radius + grown))
        radii.append(circle.scale.x)
    assert radii == sorted(radii)
    back = board.markers(replace(decision(), time=decision().time + 61.0)).markers
    gone_now = {(m.ns, m.id) for m in back if m.action == Marker.DELETE}
    assert ("silent", 1) in gone_now


def test_the_viewer_file_shows_every_marker_of_the_example() -> None:
    """config/allocator.rviz: topic, latching, frame and namespaces as we publish them."""
    root = Path(__file__).parents[1]
    manager = yaml.safe_load((root / "config/allocator.rviz").read_text("utf-8"))[
        "Visualization Manager"
    ]
    (display,) = (d for d in manager["Displays"] if d["Class"].endswith("/MarkerArray"))
    assert display["Topic"]["Value"] == "/allocator/markers"
    assert display["Topic"]["Durability Policy"] == "Transient Local"
    source = (root / "allocator_node/ros/markers.py").read_text("utf-8")
    made = set(re.findall(r'_(?:marker|text|outline)\(\s*"(\w+)"', source))
    assert made == set(display["Namespaces"])
    team = read_team(root / "config/solar_farm.yaml")
    assert manager["Global Options"]["Fixed Frame"] == team.frame
    (goal,) = (t for t in manager["Tools"] if t["Class"].endswith("/SetGoal"))
    assert goal["Topic"]["Value"].split("/")[3] in team.tasks


def test_a_battery_report_says_nan_where_nothing_is_measured() -> None:
    """sensor_msgs/BatteryState: "If unmeasured NaN"; percentage on the range 0 to 1."""
    message = sim_node.battery_report(Header(), 0.25, TEAM.robots["rover_1"])
    assert message.percentage == 0.25
    assert math.isnan(message.voltage) and math.isnan(message.charge)
    assert message.power_supply_status == BatteryState.POWER_SUPPLY_STATUS_DISCHARGING


@pytest.mark.parametrize("drive", [Differential(max_speed=1.0), Holonomic(max_speed=1.0)])
def test_simulated_navigation_arrives(drive) -> None:
    """A robot that is sent goals gets there, within its limits."""
    from allocator_node.sim.motion import advance

    pose, goal = np.array([0.0, 0.0, 0.0, 2.0]), np.array([3.0, -4.0, 0.0, 1.0])
    for _ in range(600):
        command = sim_node.steer(drive, pose, goal)
        assert (np.abs(command) <= drive.limits() + 1e-12).all()
        pose = advance(pose[None], command[None], 0.05)[0]
    assert conversions.gap(pose, goal) < 0.15
    assert conversions.wrapped(pose[3] - goal[3]) == pytest.approx(0.0, abs=0.05)


def test_every_parameter_is_described() -> None:
    """With the units of the docstring."""
    for kind in (parameters.Options, parameters.Settings):
        described = parameters._descriptions(kind)
        assert all(described.values())
    assert described["margin"] == "Distance kept beside the bodies, m."
    assert described["efficacy_law"].endswith('published "additive" law.')


def test_a_state_file_is_whole_at_any_time(tmp_path) -> None:
    """What is read while it is written is always one whole memory."""
    state = StateFile(tmp_path / "deep" / "state.json")
    assert state.load() is None
    state.save({"value": [0] * 5000})
    for k in range(1, 40):
        state.save_soon({"value": [k] * 5000})
        assert len(set(state.load()["value"])) == 1
    state.save({"value": [40] * 5000})
    assert set(state.load()["value"]) == {40}
    assert [path.name for path in (tmp_path / "deep").iterdir()] == ["state.json"]
    state.close()


# Commands


class Topic:
    """Keeps what is published."""

    def __init__(self, sent: list) -> None:
        self.publish = sent.append


@pytest.fixture
def orders() -> tuple[CommandTopics, list[PoseStamped]]:
    """Command topics of two robots with their own navigation, and what is sent on them."""
    own = CommandSink(topic="goal", type="geometry_msgs/msg/PoseStamped")
    robots = {name: replace(robot, command=own) for name, robot in TEAM.robots.items()}
    sent: list[PoseStamped] = []
    node = SimpleNamespace(create_publisher=lambda *topic: Topic(sent))
    return CommandTopics(node, replace(TEAM, robots=robots)), sent


def places(sent: list[PoseStamped]) -> list[tuple[float, float]]:
    """Give where robots were sent to, and forget it."""
    found = [(message.pose.position.x, message.pose.position.y) for message in sent]
    sent.clear()
    return found


def test_robots_with_own_navigation_are_sent_nowhere_on_bad_poses(orders) -> None:
    """One whose pose jumps keeps its goal; one that falls silent is told to stay there."""
    topics, sent = orders
    nowhere = np.full((2, 3), np.nan)
    topics.send(decision())
    assert places(sent) == [(5.0, 5.0), (3.0, 4.0)]
    jumped = decision(steady=np.array([False, True]), goals=nowhere)
    topics.send(jumped)
    assert places(sent) == [(5.0, 5.0), (3.0, 4.0)]
    topics.send(jumped, hold=True)
    assert places(sent) == [(1.0, 2.0), (3.0, 4.0)]
    # Carried by its velocity to the moment it fell silent; later poses are old ones.
    moved = np.array([[1.5, 2.0, 0.0, 0.5], [3.0, 4.0, 0.0, 0.0]])
    topics.send(decision(poses=moved))
    places(sent)
    silent = np.array([False, True])
    topics.send(decision(steady=silent, heard=silent, goals=nowhere))
    assert places(sent) == [(1.5, 2.0), (3.0, 4.0)]


def test_a_robot_with_own_navigation_that_was_never_heard_is_sent_nowhere(orders) -> None:
    """A place from before a restart is no place to send it to."""
    topics, sent = orders
    nobody = np.array([False, False])
    topics.send(decision(steady=nobody, heard=nobody, goals=np.full((2, 3), np.nan)))
    assert places(sent) == []
