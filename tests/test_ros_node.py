"""The lifecycle node on real topics: its interface, its answers, and how it stops."""

from __future__ import annotations

import statistics
import time
from pathlib import Path

import pytest

pytest.importorskip("rclpy", reason="needs ROS 2: rclpy is not installed")

from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus, KeyValue  # noqa: E402
from geometry_msgs.msg import PoseStamped  # noqa: E402
from rclpy.qos import DurabilityPolicy, ReliabilityPolicy  # noqa: E402
from ros_bench import (  # noqa: E402
    CAMERA,
    LATE,
    Bench,
    bench,
    busy,
    moving,
    standing,
    until,
    values_of,
)
from sensor_msgs.msg import BatteryState  # noqa: E402
from std_msgs.msg import Float32, String  # noqa: E402
from std_srvs.srv import SetBool, Trigger  # noqa: E402
from visualization_msgs.msg import Marker, MarkerArray  # noqa: E402

pytestmark = pytest.mark.ros

ROOT = Path(__file__).parents[1]


@pytest.fixture(scope="module")
def running(tmp_path_factory: pytest.TempPathFactory):
    """A bench that drives two rovers; tests that use it leave it as it was."""
    with bench(tmp_path_factory.mktemp("bench")) as made:
        made.rovers = made.start()
        until(lambda: busy(made.rovers), "a rover drives")
        yield made


# The interface


def test_topics_have_the_documented_names_types_and_qos(running: Bench) -> None:
    """Design of the interface: who publishes what, and how."""
    node = running.probe.node
    published = {
        "/rover_1/cmd_vel": ("geometry_msgs/msg/TwistStamped", False),
        "/rover_2/assigned_task": ("std_msgs/msg/String", True),
        "/allocator/assignments": ("diagnostic_msgs/msg/DiagnosticArray", True),
        "/allocator/reallocations": ("diagnostic_msgs/msg/DiagnosticStatus", True),
        "/allocator/markers": ("visualization_msgs/msg/MarkerArray", True),
        "/diagnostics": ("diagnostic_msgs/msg/DiagnosticArray", False),
    }
    for topic, (kind, latched) in published.items():
        ours = [e for e in node.get_publishers_info_by_topic(topic) if e.node_name == "allocator"]
        assert [e.topic_type for e in ours] == [kind], topic
        profile = ours[0].qos_profile
        assert profile.reliability == ReliabilityPolicy.RELIABLE
        assert (profile.durability == DurabilityPolicy.TRANSIENT_LOCAL) == latched, topic
    subscribed = {
        "/rover_1/pose": "geometry_msgs/msg/PoseStamped",
        "/rover_1/battery_state": "sensor_msgs/msg/BatteryState",
        "/diagnostics": "diagnostic_msgs/msg/DiagnosticArray",
        "/allocator/tasks/gate/goal": "geometry_msgs/msg/PoseStamped",
        "/allocator/quality/rover_2/gate": "std_msgs/msg/Float32",
    }
    for topic, kind in subscribed.items():
        ours = [
            e for e in node.get_subscriptions_info_by_topic(topic) if e.node_name == "allocator"
        ]
        assert [e.topic_type for e in ours] == [kind], topic
    pose = node.get_subscriptions_info_by_topic("/rover_1/pose")[0].qos_profile
    assert pose.reliability == ReliabilityPolicy.BEST_EFFORT  # matches both kinds of publisher
    services = dict(node.get_service_names_and_types())
    assert services["/allocator/hold"] == ["std_srvs/srv/SetBool"]
    assert services["/allocator/forget"] == ["std_srvs/srv/Trigger"]
    assert services["/allocator/change_state"] == ["lifecycle_msgs/srv/ChangeState"]


