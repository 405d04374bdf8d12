"""What comes in: frames, stamps, and messages no robot should be driven by."""

from __future__ import annotations

import math
import time

import numpy as np
import pytest

rclpy = pytest.importorskip("rclpy", reason="needs ROS 2: rclpy is not installed")

from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus  # noqa: E402
from geometry_msgs.msg import PoseStamped, PoseWithCovarianceStamped, TransformStamped, Twist  # noqa: E402
from nav_msgs.msg import Odometry  # noqa: E402
from rclpy.context import Context  # noqa: E402
from rclpy.serialization import deserialize_message  # noqa: E402
from ros_bench import until  # noqa: E402
from sensor_msgs.msg import BatteryState  # noqa: E402
from std_msgs.msg import Float32  # noqa: E402

from allocator_node.ros import polling  # noqa: E402
from allocator_node.ros.clockwork import ClockWatch, StampReader, arrival_time  # noqa: E402
from allocator_node.ros.complaints import Complaints  # noqa: E402
from allocator_node.ros.inbox import Inbox  # noqa: E402
from allocator_node.ros.poses import PoseTransform  # noqa: E402
from allocator_node.team_file import parse_team  # noqa: E402

pytestmark = pytest.mark.ros

TEAM = """
frame: site
robots:
  placed:
    drive: {model: differential, max_speed: 1}
    features: [camera]
    health: [{name: "placed/cam*", feature: camera}]
    pose: {topic: placed/odom, frame: placed/odom, offset: [10, 20, 1.5707963267948966]}
  plain:
    drive: {model: holonomic, max_speed: 1}
    pose: {topic: plain/pose, type: geometry_msgs/msg/PoseStamped}
  covered:
    drive: {model: holonomic, max_speed: 1}
    pose: {topic: covered/pose, type: geometry_msgs/msg/PoseWithCovarianceStamped}
tasks:
  gate: {kind: watch, at: [8, 2]}
  beside: {kind: follow, target: {topic: guide/pose}, offset: [-2, 0]}
"""
PLACED, PLAIN, COVERED = range(3)


class Post:
    """An inbox and somebody who writes to it."""

    def __init__(self) -> None:
        self.receiver = rclpy.create_node("allocator")
        self.sender = rclpy.create_node("sender")
        self.inbox = Inbox(self.receiver, parse_team(TEAM))
        self._publishers: dict[str, object] = {}

    def send(self, topic: str, message: object) -> None:
        """Publish a message, once somebody listens."""
        if topic not in self._publishers:
            self._publishers[topic] = self.sender.create_publisher(type(message), topic, 10)
        until(self._publishers[topic].get_subscription_count, f"a listener on {topic}")
        self._publishers[topic].publish(message)
        time.sleep(0.03)

    def now(self) -> float:
        """Give the time, s."""
        return self.receiver.get_clock().now().nanoseconds * 1e-9

    def look(self):
        """Give the observation of now."""
        return self.inbox.observation(self.now())

    def stamped(self, message, frame: str, x: float = 0.0, y: float = 0.0, age: float = 0.0):
        """Fill in header and place."""
        message.header.frame_id = frame
        nanoseconds = self.receiver.get_clock().now().nanoseconds - int(age * 1e9)
        message.header.stamp.sec, message.header.stamp.nanosec = divmod(nanoseconds, 10**9)
        pose = message.pose if isinstance(message, PoseStamped) else message.pose.pose
        pose.position.x, pose.position.y = x, y
        return message


@pytest.fixture(scope="module")
def post():
    rclpy.init()
    made = Post()
    yield made
    made.inbox.close()
    made.receiver.destroy_node()
    made.sender.destroy_node()
    rclpy.shutdown()


def test_odometry_in_its_own_frame_is_placed_by_the_offset(post: Post) -> None:
    """REP 105: pose in header.frame_id, twist in child_frame_id (the body).

    By hand: a frame at (10, 20) turned by 90° to the left; 2 m ahead in it is 2 m
    north of (10, 20); a robot that heads along it and drives ahead goes north.
    """
    message = post.stamped(Odometry(), "placed/odom", x=2.0)
    message.twist.twist.linear.x, message.twist.twist.angular.z = 0.5, 0.1
    post.send("/placed/odom", message)
    seen = post.look()
    assert seen.poses[PLACED] == pytest.approx([10, 22, 0, math.pi / 2])
    assert seen.velocities[PLACED] == pytest.approx([0, 0.5, 0, 0.1], abs=1e-9)
    assert post.now() - seen.pose_times[PLACED] < 0.5


