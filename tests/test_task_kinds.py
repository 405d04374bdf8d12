"""Every kind of task at work: each story under config/, and the mathematics behind it."""

from __future__ import annotations

import json
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pytest
import shapely
from builders import OMNI, ROVER, Crew, robot, team_of, watch
from scipy.spatial.distance import pdist

from allocator_node.allocator import Allocator
from allocator_node.charging import Charging
from allocator_node.charging import Crew as Party
from allocator_node.decision import Cause
from allocator_node.files import plugins
from allocator_node.files.document import FileError
from allocator_node.model import Model
from allocator_node.settings import Settings
from allocator_node.sim import rehearsal as rehearsals
from allocator_node.sim.record import Rehearsal
from allocator_node.sim.rehearsal import rehearse
from allocator_node.sim.world import SimulatedTeam
from allocator_node.sim.world_file import World, parse_world, read_world
from allocator_node.tasks import (
    Cover,
    Encircle,
    Follow,
    Formation,
    Goals,
    Patrol,
    Scene,
    Sweep,
    Task,
    Visit,
    Watch,
    known_kinds,
)
from allocator_node.tasks.cover import Bump
from allocator_node.tasks.lanes import lanes_of
from allocator_node.team import Battery, HeadCount, Target, Team
from allocator_node.team_file import merge_tasks, parse_team, read_team
from allocator_node.work import Work

CONFIG = Path(__file__).parents[1] / "config"


def story(name: str) -> tuple[Team, World]:
    """Read a team file under config/ and, if there is one, its world."""
    team = read_team(CONFIG / f"{name}.yaml")
    world = CONFIG / f"{name}_world.yaml"
    return team, read_world(world, team) if world.exists() else World()


def changes(run: Rehearsal, task: str) -> list[tuple[float, str, set[str], set[str]]]:
    """Give the changes of a task: when, why, who left, who joined."""
    return [
        (e["t"], e["cause"], set(e["from"]) - set(e["to"]), set(e["to"]) - set(e["from"]))
        for e in run.events
        if e["task"] == task
    ]


def group(run: Rehearsal, task: str, at: float) -> list[str]:
    """Give the robots on a task at a time."""
    task_of = {}
    for change in run.assignments:
        if change["t"] <= at:
            task_of[change["robot"]] = change["task"]
    return sorted(name for name, does in task_of.items() if does == task)


def pose(run: Rehearsal, name: str, second: int) -> np.ndarray:
    """Give a robot's true x, y, z, heading at a full second."""
    return np.array(run.paths[name][second][1:])


def unharmed(run: Rehearsal) -> None:
    """Bodies never touched, nobody left the site."""
    assert run.min_separation_m is None or run.min_separation_m > 0
    assert run.boundary_violations == run.body_violations == 0


# -- encircle -----------------------------------------------------------------------------


@dataclass(frozen=True)
class RingSeen:
    """Attributes: distances, m, gaps between neighbours and headings off outward, deg."""

    radius: np.ndarray
    gaps: np.ndarray
    facing: np.ndarray


def ring_seen(run: Rehearsal, around: str, ring: str, second: int) -> RingSeen:
    """Measure a ring around the one robot of a task, by the true poses."""
    (middle,) = group(run, around, second)
    lamps = np.array([pose(run, name, second) for name in group(run, ring, second)])
    apart = lamps[:, :2] - pose(run, middle, second)[:2]
    bearing = np.arctan2(apart[:, 1], apart[:, 0])
    ordered = np.sort(np.degrees(bearing))
    off = np.degrees(np.angle(np.exp(1j * (lamps[:, 3] - bearing))))
    gaps = np.diff(ordered, append=ordered[0] + 360)
    return RingSeen(np.linalg.norm(apart, axis=1), gaps, off)


def assert_ring(run: Rehearsal, around: str, ring: str, second: int, radius: float, face: float):
    """Check radius within 5 %, spacing within 10°, facing within 10° of ``face`` off outward."""
    seen = ring_seen(run, around, ring, second)
    assert seen.radius == pytest.approx(radius, rel=0.05), second
    assert seen.gaps == pytest.approx(360 / len(seen.gaps), abs=10), second
    off = (seen.facing - face + 180) % 360 - 180
    assert off == pytest.approx(0, abs=10), second


@pytest.fixture(scope="module")
def night():
    team, world = story("night_repair")
    return rehearse(team, world, 135.0, seed=1)


def test_floodlights_keep_a_ring_around_whoever_mends(night):
    """The mender drives at half the lamps' speed; corners of its way lie between."""
    speed = np.diff([row[1:3] for row in night.paths["mender_1"]], axis=0)[28:43]
    assert np.linalg.norm(speed, axis=1).mean() == pytest.approx(0.5, rel=0.05)
    for second in (*range(28, 45, 3), *range(70, 80, 3), *range(106, 115, 3)):
        assert_ring(night, "cable", "light", second, radius=4, face=0)