def test_late_joiners_get_tasks_assignments_and_history(running: Bench) -> None:
    """Latched topics (transient local) hand out what was published before."""
    tasks = [running.probe.listen(f"/{r}/assigned_task", String, LATE) for r in CAMERA]
    assignments = running.probe.listen("/allocator/assignments", DiagnosticArray, LATE)
    history = running.probe.listen("/allocator/reallocations", DiagnosticStatus, LATE)
    until(lambda: all(tasks) and assignments and history, "what was published before")
    assert sorted(record[-1][1].data for record in tasks) == ["", "gate"]
    first = history[0][1]
    values = values_of(first)
    assert first.name == values["task"] == "gate"
    assert values["cause"] == "start"
    assert (values["from"], values["to"]) == ("", busy(running.rovers)[0])
    assert first.message == values["detail"] != ""
    assert abs(float(values["stamp"]) - time.time()) < 120
    statuses = {status.name: status for status in assignments[-1][1].status}
    assert set(statuses) == {"rover_1", "rover_2"}
    for robot, status in statuses.items():
        values = values_of(status)
        assert status.hardware_id == robot
        assert status.message
        assert {"task", "since", "specialization.gate", "energy"} <= set(values)
        assert 0 <= float(values["specialization.gate"]) <= 1


def test_assignments_and_diagnostics_come_every_second(running: Bench) -> None:
    """At least 1 Hz, although nothing changes; the node tells how it fares."""
    assignments = running.probe.listen("/allocator/assignments", DiagnosticArray)
    diagnostics = running.probe.listen("/diagnostics", DiagnosticArray)

    def own() -> dict:
        return {
            status.name: status
            for _, message in diagnostics
            for status in message.status
            if status.name.startswith("allocator: ")
        }

    until(lambda: len(assignments) > 2 and len(own()) > 4, "reports")
    statuses = own()
    assert float(values_of(statuses["allocator: period"])["wanted_ms"]) == 100.0
    assert {"period_ms.median", "period_ms.max"} <= set(
        values_of(statuses["allocator: period"])
    )
    assert "gap_wh" in values_of(statuses["allocator: solvers"])
    assert statuses["allocator: robots"].level == DiagnosticStatus.OK
    assert statuses["allocator: coverage"].level == DiagnosticStatus.OK
    assert values_of(statuses["allocator: coverage"]) == {"uncovered": ""}


def test_commands_come_every_period_with_stamp_and_frame(running: Bench) -> None:
    """TwistStamped in the robot's base frame, one a period."""
    record = running.rovers.commands["rover_1"]
    start = len(record)
    until(lambda: len(record) > start + 15, "commands")
    messages = [message for _, message in record[start:]]
    assert {m.header.frame_id for m in messages} == {"rover_1/base_link"}
    stamps = [m.header.stamp.sec + 1e-9 * m.header.stamp.nanosec for m in messages]
    steps = [b - a for a, b in zip(stamps, stamps[1:], strict=False)]
    assert statistics.median(steps) == pytest.approx(0.1, abs=0.02)


def test_rosbags_decodes_what_we_publish(running: Bench) -> None:
    """Outside check: the independent library ``rosbags`` reads our bytes as the same message."""
    typesys = pytest.importorskip("rosbags.typesys")
    plain = running.probe.listen("/allocator/assignments", DiagnosticArray, LATE)
    raw: list = []
    running.probe.node.create_subscription(
        DiagnosticArray, "/allocator/assignments", raw.append, LATE, raw=True
    )
    until(lambda: plain and raw, "assignments")
    store = typesys.get_typestore(typesys.Stores.ROS2_JAZZY)
    seen = store.deserialize_cdr(bytes(raw[-1]), "diagnostic_msgs/msg/DiagnosticArray")
    stamp = (seen.header.stamp.sec, seen.header.stamp.nanosec)

    def same() -> list:
        return [
            m for _, m in plain if (m.header.stamp.sec, m.header.stamp.nanosec) == stamp
        ]

    ours = until(same, "the same message")[0]
    for theirs, own in zip(seen.status, ours.status, strict=True):
        assert (theirs.name, theirs.message) == (own.name, own.message)
        assert theirs.level == own.level[0]
        assert {v.key: v.value for v in theirs.values} == values_of(own)


def test_markers_show_robots_goal_and_site(running: Bench) -> None:
    """Robots, links, goals and areas, in the site frame."""
    record = running.probe.listen("/allocator/markers", MarkerArray)
    markers = until(lambda: record and record[-1][1].markers, "markers")
    spaces = {marker.ns for marker in markers}
    assert {"robot", "name", "goal", "link", "specialization", "keep_out", "boundary"} <= spaces
    assert {marker.header.frame_id for marker in markers} == {"site"}
    assert len({(marker.ns, marker.id) for marker in markers}) == len(markers)
    assert all(marker.action == Marker.ADD for marker in markers)