def test_odometry_in_the_site_frame_is_taken_as_it_is(post: Post) -> None:
    """The offset belongs to the declared frame only."""
    message = post.stamped(Odometry(), "site", x=3.0, y=4.0)
    message.pose.pose.orientation.z, message.pose.pose.orientation.w = 1.0, 0.0
    message.twist.twist.linear.x = 0.5
    post.send("/placed/odom", message)
    seen = post.look()
    assert seen.poses[PLACED][:3] == pytest.approx([3, 4, 0])
    assert abs(seen.poses[PLACED][3]) == pytest.approx(math.pi)
    assert seen.velocities[PLACED] == pytest.approx([-0.5, 0, 0, 0], abs=1e-9)


def test_other_pose_types_have_no_velocity(post: Post) -> None:
    """PoseStamped and PoseWithCovarianceStamped."""
    post.send("/plain/pose", post.stamped(PoseStamped(), "site", x=1.0))
    post.send("/covered/pose", post.stamped(PoseWithCovarianceStamped(), "site", x=2.0))
    seen = post.look()
    assert seen.poses[[PLAIN, COVERED], 0] == pytest.approx([1, 2])
    assert np.isnan(seen.velocities[[PLAIN, COVERED]]).all()


def test_targets_on_topics_are_heard_and_stay(post: Post) -> None:
    """A target's last pose stays; one in another frame is refused."""
    assert post.look().targets == {}
    post.send("/guide/pose", post.stamped(PoseStamped(), "site", x=5.0, y=6.0))
    first, second = post.look(), post.look()
    for seen in (first, second):
        assert seen.targets["guide/pose"].pose == pytest.approx([5, 6, 0, 0])
    post.send("/guide/pose", post.stamped(PoseStamped(), "elsewhere", x=9.0))
    assert post.look().targets["guide/pose"].pose[0] == 5.0
    assert "elsewhere" in post.inbox.complaints.recent()["/guide/pose"]


def test_only_the_newest_pose_counts(post: Post) -> None:
    """Depth 1: of many between two looks the last one is taken, and once only."""
    for k in range(20):
        post.send("/plain/pose", post.stamped(PoseStamped(), "site", x=float(k)))
    first, second = post.look(), post.look()
    assert first.poses[PLAIN, 0] == 19
    assert second.pose_times[PLAIN] == first.pose_times[PLAIN]


def nan_position(message: PoseStamped) -> None:
    message.pose.position.y = math.nan


def infinite_position(message: PoseStamped) -> None:
    message.pose.position.x = math.inf


def absurd_position(message: PoseStamped) -> None:
    message.pose.position.x = 1e300


def zero_quaternion(message: PoseStamped) -> None:
    message.pose.orientation.w = 0.0


def long_quaternion(message: PoseStamped) -> None:
    message.pose.orientation.w = 7.0


def nan_quaternion(message: PoseStamped) -> None:
    message.pose.orientation.z = math.nan


def other_frame(message: PoseStamped) -> None:
    message.header.frame_id = "map"


def no_frame(message: PoseStamped) -> None:
    message.header.frame_id = ""


@pytest.mark.parametrize(
    ("spoil", "reason"),
    [
        (nan_position, "the position is not finite"),
        (infinite_position, "the position is not finite"),
        (absurd_position, "the position is absurdly large"),
        (zero_quaternion, "the quaternion has length 0"),
        (long_quaternion, "the quaternion has length 7"),
        (nan_quaternion, "the quaternion has length nan"),
        (other_frame, "frame_id is 'map', the team file says 'site'"),
        (no_frame, "frame_id is '', the team file says 'site'"),
    ],
)
def test_a_pose_of_no_use_is_refused(post: Post, spoil, reason: str) -> None:
    """The last good one stays and ages; the complaint names topic and reason."""
    post.send("/plain/pose", post.stamped(PoseStamped(), "site", x=5.0))
    good = post.look()
    message = post.stamped(PoseStamped(), "site", x=6.0)
    spoil(message)
    refused = post.inbox.complaints.refused.get("/plain/pose", 0)
    post.send("/plain/pose", message)
    seen = post.look()
    assert seen.poses[PLAIN, 0] == 5.0
    assert seen.pose_times[PLAIN] == good.pose_times[PLAIN]
    assert post.inbox.complaints.refused["/plain/pose"] == refused + 1
    assert reason in post.inbox.complaints.last["/plain/pose"][0]