def test_the_ring_goes_over_to_whoever_takes_the_repair(night):
    """In the period of the change itself the lamps already turn to the other mender."""
    assert changes(night, "cable")[1] == (45.0, "feature", {"mender_1"}, {"mender_2"})
    assert [cause for _, cause, _, _ in changes(night, "light")] == ["start"] + 2 * ["feature"]
    closing = [
        np.linalg.norm(pose(night, lamp, s)[:2] - pose(night, "mender_2", s)[:2])
        for s in (45, 47)
        for lamp in ("lamp_1", "lamp_2", "lamp_3")
    ]
    assert all(np.array(closing[3:]) < np.array(closing[:3]) - 1.0)


def test_a_spare_lamp_fills_the_place_and_then_the_others_spread(night):
    first, second = changes(night, "light")[1:]
    assert first == (80.0, "feature", {"lamp_2"}, {"lamp_4"})
    assert second == (115.0, "feature", {"lamp_1"}, set())
    assert group(night, "light", 120) == ["lamp_3", "lamp_4"]
    for at in (126, 130, 134):
        assert_ring(night, "cable", "light", at, radius=4, face=0)
    unharmed(night)


def test_soft_ground_hands_the_work_to_a_drone_and_the_ring_follows():
    team, world = story("soft_ground")
    run = rehearse(team, world, 100.0, seed=1)
    (start, passed) = changes(run, "ditch")
    assert start[1] == "start"
    assert passed[1:] == ("efficacy", {"rover_1"}, {"drone_1"})
    assert [cause for _, cause, _, _ in changes(run, "light")] == ["start"]
    for second in (20, 25, 30, 85, 90, 95):
        assert_ring(run, "ditch", "light", second, radius=5, face=180)
    unharmed(run)


def test_a_ring_whose_middle_is_unknown_holds_where_it_is():
    """Nobody may do the repair, so nobody knows where it is."""
    lamp, mender = robot("lamp", 5, 5), robot("mender", 0, 0, features=("arm",))
    cable = watch("cable", 20, 20, each=("rough",))
    light = Encircle(name="light", around=Target(task="cable"), radius=3, needs={"scan": 1})
    crew = Crew(team_of([lamp, mender], [cable, light]))
    decision = crew.drive(3.0)
    assert decision.task_of(0) == "light"
    assert crew.poses[0, :2] == pytest.approx([5, 5])


def test_ways_to_a_new_ring_do_not_cross():
    """The least total way has no crossings (triangle inequality: uncrossing shortens)."""
    random = np.random.default_rng(5)
    for _ in range(20):
        at = random.uniform(-12, 12, (6, 2))
        robots = [robot(f"r{i}", *place) for i, place in enumerate(at)]
        light = Encircle(name="light", around=(0, 0), radius=5, robots=HeadCount(6, 6))
        goals = Crew(team_of(robots, [light])).step().goals[:, :2]
        ways = [shapely.LineString([a, b]) for a, b in zip(at, goals, strict=True)]
        assert not any(ways[i].crosses(ways[j]) for i in range(6) for j in range(i))


def test_facing_a_point_and_the_axle_on_the_circle():
    """Differential robots steer a point ahead of the axle; the ring is meant for the axle,
    which stays where it is while they turn on the spot.
    """
    robots = [robot(f"r{i}", 9, 3 * i, drive=ROVER, radius=0.3) for i in range(3)]
    light = Encircle(name="light", around=(0, 3), radius=5, face=(0.0, 3.0), robots=HeadCount(3, 3))
    crew = Crew(team_of(robots, [light]))
    crew.drive(40.0)
    apart = crew.poses[:, :2] - [0, 3]
    assert np.linalg.norm(apart, axis=1) == pytest.approx(
        5, abs=1.5 * light.tolerance + 2 * ROVER.ahead
    )
    inward = np.arctan2(-apart[:, 1], -apart[:, 0])
    off = np.angle(np.exp(1j * (crew.poses[:, 3] - inward)))
    assert np.abs(off).max() < np.radians(10)


# -- cover --------------------------------------------------------------------------------


def locational_cost(points: np.ndarray, side: float) -> float:
    """Give H = Σ ∫_{V_i} ‖q − p_i‖² dq over a square of a side, scaled to the unit square.

    Cells by half-plane clipping; the integral over a polygon about p_i is the sum
    over its edges a→b of (a × b)(a·a + a·b + b·b) / 12 (Green's theorem).
    """
    total = 0.0
    for i, p in enumerate(points):
        cell = shapely.box(0, 0, side, side)
        for q in np.delete(points, i, axis=0):
            middle, normal = (p + q) / 2, (q - p) / np.linalg.norm(q - p)
            along = np.array([-normal[1], normal[0]])
            far = 10 * side
            corners = (middle + far * along, middle - far * along)
            half = [*corners, corners[1] - far * normal, corners[0] - far * normal]
            cell = cell.intersection(shapely.Polygon(half))
        a = shapely.get_coordinates(cell.exterior)[:-1] - p
        b = np.roll(a, -1, axis=0)
        cross = a[:, 0] * b[:, 1] - a[:, 1] * b[:, 0]
        moment = cross * ((a * a).sum(1) + (a * b).sum(1) + (b * b).sum(1)) / 12
        total += abs(moment.sum())
    return total / side**4