def test_a_goal_message_moves_a_task(running: Bench) -> None:
    """``~/tasks/<task>/goal`` in the site frame; another frame is refused."""
    goal = running.probe.node.create_publisher(PoseStamped, "/allocator/tasks/gate/goal", 10)
    until(goal.get_subscription_count, "a listener")
    markers = running.probe.listen("/allocator/markers", MarkerArray)

    def place() -> tuple[float, float] | None:
        found = [m for _, a in markers[-1:] for m in a.markers if m.ns == "goal"]
        return found and (found[0].pose.position.x, found[0].pose.position.y)

    message = running.rovers.pose(55.0, 10.0)
    message.header.frame_id = "elsewhere"
    goal.publish(message)
    until(lambda: "'elsewhere'" in running.probe.log(), "a refusal")
    message.header.frame_id = "site"
    goal.publish(message)
    until(lambda: place() == pytest.approx((55.0, 10.0)), "the new goal")
    message = running.rovers.pose(50.0, 2.0)
    goal.publish(message)
    until(lambda: place() == pytest.approx((50.0, 2.0)), "the old goal")


# Answers of the operator's controls


@pytest.mark.parametrize(
    ("values", "reason"),
    [
        ({"kappa": -1.0}, "kappa = -1.0: Input should be greater than or equal to 0"),
        ({"kappa": "much"}, "kappa = 'much'"),
        ({"kappa": True}, "kappa = True"),
        ({"s_min": 1.5}, "s_min = 1.5: Input should be less than or equal to 1"),
        ({"pose_timeout": float("nan")}, "pose_timeout = nan"),
        ({"efficacy_law": "guess"}, "'ratio' or 'additive'"),
        ({"rate": 0.0}, "rate = 0.0: Input should be greater than 0"),
        ({"command_robots": 1}, "command_robots = 1"),
        ({"pins": ["rover_1"]}, 'pins: "rover_1" is not of the form robot=task'),
        ({"pins": ["rover_9=gate"]}, 'no robot "rover_9"; there are: rover_1, rover_2'),
        ({"bans": ["rover_1=moon"]}, 'no task "moon"; there are: gate'),
        ({"task_edit": "gate: {priority: 9}"}, "priority"),
        ({"task_edit": "gate: {kind: dance}"}, "dance"),
        ({"task_edit": "]["}, "task_edit"),
        ({"team_file": "other.yaml"}, "team_file is read on configure; clean up first"),
    ],
)
def test_a_refused_parameter_says_why(running: Bench, values: dict, reason: str) -> None:
    """And leaves everything as it was."""
    settings, orders = running.node.loop.allocator.settings, running.node.loop.allocator.orders
    result = running.probe.set(**values)
    assert not result.successful
    assert reason in result.reason
    assert running.node.loop.allocator.settings == settings
    assert running.node.loop.allocator.orders == orders


def test_settings_change_live(running: Bench) -> None:
    """A whole number will do where a float is asked for."""
    assert running.probe.set(kappa=1, pose_timeout=2.5).successful
    assert running.node.loop.allocator.settings.kappa == 1.0
    assert running.node.loop.allocator.settings.pose_timeout == 2.5
    assert running.probe.set(kappa=0.002, pose_timeout=1.0).successful


def test_a_ban_moves_the_task_and_a_pin_holds_it(running: Bench) -> None:
    """Orders reach the robots with the next decisions."""
    first = busy(running.rovers)[0]
    other = next(robot for robot in CAMERA if robot != first)
    assert running.probe.set(bans=[f"{first}=gate"]).successful
    until(lambda: busy(running.rovers) == [other], "the other rover drives")
    assert running.probe.set(bans=[""], pins=[f"{first}=gate"]).successful
    until(lambda: busy(running.rovers) == [first], "the pinned rover drives")
    assert not running.probe.set(bans=[f"{first}=gate"]).successful
    assert running.probe.set(pins=[""]).successful