def test_a_wrong_velocity_does_not_cost_the_pose(post: Post) -> None:
    """Only the velocity is not used."""
    message = post.stamped(Odometry(), "site", x=7.0)
    message.twist.twist = Twist()
    message.twist.twist.linear.x = math.nan
    post.send("/placed/odom", message)
    seen = post.look()
    assert seen.poses[PLACED, 0] == 7.0
    assert np.isnan(seen.velocities[PLACED]).all()


@pytest.mark.parametrize("age", [-30.0, 30.0, 3000.0])
def test_a_stamp_of_another_clock_is_replaced_by_the_arrival(post: Post, age: float) -> None:
    """Seconds off, before or after: the pose counts from when it arrived."""
    post.send("/plain/pose", post.stamped(PoseStamped(), "site", x=8.0, age=age))
    time.sleep(0.2)
    seen = post.look()
    assert seen.poses[PLAIN, 0] == 8.0
    assert 0.15 < post.now() - seen.pose_times[PLAIN] < 2.0
    assert "the time of arrival is used" in post.inbox.complaints.last["/plain/pose"][0]


def test_a_repeated_message_is_no_news(post: Post) -> None:
    """A publisher that repeats its last pose for ever must not keep a robot alive."""
    message = post.stamped(PoseStamped(), "site", x=9.0)
    post.send("/plain/pose", message)
    first = post.look()
    post.send("/plain/pose", message)
    assert post.look().pose_times[PLAIN] == first.pose_times[PLAIN]


def test_stamps_alone() -> None:
    """The rules for one topic, without messages."""
    reader = StampReader()
    assert reader.time_of(100.0, 99.9, 0.0) == (99.9, "")  # no stamp
    assert reader.time_of(100.0, 99.9, 99.5) == (99.5, "")
    assert reader.time_of(100.1, 100.0, 99.5)[0] is None  # repeated
    assert reader.time_of(100.1, 100.0, 99.2)[0] is None  # out of order
    assert reader.time_of(100.1, 100.0, 100.15) == (100.1, "")  # a little ahead
    assert reader.time_of(100.2, 100.0, 20.0)[0] == 100.0  # a restarted clock
    reader.forget()
    assert reader.time_of(50.0, 49.9, 49.8) == (49.8, "")


def test_poses_that_come_late_are_as_old_as_they_are() -> None:
    """A delay that grows is no clock that disagrees: nobody is taken to be where it was."""
    reader, odd = StampReader(), ""
    for k in range(600):
        now = 1000.0 + 0.1 * k
        stamp = now - 0.05 - 0.01 * k
        when, odd = reader.time_of(now, now, stamp)
        assert when == stamp
    assert odd == "a message came 6.0 s late"
    # With a longer pose_timeout, that is no news worth telling.
    assert StampReader().time_of(100.0, 100.0, 97.5, believed=3.0) == (97.5, "")


def test_a_clock_that_disagrees_from_the_start_or_drifts_is_not_believed() -> None:
    reader = StampReader()
    assert reader.time_of(100.0, 99.9, 97.0)[0] == 99.9
    assert reader.time_of(100.1, 100.0, 97.1)[0] == 100.0
    reader.forget()
    # Half a millisecond a second slower; after an hour it is 1.8 s behind.
    for k in range(3600):
        when, odd = reader.time_of(1000.0 + k, 1000.0 + k, (1000.0 + k) * (1 - 5e-4) + 0.5)
    assert when == 1000.0 + k and "behind this node's clock" in odd
    # Set back by 5 s, and then right again.
    reader.forget()
    assert reader.time_of(50.0, 50.0, 49.9)[0] == 49.9
    assert reader.time_of(50.1, 50.1, 45.0)[0] == 50.1
    assert reader.time_of(50.2, 50.2, 45.1)[0] == 50.2
    assert reader.time_of(50.3, 50.3, 50.2)[0] == 50.2