@pytest.fixture(scope="module")
def gas():
    team, world = story("gas_watch")
    return rehearse(team, world, 70.0, seed=1)


def test_four_robots_in_a_square_end_at_the_quarters(gas):
    """A square of side s has ∫ ‖q − c‖² = s⁴/6 about its centre c; four of side 1/2 make
    4 · (1/2)⁴ / 6 = 1/24.
    """
    paths = np.array([
        [row[1:3] for row in gas.paths[f"sniffer_{i}"]] for i in (1, 2, 3, 4)
    ])
    quarters = 28 * np.array([[0.25, 0.25], [0.75, 0.25], [0.25, 0.75], [0.75, 0.75]])
    assert locational_cost(quarters, 28) == pytest.approx(1 / 24, rel=1e-9)
    costs = np.array([locational_cost(paths[:, k], 28) for k in range(paths.shape[1])])
    assert costs[-1] <= 1.01 / 24
    assert np.diff(costs).max() <= 1e-9
    assert costs[0] > 5 * costs[-1]
    unharmed(gas)


def test_a_density_draws_robots_to_where_it_is(gas):
    """The last places are centroids of their own cells: Lloyd's fixed point, by brute force."""
    team, _ = story("gas_watch")
    task = team.tasks["containers"]
    x, y = np.meshgrid(np.linspace(34, 60, 261), np.linspace(2, 26, 241))
    grid = np.column_stack([x.ravel(), y.ravel()])
    density = sum(
        bump.weight * np.exp(-((grid - bump.at) ** 2).sum(axis=1) / (2 * bump.spread**2))
        for bump in task.density
    )
    drones = np.array([pose(gas, name, 69)[:2] for name in ("drone_1", "drone_2")])
    nearest = np.linalg.norm(grid[:, None] - drones, axis=2).argmin(axis=1)
    for i, at in enumerate(drones):
        own = nearest == i
        centroid = (grid[own] * density[own, None]).sum(axis=0) / density[own].sum()
        assert np.linalg.norm(at - centroid) <= 0.25
    assert min(np.linalg.norm(drones - (52, 8), axis=1)) < 2


def test_cover_moves_with_its_density():
    bump = Bump(at=(1, 1), spread=2)
    cover = Cover(name="c", area=((0, 0), (4, 0), (4, 4), (0, 4)), density=(bump,))
    moved = cover.moved((12, 2, 0), None)
    assert moved.area == ((10, 0), (14, 0), (14, 4), (10, 4))
    assert moved.density[0].at == (11, 1)


# -- sweep --------------------------------------------------------------------------------


class Footprints:
    """What the tools of a sweep covered, bars across their robots at the control points.

    They are down whenever a robot is on the task, on its way between lanes, too.
    """

    def __init__(self, team: Team, task: str) -> None:
        self.index = list(team.tasks).index(task)
        self.area = shapely.Polygon(team.tasks[task].area)
        self.width = team.tasks[task].lane_width
        self.ahead = np.array([robot.drive.ahead for robot in team.robots.values()])
        self.strokes: list[shapely.Polygon] = []
        self.last: dict[int, np.ndarray] = {}

    def note(self, poses: np.ndarray, assignment: np.ndarray) -> None:
        """Note one short stroke of each tool that is down."""
        heading = poses[:, 3]
        facing = np.column_stack([np.cos(heading), np.sin(heading)])
        across = self.width / 2 * np.column_stack([-facing[:, 1], facing[:, 0]])
        middles = poses[:, :2] + self.ahead[:, None] * facing
        bars = np.stack([middles - across, middles + across], axis=1)
        for i, bar in enumerate(bars):
            if assignment[i] != self.index:
                self.last.pop(i, None)
                continue
            if i in self.last:
                self.strokes.append(shapely.MultiPoint([*self.last[i], *bar]).convex_hull)
            self.last[i] = bar

    def shares(self) -> tuple[float, float]:
        """Give the area covered, and all strokes together, as shares of the area."""
        inside = shapely.intersection(self.strokes, self.area)
        union = shapely.union_all(inside, grid_size=1e-4)
        return union.area / self.area.area, shapely.area(inside).sum() / self.area.area


@pytest.fixture(scope="module")
def swept():
    """Sweep the yard, with a brush breaking half-way; as rehearse does, with footprints."""
    team, world = story("hail_sweep")
    allocator, simulated = Allocator(team), SimulatedTeam(team, world, seed=1)
    footprints = Footprints(team, "yard")
    progress, finished, log = [], {}, []
    for _ in range(4000):
        decision = allocator.step(simulated.observation(), simulated.now)
        footprints.note(simulated.true_poses, decision.assignment)
        progress.append(decision.progress["yard"])
        log += decision.reallocations
        for task in decision.finished:
            finished.setdefault(task, decision.time)
        if "pictures" in decision.finished:
            break
        for _ in range(2):
            simulated.step(decision.commands, 0.05)
    return footprints, np.array(progress), finished, log