def test_rate_changes_live(running: Bench) -> None:
    """The timer is made again."""
    record = running.rovers.commands["rover_1"]
    assert running.probe.set(rate=20.0).successful
    start, began = len(record), time.monotonic()
    until(lambda: len(record) > start + 40, "commands at the new rate")
    assert len(record[start:]) / (time.monotonic() - began) == pytest.approx(20, rel=0.2)
    assert running.probe.set(rate=10.0).successful


def test_a_task_edit_adds_and_ends_a_task(running: Bench) -> None:
    """Its topics come and go with it."""
    assert running.probe.set(task_edit="pond: {kind: visit, at: [40, 12]}").successful
    until(lambda: len(busy(running.rovers)) == 2, "the second rover drives too")
    node = running.probe.node
    until(lambda: node.count_subscribers("/allocator/tasks/pond/goal"), "a goal topic")
    assert running.probe.set(task_edit="pond: null").successful
    until(lambda: len(busy(running.rovers)) == 1, "the second rover stands again")
    until(lambda: not node.count_subscribers("/allocator/tasks/pond/goal"), "no goal topic")


def test_hold_stops_all_and_decisions_go_on(running: Bench) -> None:
    """``~/hold`` true: zero commands every period; false: on again."""
    answer = running.probe.call(SetBool, "/allocator/hold", SetBool.Request(data=True))
    assert answer.success
    assignments = running.probe.listen("/allocator/assignments", DiagnosticArray)
    until(lambda: standing(running.rovers), "all stand")
    seen, told = len(assignments), [len(record) for record in running.rovers.commands.values()]
    until(lambda: len(assignments) > seen + 1, "assignments")
    assert standing(running.rovers)
    for record, before in zip(running.rovers.commands.values(), told, strict=True):
        assert len(record) > before + 5
        assert not any(moving(message) for _, message in record[before:])
    assert running.probe.call(SetBool, "/allocator/hold", SetBool.Request(data=False)).success
    until(lambda: busy(running.rovers), "a rover drives again")


def test_forget_trusts_every_robot_again(running: Bench) -> None:
    """Quality 0 from outside lowers the specialization, ``~/forget`` restores it."""
    robot = busy(running.rovers)[0]
    assignments = running.probe.listen("/allocator/assignments", DiagnosticArray)
    quality = running.probe.node.create_publisher(Float32, f"/allocator/quality/{robot}/gate", 10)

    def specialization() -> float:
        status = next(s for s in assignments[-1][1].status if s.name == robot)
        return float(values_of(status)["specialization.gate"])

    def poor() -> bool:
        quality.publish(Float32(data=0.0))
        time.sleep(0.1)
        return bool(assignments) and specialization() < 0.8

    until(poor, "the specialization falls")
    answer = running.probe.call(Trigger, "/allocator/forget", Trigger.Request())
    assert answer.success
    until(lambda: specialization() > 0.99, "the specialization is 1 again")


# Failures


def test_the_takeover_after_a_failed_feature_is_in_the_next_period(running: Bench) -> None:
    """Twenty times: camera ERROR on /diagnostics, the other rover drives within two periods.

    Counted in commands, so that a slow machine cannot fail it: of the commands that
    leave after the message arrived, at most the first may still be zero.
    """
    node, rovers = running.probe.node, running.rovers
    diagnostics = node.create_publisher(DiagnosticArray, "/diagnostics", 10)
    history = running.probe.listen("/allocator/reallocations", DiagnosticStatus, LATE)
    until(lambda: diagnostics.get_subscription_count() and history, "a listener")

    def say(levels: dict[str, bytes]) -> None:
        diagnostics.publish(
            DiagnosticArray(
                status=[
                    DiagnosticStatus(name=CAMERA[robot], level=level)
                    for robot, level in levels.items()
                ]
            )
        )

    waits, zeros = [], []
    for repetition in range(20):
        # The commands of one period arrive one by one: in between, both or none may move.
        until(lambda: len(busy(rovers)) == 1, "one rover drives")
        (failing,) = busy(rovers)
        spare = next(robot for robot in CAMERA if robot != failing)
        time.sleep(0.03 + 0.007 * repetition)  # at any phase of the period
        record, known = rovers.commands[spare], len(history)
        sent, before = time.monotonic(), len(record)
        say({failing: DiagnosticStatus.ERROR, spare: DiagnosticStatus.OK})
        until(lambda: busy(rovers) == [spare], "the spare rover drives")  # noqa: B023
        moved = next(k for k in range(before, len(record)) if moving(record[k][1]))
        waits.append(record[moved][0] - sent)
        zeros.append(moved - before)
        until(lambda: len(history) > known, "the reason")  # noqa: B023
        values = values_of(history[-1][1])
        assert values["cause"] == "feature"
        assert (values["from"], values["to"]) == (failing, spare)
        assert history[-1][1].level == DiagnosticStatus.WARN
        say({failing: DiagnosticStatus.OK, spare: DiagnosticStatus.OK})
        time.sleep(0.15)
    print(
        f"\nfeature fails -> command of the robot that takes over: median "
        f"{1e3 * statistics.median(waits):.0f} ms, maximum {1e3 * max(waits):.0f} ms "
        f"(period 100 ms, {len(waits)} repetitions)"
    )
    assert max(zeros) <= 1