def test_a_clock_that_was_set_is_noticed(monkeypatch) -> None:
    """Back at once; ahead only where less time went by, and not where time runs fast."""
    real = [50.0]
    monkeypatch.setattr("time.monotonic", lambda: real[0])
    watch = ClockWatch()

    def look(now: float, later: float = 0.1) -> float:
        real[0] += later
        return watch.look(now)

    assert look(1000.0) == 0.0
    assert look(1000.1) == 0.0
    assert look(999.9) == pytest.approx(-0.2)
    assert look(1000.0) == 0.0
    assert look(1300.0) == 300.0
    assert look(1300.1) == 0.0
    assert look(1310.0, later=9.9) == 0.0  # the machine slept, or the loop was stopped
    assert look(1315.0) == 5.0  # a simulation that runs fast: once,
    assert [look(1315.0 + 5 * k) for k in range(1, 9)] == [0.0] * 8  # then it is believed
    assert look(20.0) == pytest.approx(-1335.0)


def test_arrival_lies_between_two_looks() -> None:
    """Whatever the system clock does."""
    received = time.time_ns() - 50_000_000
    assert arrival_time(10.0, received, 9.9) == pytest.approx(9.95, abs=0.02)
    assert arrival_time(10.0, time.time_ns() - 10**12, 9.9) == pytest.approx(9.9)
    assert arrival_time(10.0, time.time_ns() + 10**12, 9.9) == 10.0
    assert arrival_time(10.0, 0, 9.9) == 10.0  # the middleware does not tell
    assert arrival_time(10.0, received, math.nan) == pytest.approx(9.95, abs=0.02)


def test_health_keeps_the_last_report_of_each_name_we_know(post: Post) -> None:
    """Shell wildcards in the rules; other names are dropped."""
    levels = [DiagnosticStatus.ERROR, DiagnosticStatus.OK, DiagnosticStatus.WARN]
    post.send(
        "/diagnostics",
        DiagnosticArray(
            status=[DiagnosticStatus(name="placed/cam 1", level=level) for level in levels]
            + [DiagnosticStatus(name="disk", level=DiagnosticStatus.ERROR)]
        ),
    )
    assert [(r.name, r.level) for r in post.look().health] == [("placed/cam 1", 1)]
    assert post.look().health == ()


def test_brackets_in_a_rule_hide_no_status(post: Post) -> None:
    """What stands between brackets is in no message as it stands in the rule."""
    rules = TEAM.replace('"placed/cam*"', '"placed [ab]: cam"')
    inbox = Inbox(post.receiver, parse_team(rules))
    publisher = post.sender.create_publisher(DiagnosticArray, "/diagnostics", 10)
    until(lambda: publisher.get_subscription_count() == 2, "two listeners")
    broken = DiagnosticStatus(name="placed b: cam", level=b"\x02")

    def heard() -> list[str]:
        publisher.publish(DiagnosticArray(status=[broken]))
        return [report.name for report in inbox.observation(post.now()).health]

    assert until(heard, "the status") == ["placed b: cam"]
    inbox.close()
    post.look()
    post.sender.destroy_publisher(publisher)


def test_thousands_of_names_we_do_not_know_cost_next_to_nothing(post: Post, monkeypatch) -> None:
    """They are passed over before they are decoded, which would take many periods."""
    many = [
        DiagnosticStatus(level=b"\x02", name=f"stranger/{k}", message="x" * 50)
        for k in range(1000)
    ]
    decoded = []
    monkeypatch.setattr(
        polling,
        "deserialize_message",
        lambda *message: decoded.append(1) or deserialize_message(*message),
    )
    for _ in range(20):
        post.send("/diagnostics", DiagnosticArray(status=many))
    ours = DiagnosticStatus(level=b"\x01", name="placed/camera")
    post.send("/diagnostics", DiagnosticArray(status=[*many[:9], ours]))
    assert [(r.name, r.level) for r in post.look().health] == [("placed/camera", 1)]
    assert len(decoded) == 1


def test_a_monstrous_message_is_refused_unread(post: Post) -> None:
    many = [DiagnosticStatus(name=f"placed/cam{k}", message="x" * 100) for k in range(3000)]
    post.send("/diagnostics", DiagnosticArray(status=many))
    time.sleep(0.3)  # it comes in many pieces
    assert post.look().health == ()
    assert "bytes, at most" in post.inbox.complaints.last["/diagnostics"][0]


@pytest.mark.parametrize("level", [4, 17, 255])
def test_a_level_out_of_range_is_refused(post: Post, level: int) -> None:
    """DiagnosticStatus.level is a byte of which four values have a meaning."""
    good = DiagnosticStatus(level=b"\x02", name="placed/camera")
    bad = DiagnosticStatus(level=bytes([level]), name="placed/cam2")
    post.send("/diagnostics", DiagnosticArray(status=[bad, good]))
    assert [report.name for report in post.look().health] == ["placed/camera"]
    assert f"'placed/cam2' has level {level}" in post.inbox.complaints.last["/diagnostics"][0]