def test_a_sweep_covers_its_area_and_little_twice(swept):
    """The overlap counts turns and ways between lanes, too: the tools stay down."""
    footprints, _, _, _ = swept
    union, total = footprints.shares()
    assert union >= 0.99
    overlap = 0.1
    assert total - 1 <= overlap + 0.15


def test_what_is_swept_stays_swept_when_robots_change(swept):
    _, progress, _, log = swept
    (change,) = [c for c in log if c.task == "yard" and c.before and c.after]
    assert change.cause is Cause.FEATURE
    assert set(change.before) - set(change.after) == {"sweeper_1"}
    assert 0.3 < progress[round(change.time * 10)] < 0.7
    assert (np.diff(progress) >= 0).all()
    assert progress[0] == 0.0 and progress[-1] == 1.0


def test_a_finished_sweep_lets_go_and_the_next_task_begins(swept):
    _, _, finished, log = swept
    done = [c for c in log if c.time == finished["yard"]]
    assert [(c.task, c.cause, c.after) for c in done] == [
        ("yard", Cause.TASK, ()), ("pictures", Cause.TASK, ("rover_1",)),
    ]  # fmt: skip
    assert finished["pictures"] > finished["yard"] + 5


@pytest.mark.parametrize("overlap", [0.0, 0.1, 0.3])
@pytest.mark.parametrize(
    "area",
    [
        ((0, 0), (20, 0), (20, 7), (0, 7)),
        ((0, 0), (9, 12), (1, 18), (-8, 6)),
        ((0, 0), (14, 2), (10, 11), (3, 9)),
        ((0, 0), (20, 0), (20, 12), (14, 12), (14, 5), (6, 5), (6, 12), (0, 12)),
    ],
    ids=["rectangle", "turned", "slanted", "u_shaped"],
)
def test_lanes_cover_any_polygon(area, overlap):
    """Bars along the lanes cover all of it; neighbours share at least the overlap."""
    lanes, width = lanes_of(area, 1.2, overlap), 1.2
    ends = lanes.start + lanes.length[:, None] * lanes.along
    lines = shapely.linestrings(np.stack([lanes.start, ends], axis=1))
    union = shapely.union_all(shapely.buffer(lines, width / 2, cap_style="flat"))
    polygon = shapely.Polygon(area)
    assert polygon.difference(union.buffer(1e-6)).area < 1e-6
    across = lanes.start @ [-lanes.along[1], lanes.along[0]]
    assert np.diff(np.unique(across.round(6))).max() <= width * (1 - overlap) + 1e-6


def test_lanes_run_along_the_longest_side():
    lanes = lanes_of(((0, 0), (9, 12), (1, 18), (-8, 6)), 1.0, 0.0)
    assert abs(lanes.along @ [0.6, 0.8]) == pytest.approx(1)
    assert len(lanes.length) == 10


def scene(points: list[tuple[float, float]], now: float = 0.0, members=None) -> Scene:
    """Give what a task sees of holonomic robots at points."""
    count = len(points)
    return Scene(
        now=now,
        points=np.array([[*point, 0.0] for point in points]),
        headings=np.zeros(count),
        ahead=np.zeros(count),
        members=np.arange(count) if members is None else np.array(members),
        spacing=1.0,
        suffices=lambda robots: True,
        cruise=np.ones(count),
        find=lambda target: None,
    )


def test_lanes_are_shared_in_blocks_and_what_is_left_goes_to_who_is_left():
    task = Sweep(name="s", area=((0, 0), (20, 0), (20, 8), (0, 8)), lane_width=1.0, overlap=0.0)
    state = task.advance(task.begin(), scene([(-1, 1), (-1, 7)]))
    assert sorted(state.shares.values()) == [(0, 1, 2, 3), (4, 5, 6, 7)]
    alone = task.advance(state, scene([(-1, 1), (-1, 7)], members=[1]))
    assert alone.shares == {1: tuple(range(8))}


def test_a_lane_on_which_somebody_cannot_go_on_is_tried_again_last():
    """A robot that stands on its lane for long takes the next one first."""
    task = Sweep(name="s", area=((0, 0), (20, 0), (20, 3), (0, 3)), lane_width=1.0, overlap=0.0)
    state, lanes = task.begin(), []
    for now in np.arange(0, 70, 1.0):
        state = task.advance(state, scene([(-0.1, 0.5)], now))
        lanes.append(state.passes[0].lane)
    assert list(dict.fromkeys(lanes)) == [0, 1, 2]
    assert task.progress(state) == 0.0 and not task.finished(state)


FIELD = Sweep(name="s", area=((0, 0), (20, 0), (20, 8), (0, 8)), lane_width=1.0, overlap=0.0)
ROUNDS = Patrol(name="p", waypoints=((0, 0), (10, 0), (10, 5)), laps=2)