def test_deactivate_sends_zero_commands(running: Bench) -> None:
    """The last command of a moving robot is zero, and nothing follows; activate goes on."""
    until(lambda: busy(running.rovers), "a rover drives")
    assert running.deactivate()
    until(lambda: standing(running.rovers), "all stand")
    counts = [len(record) for record in running.rovers.commands.values()]
    time.sleep(0.5)
    assert [len(record) for record in running.rovers.commands.values()] == counts
    node = running.probe.node
    until(lambda: not node.count_publishers("/rover_1/cmd_vel"), "no publisher is left")
    assert running.activate()
    until(lambda: busy(running.rovers), "a rover drives again")


def test_battery_and_diagnostic_messages_mean_what_their_definitions_say(running: Bench) -> None:
    """sensor_msgs/BatteryState: percentage 0..1, NaN unmeasured; DiagnosticStatus: OK 0 .. STALE 3.

    Read from the comments of the message definitions.
    """
    levels = (
        DiagnosticStatus.OK, DiagnosticStatus.WARN, DiagnosticStatus.ERROR, DiagnosticStatus.STALE
    )
    assert [level[0] for level in levels] == [0, 1, 2, 3]
    robot = next(robot for robot in CAMERA if robot not in busy(running.rovers))
    assignments = running.probe.listen("/allocator/assignments", DiagnosticArray)
    battery = running.probe.node.create_publisher(BatteryState, f"/{robot}/battery_state", 10)
    until(battery.get_subscription_count, "a listener")

    def energy() -> tuple[float, str]:
        values = values_of(next(s for s in assignments[-1][1].status if s.name == robot))
        return float(values["energy"]), values["energy_source"]

    battery.publish(BatteryState(percentage=0.9))
    until(lambda: assignments and energy() == (pytest.approx(0.9, abs=0.01), "measured"), "0.9")
    battery.publish(BatteryState(percentage=float("nan")))
    battery.publish(BatteryState(percentage=87.0))
    until(lambda: "percentage is 87, it must be within 0..1" in running.probe.log(), "a refusal")
    assert energy() == (pytest.approx(0.9, abs=0.01), "measured")


def test_unused_diagnostics_do_no_harm(running: Bench) -> None:
    """Unknown names and levels out of range are not taken for a failure."""
    diagnostics = running.probe.node.create_publisher(DiagnosticArray, "/diagnostics", 10)
    until(diagnostics.get_subscription_count, "a listener")
    (robot,) = busy(running.rovers)
    statuses = [DiagnosticStatus(name=f"cpu {k}", level=DiagnosticStatus.ERROR) for k in range(500)]
    statuses.append(
        DiagnosticStatus(name=CAMERA[robot], level=bytes([9]), values=[KeyValue(key="a")])
    )

    def refused() -> bool:
        diagnostics.publish(DiagnosticArray(status=statuses))
        return "has level 9, not 0..3" in running.probe.log()

    until(refused, "a refusal")
    time.sleep(0.3)
    assert busy(running.rovers) == [robot]