@pytest.mark.parametrize("charge", [1.0001, -0.01, 80.0, math.inf, -math.inf, math.nan])
def test_a_charge_out_of_range_leaves_the_last_one(post: Post, charge: float) -> None:
    """BatteryState.percentage: "Charge percentage on 0 to 1 range (If unmeasured NaN)"."""
    post.send("/plain/battery_state", BatteryState(percentage=0.5))
    good = post.look()
    refused = post.inbox.complaints.refused.get("/plain/battery_state", 0)
    post.send("/plain/battery_state", BatteryState(percentage=charge))
    seen = post.look()
    assert seen.charges[PLAIN] == 0.5
    assert seen.charge_times[PLAIN] == good.charge_times[PLAIN]
    told = post.inbox.complaints.refused.get("/plain/battery_state", 0) - refused
    assert told == (not math.isnan(charge)), "NaN says that nothing is measured: no fault"


@pytest.mark.parametrize("variance", [0.0, -1.0, 1e9, math.nan, math.inf])
def test_covariances_that_say_unknown_do_not_matter(post: Post, variance: float) -> None:
    """sensor_msgs use -1 for unknown, others zero or huge: the pose is taken as it is."""
    message = post.stamped(PoseWithCovarianceStamped(), "site", x=3.0)
    message.pose.covariance = [variance] * 36
    post.send("/covered/pose", message)
    assert post.look().poses[COVERED, 0] == 3.0


def test_a_flood_of_poses_and_goals_is_read_once_a_period(post: Post) -> None:
    """2000 messages between two looks: the newest pose, one goal, and no time lost."""
    for k in range(2000):
        message = post.stamped(PoseStamped(), "site", x=float(k % 90))
        if not k:
            post.send("/plain/pose", message)
            post.send("/allocator/tasks/gate/goal", message)
        for topic in ("/plain/pose", "/allocator/tasks/gate/goal"):
            post._publishers[topic].publish(message)
    time.sleep(0.1)
    seen = post.look()
    assert len(seen.goals) == 1
    assert post.now() - seen.pose_times[PLAIN] < 0.6


def test_a_topic_of_another_type_is_told(post: Post) -> None:
    """DDS connects no endpoints of different types, so nothing comes: the warning says why."""
    context = Context()
    rclpy.init(context=context)
    stranger = rclpy.create_node("stranger", context=context)
    stranger.create_publisher(Twist, "/plain/pose", 10).publish(Twist())

    def said() -> str:
        post.inbox.notice_publishers()
        return post.inbox.complaints.last.get("/plain/pose", ("",))[0]

    until(lambda: "geometry_msgs/msg/Twist, which cannot be heard" in said(), "a warning")
    assert "its type here is geometry_msgs/msg/PoseStamped" in said()
    post.send("/plain/pose", post.stamped(PoseStamped(), "site", x=4.0))
    assert post.look().poses[PLAIN, 0] == 4.0
    stranger.destroy_node()
    rclpy.shutdown(context=context)


def test_warnings_are_throttled(monkeypatch: pytest.MonkeyPatch) -> None:
    """A topic at a time, and the next one says how many were left out."""
    said, now = [], [1000.0]
    monkeypatch.setattr("allocator_node.ros.complaints.time.monotonic", lambda: now[0])
    complaints = Complaints(type("Logger", (), {"warning": staticmethod(said.append)}))
    for _ in range(1000):
        complaints.refuse("/a", "bad")
        complaints.refuse("/b", "worse")
    assert said == ["/a: refused: bad", "/b: refused: worse"]
    now[0] += 6.0
    complaints.refuse("/a", "bad")
    assert said[2:] == ["/a: refused: bad (999 more since the last warning)"]


def test_what_goes_on_is_said_less_and_less_often(monkeypatch: pytest.MonkeyPatch) -> None:
    """Something else is said as soon as anything may be; after a while of peace all is new."""
    said, now = [], [1000.0]
    monkeypatch.setattr("allocator_node.ros.complaints.time.monotonic", lambda: now[0])
    complaints = Complaints(
        type("Logger", (), {"warning": staticmethod(lambda text: said.append(now[0] - 1000))})
    )
    for _ in range(400):
        complaints.warn("/a", "odd")
        now[0] += 1.0
    assert said == [0, 5, 15, 35, 75, 135, 195, 255, 315, 375]
    now[0] += 1.0
    complaints.warn("/a", "odder")
    assert said[-1] == 401
    now[0] += 200.0
    for _ in range(7):
        complaints.warn("/a", "odd")
        now[0] += 1.0
    assert said[-2:] == [601, 606]