def test_a_sweep_goes_on_after_a_restart_where_it_was():
    """What is done stays done; whoever has the task then shares what is left."""
    team = team_of([robot("one", -1, 0.5), robot("two", -1, 4.5)], [FIELD])
    crew = Crew(team)
    before = crew.drive(60.0).progress["s"]
    assert 0.2 < before < 0.8
    again = Crew(team)
    again.poses[:] = crew.poses
    again.allocator.recall(json.loads(json.dumps(crew.allocator.memory())))
    after = again.step()
    assert after.progress["s"] == pytest.approx(before, abs=0.01)
    assert again.drive(170.0).finished == {"s"}


def test_a_patrol_counts_its_rounds_on_after_a_restart():
    crew = Crew(team_of([robot("one", 0, 0)], [ROUNDS]))
    crew.drive(35.0)  # 26 m a round
    again = Crew(crew.allocator.team)
    again.poses[:] = crew.poses
    again.allocator.recall(json.loads(json.dumps(crew.allocator.memory())))
    assert not again.step().finished
    assert again.drive(30.0).finished == {"p"}


@pytest.mark.parametrize(
    "task, saved",
    [
        (FIELD, None), (FIELD, 3), (FIELD, {}), (FIELD, {"area": [], "left": []}),
        (FIELD, FIELD.saved(FIELD.begin()) | {"left": [[0, 1]]}),
        (FIELD, FIELD.saved(FIELD.begin()) | {"left": [[-9, 99]] * 8}),
        (FIELD, FIELD.saved(FIELD.begin()) | {"left": [[5, 4]] * 8}),
        (FIELD, FIELD.saved(FIELD.begin()) | {"left": [["a", "b"]] * 8}),
        (FIELD, FIELD.saved(FIELD.begin()) | {"left": [[float("nan")] * 2] * 8}),
        (FIELD, FIELD.moved((50, 50, 0), None).saved(FIELD.begin())),
        (ROUNDS, -1), (ROUNDS, "two"), (ROUNDS, 1.5), (ROUNDS, None),
        (replace(ROUNDS, laps=0), 3), (watch("gate", 3, 0), {}),
    ],
)  # fmt: skip
def test_work_that_is_not_of_this_task_begins_anew(task, saved):
    with pytest.raises(ValueError):
        task.restored(saved)
    work = Work(team_of([robot("one", 0, 0)], [task]))
    before = work.saved()
    work.restore(task.name, saved)
    work.restore("unknown", saved)
    assert work.saved() == before


def test_a_sweep_up_to_the_fence_leaves_out_what_the_margins_forbid_and_says_so():
    """On a site 12 m × 4 m the first and last lane and all ends are too near to the fence."""
    corners = ((0, 0), (12, 0), (12, 4), (0, 4))
    task = Sweep(name="s", area=corners, lane_width=1.0, overlap=0.0)
    crew = Crew(replace(team_of([robot("one", 2, 2, drive=ROVER)], [task]), boundary=corners))
    decision = crew.drive(80.0)
    assert decision.finished == {"s"}
    # Lanes are 12.2 m; the middle ones keep what is farther from the fence than the body
    # reaches (0.35 + 0.25 m) and the margin (0.3 m).
    kept = 2 * (12.0 - 2 * (0.35 + 0.25 + 0.3))
    assert decision.progress["s"] == pytest.approx(kept / (4 * 12.2), abs=0.03)
    (said,) = (notice.text for notice in decision.notices if notice.about == "s")
    missed = (1 - decision.progress["s"]) * 4 * 12.2
    assert said == f"{missed:.1f} m of its lanes left out: too near to edges of the site"


@pytest.mark.parametrize("backwards", [False, True])
def test_a_lane_is_gone_on_with_beyond_what_cannot_be_reached(backwards):
    """From 4 m to 7 m of its only lane nobody can go."""
    task = Sweep(name="s", area=((0, 0), (20, 0), (20, 1), (0, 1)), lane_width=1.0)
    along = np.arange(-0.1, 20.15, 0.05)[:: -1 if backwards else 1]
    state, at = task.begin(), []
    for now, x in enumerate(along):
        if not 4 <= x <= 7:
            here = replace(
                scene([(x, 0.5)], float(now)),
                clear=lambda points, robot: (points[:, 0] < 4) | (points[:, 0] > 7),
            )
            state = task.advance(state, here)
            at.append(task.goals(state, here).points[0, 0])
    assert task.finished(state)
    assert not any(4.0 < x < 7.0 for x in at), "nobody is sent there"
    assert 3.0 <= state.missed <= 3.5
    assert task.progress(state) == pytest.approx(1 - state.missed / 20.2)


# -- follow, formation, moving goals --------------------------------------------------------


def test_the_carrier_follows_the_beacon_and_the_porter_the_carrier():
    """Both keep their offset in the frame of what they follow, at half speed, without lag."""
    team, world = story("inspection_walk")
    run = rehearse(team, world, 60.0, seed=1)
    for second in (35, 40, 45, 50, 55):
        inspector = np.array([10 + 0.6 * (second - 10), 8])
        carrier, porter = pose(run, "carrier", second), pose(run, "porter", second)
        ahead = carrier[:2] + 0.25 * np.array([np.cos(carrier[3]), np.sin(carrier[3])])
        assert np.linalg.norm(ahead - (inspector + [-2.5, 0])) <= 0.1
        cos, sin = np.cos(carrier[3]), np.sin(carrier[3])
        beside = carrier[:2] + np.array([[cos, -sin], [sin, cos]]) @ [-2, 1]
        assert np.linalg.norm(porter[:2] - beside) <= 0.1
    unharmed(run)


@pytest.mark.parametrize("drive", [OMNI, ROVER], ids=["holonomic", "differential"])
def test_moving_goals_are_kept_up_with_without_lag(drive):
    """A target on a straight way at half the robot's speed: less lag than the tolerance."""
    follow = Follow(name="f", target=Target(topic="tag"), offset=(0.0, 2.0))
    team = team_of([robot("one", 0, 0, drive=drive)], [follow])
    world = parse_world("targets: [{topic: tag, path: [[0, 3, 0], [80, 27, 32]]}]", team)
    run = rehearse(team, world, 60.0)
    way = np.array([0.6, 0.8])
    for second in range(30, 60, 3):
        x, y, _, heading = pose(run, "one", second)
        point = np.array([x, y]) + drive.ahead * np.array([np.cos(heading), np.sin(heading)])
        beside = np.array([3, 0]) + 0.5 * second * way + 2 * np.array([-0.8, 0.6])
        assert np.linalg.norm(point - beside) <= 0.1 < follow.tolerance


def test_followers_of_an_unknown_topic_hold_and_set_out_when_it_is_heard():
    follow = Follow(name="f", target=Target(topic="tag"), offset=(-1.0, 0.0))
    team = team_of([robot("one", 4, 0)], [follow])
    crew = Crew(team)
    crew.drive(2.0)
    assert crew.poses[0, :2] == pytest.approx([4, 0])
    world = parse_world("targets: [{topic: tag, path: [[0, 9, 9]]}]", team)
    assert pose(rehearse(team, world, 30.0), "one", 29)[:2] == pytest.approx([8, 9], abs=0.3)


def test_a_world_whose_targets_are_wrong_says_where():
    follow = Follow(name="f", target=Target(topic="tag"), offset=(-1.0, 0.0))
    team = team_of([robot("one", 4, 0)], [follow])
    text = """
targets:
  - {topic: tak, path: [[0, 9, 9], [0, 1, 1]]}
  - {topic: tag, path: []}
"""
    with pytest.raises(FileError) as caught:
        parse_world(text, team, "w")
    assert str(caught.value).splitlines() == [
        "w:4: targets[1].path: found an empty list; must have at least 1 entry",
    ]
    with pytest.raises(FileError) as caught:
        parse_world(text.replace("path: []", "path: [[0, 0, 0]]"), team, "w")
    assert str(caught.value).splitlines() == [
        'w:3: targets[0].topic: found the text "tak"; must be tag, the only one there is',
        "w:3: targets[0].path[1]: found the time 0 after 0; must be later than the one before",
    ]


def test_nobody_follows_itself():
    follow = Follow(name="f", target=Target(robot="one"), offset=(-1.0, 0.0))
    crew = Crew(team_of([robot("one", 0, 0), robot("two", 9, 0)], [follow]))
    assert crew.step().group_of(0) == ("two",)
    crew = Crew(team_of([robot("one", 0, 0)], [follow]))
    decision = crew.step()
    assert decision.group_of(0) == () and decision.suitability[0, 0] == 0


def test_a_line_of_scanners_moves_as_one_and_closes_its_gap():
    team, world = story("scan_line")
    run = rehearse(team, world, 195.0, seed=1)
    assert changes(run, "line")[1][1:] == ("feature", {"scan_2"}, {"scan_4"})
    for second, middle, offsets in (
        (104, (48, 12), [[0, 4.5], [0, 0], [0, -4.5]]),
        (194, (12, 28), [[0, 4.5], [0, 0], [0, -4.5]]),
    ):
        line = np.array([pose(run, name, second) for name in group(run, "line", second)])
        ahead = line[:, :2] + 0.25 * np.column_stack([np.cos(line[:, 3]), np.sin(line[:, 3])])
        places = np.array(offsets) + middle
        nearest = np.linalg.norm(ahead[:, None] - places, axis=2)
        assert sorted(nearest.argmin(axis=1)) == [0, 1, 2]
        assert nearest.min(axis=1).max() <= 0.5
    # On the way the three keep their distances from each other.
    for second in (*range(10, 25, 5), *range(60, 100, 5), *range(130, 180, 10)):
        line = np.array([pose(run, name, second)[:2] for name in group(run, "line", second)])
        assert np.sort(pdist(line)) == pytest.approx([4.5, 4.5, 9], abs=0.5)
    unharmed(run)