def test_goal_and_quality(post: Post) -> None:
    """An all-zero orientation leaves the heading as it is; numbers out of range are refused."""
    message = post.stamped(PoseStamped(), "site", x=1.0, y=2.0)
    message.pose.orientation.w = 0.0
    post.send("/allocator/tasks/gate/goal", message)
    post.send("/allocator/quality/plain/gate", Float32(data=0.25))
    seen = post.look()
    (goal,) = seen.goals
    assert (goal.task, goal.at, goal.heading) == ("gate", (1.0, 2.0, 0.0), None)
    assert seen.quality == {("plain", "gate"): 0.25}
    for quality in (-0.1, 1.5, math.nan):
        post.send("/allocator/quality/plain/gate", Float32(data=quality))
        assert post.look().quality == {}
    message.pose.orientation.z = 1.0
    post.send("/allocator/tasks/gate/goal", message)
    assert abs(post.look().goals[0].heading) == pytest.approx(math.pi)
    message.pose.position.x = math.nan
    post.send("/allocator/tasks/gate/goal", message)
    assert post.look().goals == ()


def test_forgetting_times_forgets_what_was_heard(post: Post) -> None:
    """After a clock that was set back nothing counts as heard."""
    post.send("/plain/pose", post.stamped(PoseStamped(), "site"))
    assert np.isfinite(post.look().pose_times[PLAIN])
    post.inbox.forget_times()
    assert np.isnan(post.look().pose_times).all()
    assert np.isnan(post.look().poses).all()


def test_a_large_team_listens_to_quality_once_it_is_published(post: Post, monkeypatch) -> None:
    """Robots times tasks can be thousands of topics, of which few are ever used."""
    monkeypatch.setattr("allocator_node.ros.inbox.AT_ONCE", 0)
    topic = "/allocator/quality/covered/gate"
    post.inbox.notice_publishers()
    until(lambda: not post.sender.count_subscribers(topic), "nobody listens")
    publisher = post.sender.create_publisher(Float32, topic, 10)

    def matched() -> int:
        post.inbox.notice_publishers()
        return publisher.get_subscription_count()

    until(matched, "a listener")
    publisher.publish(Float32(data=0.5))
    time.sleep(0.05)
    assert post.look().quality == {("covered", "gate"): 0.5}


class Tree:
    """A tf tree of one robot."""

    def __init__(self) -> None:
        self.transform = TransformStamped()
        self.transform.transform.rotation.w = 1.0

    def newest(self, frame: str, child: str) -> TransformStamped:
        if (frame, child) != ("site", "rover/base_link"):
            raise ValueError(f"no {child} in {frame}")
        return self.transform


def test_a_pose_from_tf_is_news_only_when_its_stamp_is() -> None:
    """The tree keeps the last transform for ever; a robot that stopped publishing is silent."""
    complaints = Complaints(rclpy.logging.get_logger("tf"))
    tree = Tree()
    source = PoseTransform(tree, "rover/base_link", "site", complaints)
    tree.transform.header.stamp.sec = 100
    tree.transform.transform.translation.x = 3.0
    seen = source.look(100.2)
    assert seen.pose == pytest.approx([3, 0, 0, 0])
    assert seen.time == 100.0
    assert source.look(100.3) is None
    tree.transform.header.stamp.sec = 101
    assert source.look(101.1).time == 101.0
    tree.transform.header.stamp.sec = 102
    tree.transform.transform.rotation.w = 0.0
    assert source.look(102.0) is None
    assert "quaternion" in complaints.last["tf rover/base_link"][0]
    tree.transform.transform.rotation.w = 1.0
    late = PoseTransform(tree, "rover/base_link", "site", complaints)
    assert late.look(3700.0) is None, "an hour old: the robot died before we listened"
    tree.transform.header.stamp.sec = 3700
    assert late.look(3700.1).time == 3700.0
    late.forget_times()
    assert late.look(3705.0) is None, "our clock was set ahead; nothing came"
    lost = PoseTransform(tree, "rover/body", "site", complaints)
    assert lost.look(102.0) is None
    assert complaints.last["tf rover/body"][0] == "refused: no rover/body in site"