def test_a_formation_has_a_place_for_each_robot():
    formation = Formation(name="f", at=(0, 0), offsets=((0, 0), (2, 0)))
    assert formation.robots == HeadCount(2, 2)
    with pytest.raises(ValueError, match="as many robots as offsets"):
        replace(formation, robots=HeadCount(3, 3))


# -- charging -----------------------------------------------------------------------------

SMALL = Battery(capacity_wh=20, reserve=0.2, idle_w=20, drive_w=100, charge_w=600)


def test_a_robot_that_can_do_nothing_more_charges_and_comes_back():
    """Two take turns; the one that leaves comes back no earlier than at ``charge_until``."""
    tiny = replace(SMALL, capacity_wh=10)
    robots = [
        robot("one", 2, 0, battery=tiny, dock=(0, 0)),
        robot("two", 2, 4, battery=tiny, dock=(0, 4)),
    ]
    loop = Patrol(name="rows", waypoints=((6, 0), (14, 0), (14, 4), (6, 4)), robots=HeadCount(1, 1))
    settings = Settings(charge_until=0.8)
    run = rehearse(team_of(robots, [loop]), None, 700.0, settings=settings, period=0.5)
    assert run.coverage["rows"] == 1.0
    assert {cause for _, cause, _, _ in changes(run, "rows")} == {"start", "energy"}
    assert len(changes(run, "rows")) >= 3
    for name in ("one", "two"):
        charges = np.array(run.charges[name])
        assert charges[:, 1].min() > SMALL.reserve
        does = [row["activity"] for row in run.activities if row["robot"] == name]
        assert "to dock" in does and "charging" in does
        left = [
            row["t"]
            for before, row in zip(run.activities, run.activities[1:], strict=False)
            if row["robot"] == name and row["activity"] == "idle" and row["t"] > 0
        ]
        assert all(charges[charges[:, 0] >= t][0, 1] >= 0.79 for t in left)


def test_a_dock_is_shared_in_turn_by_robots_within_a_metre():
    """Neither can go so far; the first has the dock, the other waits apart."""
    robots = [
        robot("one", 6, 0, battery=SMALL, dock=(0, 0)),
        robot("two", 4, 2, battery=SMALL, dock=(0.5, 0)),
    ]
    crew = Crew(team_of(robots, [watch("far", 100, 0)]))
    crew.charges = np.array([0.21, 0.45])
    assert crew.drive(10.0).activity == ("charging", "queueing")
    assert np.linalg.norm(crew.poses[1, :2]) > 1.0
    crew.charges = np.array([0.5, 0.44])
    assert crew.drive(1.0).activity == ("charging", "queueing")
    crew.charges = np.array([0.95, 0.43])
    decision = crew.drive(15.0)
    assert decision.activity == ("working", "charging")
    assert crew.poses[1, :2] == pytest.approx([0.5, 0], abs=0.2)


@pytest.mark.parametrize(
    ("charge", "has_it"),
    [
        ([0.60, 0.30], "queueing"),  # leaves the dock for one that can do nothing
        ([0.50, 0.30], "charging"),  # not yet: it would soon have to come back
        ([0.30, 0.205], "queueing"),  # one at its last cannot wait
        ([0.24, 0.205], "charging"),  # so near its own last it may stay
    ],
)
def test_when_a_dock_is_left_early(charge, has_it):
    """The first of two has the dock; the second can do nothing."""
    team = team_of(
        [robot(name, 0, 0, battery=SMALL, dock=(0, 0)) for name in ("one", "two")], []
    )
    charging, settings = Charging(Model(team)), Settings(charge_below=0.5)
    both = np.ones(2, dtype=bool)

    def errands(charge, exhausted):
        party = Party(
            now=0.0,
            points=np.array([[0.0, 0, 0], [5, 0, 0]]),
            known=both, heard=both, spare=both, called=~both,
            charge=np.array(charge),
            exhausted=np.array(exhausted),
            above=np.array(charge) - SMALL.reserve,
            reach=np.full(2, 0.4),
        )  # fmt: skip
        return charging.update(party, settings, lambda points, robot: np.ones(len(points), bool))

    assert errands([0.45, 0.9], [False, False]).activity == ("charging", "")
    after = errands(charge, [False, True]).activity
    # Who gives the dock up waits for it again, or is free.
    assert (after[0] or "queueing") == has_it


def test_who_is_charged_steps_aside_for_who_waits():
    robots = [
        robot("one", 0, 0, battery=SMALL, dock=(0, 0)),
        robot("two", 4, 2, battery=SMALL, dock=(0, 0)),
    ]
    crew = Crew(team_of(robots, []))
    crew.charges = np.array([0.45, 0.44])
    assert crew.drive(8.0).activity == ("charging", "queueing")
    crew.charges = np.array([0.95, 0.43])
    assert crew.drive(15.0).activity == ("idle", "charging")


def test_spares_with_energy_stay_put_and_held_robots_say_so():
    crew = Crew(team_of([robot("one", 3, 0, dock=(0, 0))], []))
    crew.charges = np.array([0.6])
    assert crew.drive(3.0).activity == ("idle",)
    assert crew.poses[0, :2] == pytest.approx([3, 0])
    crew.order(hold=True)
    assert crew.step().activity == ("held",)
    crew.silent.add("one")
    assert crew.wait(2.0).activity == ("silent",)


def test_an_order_takes_a_robot_off_its_dock():
    crew = Crew(team_of([robot("one", 0, 0, battery=SMALL, dock=(0, 0))], [watch("near", 5, 0)]))
    crew.charges = np.array([0.21])
    assert crew.drive(2.0).activity == ("charging",)
    crew.charges = np.array([0.6])
    assert crew.step().activity == ("charging",)
    crew.order(pins=frozenset({("one", "near")}))
    assert crew.wait(0.3).activity == ("working",)


def test_ten_hours_on_two_hour_batteries(request, monkeypatch):
    """Scaled by 0.12, batteries and all, unless whole: most of an hour of dock changes.

    Motion is integrated exactly between commands, so the simulation's steps may be long.
    """
    monkeypatch.setattr(rehearsals, "SUBSTEP", 0.5)
    team, world = story("long_watch")
    hours, scale = (10.0, 1.0) if request.config.option.whole else (0.9, 0.12)
    robots = {
        name: replace(
            rover, battery=replace(rover.battery, capacity_wh=scale * rover.battery.capacity_wh)
        )
        for name, rover in team.robots.items()
    }
    battery = team.robots["rover_1"].battery
    assert battery.capacity_wh / (battery.idle_w + battery.drive_w) == pytest.approx(2, abs=0.4)
    run = rehearse(replace(team, robots=robots), world, 3600 * hours, period=1.0)
    assert min(run.coverage.values()) >= 0.95, run.coverage
    for name, rover in team.robots.items():
        assert min(charge for _, charge in run.charges[name]) >= rover.battery.reserve, name
    charged = {row["robot"] for row in run.activities if row["activity"] == "charging"}
    assert charged == set(team.robots)
    unharmed(run)


# -- kinds of other packages ----------------------------------------------------------------


@dataclass(frozen=True, kw_only=True)
class Greet(Task):
    """Meets whoever does another task halfway to a door: a kind of another package."""

    kind = "greet"

    door: tuple[float, float]
    whom: str

    @property
    def keeps_to(self) -> Target:
        return Target(task=self.whom)

    def begin(self) -> None:
        return None

    def advance(self, state: None, scene: Scene) -> None:
        return None

    def goals(self, state: None, scene: Scene) -> Goals:
        guest = scene.locate(self.keeps_to)
        at = np.array([*self.door, np.nan])
        return Goals(at if guest is None else (at + guest.at) / 2, tolerance=0.2)

    def moved(self, at, heading) -> Greet:
        return replace(self, door=at[:2])


@dataclass
class FakeEntryPoint:
    """An installed package's entry point."""

    name: str
    value: str
    loaded: object
    group: str = "allocator_node.tasks"
    dist: None = None

    def load(self) -> object:
        return self.loaded


def test_another_package_adds_a_kind(monkeypatch):
    entry = FakeEntryPoint("greet", "hotel.tasks:Greet", Greet)
    monkeypatch.setattr(
        plugins, "_entries", lambda group: (entry,) if group == entry.group else ()
    )
    assert known_kinds()["greet"] is Greet
    team = parse_team("""
robots:
  guest: {drive: {model: holonomic, max_speed: 1}, start: [10, 0, 0]}
  host: {drive: {model: holonomic, max_speed: 1}, start: [0, 4, 0]}
tasks:
  stay: {kind: watch, at: [10, 0]}
  welcome: {kind: greet, door: [0, 0], whom: stay}
""")
    crew = Crew(team)
    crew.drive(12.0)
    assert crew.poses[1, :2] == pytest.approx([5, 0], abs=0.3)


def test_a_task_edit_keeps_what_it_does_not_name():
    """Targets, densities and offsets survive an edit of something else."""
    for name, task in (
        ("night_repair", "light"), ("gas_watch", "containers"), ("scan_line", "line"),
        ("inspection_walk", "tools_along"), ("hail_sweep", "yard"),
    ):  # fmt: skip
        team, _ = story(name)
        edited = merge_tasks(team, f"{task}: {{priority: 4}}")
        assert edited.tasks[task] == replace(team.tasks[task], priority=4)


def test_every_kind_has_a_story():
    kinds = {
        type(task)
        for path in CONFIG.glob("*.yaml")
        if not path.stem.endswith("_world")
        for task in read_team(path).tasks.values()
    }
    assert kinds >= {Visit, Patrol, Watch, Sweep, Cover, Encircle, Follow, Formation}
