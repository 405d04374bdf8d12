"""Teams and scenes the benchmarks run on: large teams at work, crowds, faulty missions."""

from __future__ import annotations

import math
import time
from collections.abc import Iterator

import numpy as np
import paths  # noqa: F401
import shapely

from allocator_node.allocator import Allocator
from allocator_node.decision import Decision
from allocator_node.drives import Aerial, Differential, Drive, Holonomic
from allocator_node.model import Model
from allocator_node.observation import Observation
from allocator_node.program import ControlProblem, Safety
from allocator_node.settings import Settings
from allocator_node.sim.motion import advance
from allocator_node.sim.world_file import (
    BatteryEvent,
    Event,
    FeatureEvent,
    GroundPatch,
    Noise,
    PoseEvent,
    StalledEvent,
    TaskEvent,
    World,
)
from allocator_node.tasks import Patrol, Task, Visit, Watch
from allocator_node.team import HeadCount, KeepOut, Robot, Team, Way

PERIOD = 0.1

# -- large teams at work -----------------------------------------------------------------


def farm(robots: int, tasks: int, kind: str = "graded", seed: int = 0) -> Team:
    """Give a team that stands spread over a solar farm, with work all over it.

    Args:
        robots: Number of robots.
        tasks: Number of tasks.
        kind: ``heads``: tasks need a number of robots of a kind; ``graded``: amounts of a
            capability that robots bring in different grades; ``mixed``: half and half.
        seed: Seed of all that is random.
    """
    random = np.random.default_rng(seed)
    side, grid = 12 * math.sqrt(robots), math.ceil(math.sqrt(robots))

    def somewhere() -> tuple[float, float]:
        x, y = random.uniform(3, side - 3, 2)
        return float(x), float(y)

    crew = {}
    for i in range(robots):
        at = ((i % grid + 0.5) * side / grid, (i // grid + 0.5) * side / grid)
        drive = Differential if random.random() < 0.7 else Holonomic
        parts = random.choice(
            ["camera", "gimbal", "probe", "brush"], random.integers(1, 4), replace=False
        )
        crew[f"r{i}"] = Robot(
            f"r{i}", drive(max_speed=float(random.uniform(0.6, 1.5))), features=tuple(parts),
            start=(*at, float(random.uniform(-3, 3))), dock=at,
        )  # fmt: skip

    work: dict[str, Task] = {}
    for m in range(tasks):
        name, skill = f"t{m}", str(random.choice(["scan", "test", "clean"]))
        graded = kind == "graded" or (kind == "mixed" and m % 2 == 0)
        common = {
            "name": name,
            "needs": {skill: float(random.choice([0.6, 1.0, 1.5, 2.0]))} if graded else {},
            "each": () if graded else (skill,),
            "robots": HeadCount(1 if graded else int(random.integers(1, 4)), 5),
            "priority": int(random.integers(1, 4)),
        }
        work[name] = (
            lambda: Visit(at=somewhere(), dwell=1e6, **common),  # noqa: B023
            lambda: Watch(at=somewhere(), face=somewhere(), **common),  # noqa: B023
            lambda: Patrol(waypoints=[somewhere() for _ in range(4)], **common),  # noqa: B023
        )[random.integers(3)]()
    return Team(
        robots=crew,
        tasks=work,
        capabilities={
            "scan": (Way(("camera", "gimbal")), Way(("camera",), 0.6)),
            "test": (Way(("gimbal",)), Way(("probe",), 0.7)),
            "clean": (Way(("probe", "brush"), 0.9), Way(("brush",), 0.35)),
        },
        boundary=((0, 0), (side, 0), (side, side), (0, side)),
    )


def at_work(
    allocator: Allocator, steps: int, seed: int = 0
) -> Iterator[tuple[Decision, float]]:
    """Let a team obey an allocator, with 1 cm of noise on its poses.

    Yields:
        Each decision, and how long the step took, s.
    """
    random = np.random.default_rng(seed)
    crew = allocator.team.robots.values()
    count = len(crew)
    poses = np.zeros((count, 4))
    poses[:, [0, 1, 3]] = [robot.start for robot in crew]
    for step in range(steps):
        now = step * PERIOD
        noise = random.normal(0, 0.01, poses.shape) * [1, 1, 0, 1]
        heard, half = np.full(count, now), np.full(count, 0.8)
        observation = Observation(poses + noise, heard, np.zeros((count, 4)), half, heard)
        begun = time.perf_counter()
        decision = allocator.step(observation, now)
        yield decision, time.perf_counter() - begun
        poses = advance(poses, decision.commands, PERIOD)


# -- crowds ------------------------------------------------------------------------------


def crowd(robots: int, room: float, seed: int = 0) -> ControlProblem:
    """Give the safe-control QP of robots thrown into a square that all want to cross.

    Args:
        robots: Number of robots.
        room: Square metres for each of them.
        seed: Seed of all that is random.
    """
    random = np.random.default_rng(seed)
    side = math.sqrt(room * robots)
    drives = [
        Differential(max_speed=random.uniform(0.6, 1.5), lookahead=0.25),
        Holonomic(max_speed=random.uniform(0.6, 1.5)),
    ]
    crew = [
        Robot(f"r{i}", drives[random.choice(2, p=[0.7, 0.3])], radius=0.35) for i in range(robots)
    ]
    team = Team(
        robots={robot.name: robot for robot in crew}, tasks={}, capabilities={},
        boundary=((0, 0), (side, 0), (side, side), (0, side)),
    )  # fmt: skip
    model, settings = Model(team), Settings()
    places = thrown(random, robots, side, apart=1.45)
    poses = np.column_stack([places, np.zeros(robots), random.uniform(-3, 3, robots)])
    everybody = np.ones(robots, bool)
    away = random.normal(size=(robots, 3)) * [1, 1, 0]
    fleet = model.fleet
    return ControlProblem(
        jacobians=fleet.jacobians(poses),
        limits=fleet.limits,
        lowest=-fleet.limits,
        highest=fleet.limits,
        gear=np.zeros(robots, dtype=int),
        round_limit=fleet.round_limit,
        away=away / np.linalg.norm(away, axis=1, keepdims=True),
        demand=fleet.cruise,
        preferred=np.zeros((robots, 4)),
        rows=Safety(team, model, settings).rows(
            fleet.control_points(poses), everybody, everybody, np.zeros(robots)
        ),
        slack_weight=np.full(robots, settings.slack_weight),
    )


def thrown(random: np.random.Generator, count: int, side: float, apart: float) -> np.ndarray:
    """Give places in a square, each a distance from the others, m, shape (count, 2)."""
    places = np.empty((0, 2))
    while len(places) < count:
        place = random.uniform(1.0, side - 1.0, 2)
        if (np.hypot(*(places - place).T) > apart).all():
            places = np.vstack([places, place])
    return places


# -- faulty missions ---------------------------------------------------------------------

WIDTH, DEPTH = 40.0, 30.0
"""Size of the site of a mission, m."""

CREW = 10


def mission(seed: int, seconds: float) -> tuple[Team, World]:
    """Give a random mission: ten robots, some sheds, three to six tasks, 6 to 19 mishaps."""
    random = np.random.default_rng(seed)
    sheds = tuple(_shed(random, k) for k in range(random.integers(0, 4)))
    free = shapely.box(0, 0, WIDTH, DEPTH).buffer(-1.5)
    for shed in sheds:
        free = free.difference(shapely.Polygon(shed.polygon).buffer(1.5))

    def place(apart: float = 0.0, others: tuple = ()) -> tuple[float, float]:
        while True:
            at = random.uniform(0, WIDTH), random.uniform(0, DEPTH)
            if free.contains(shapely.Point(at)) and all(
                math.dist(at, other) > apart for other in others
            ):
                return at

    robots: dict[str, Robot] = {}
    for i in range(CREW):
        at = place(2.2, tuple(robot.start[:2] for robot in robots.values()))
        drive = _drive(random)
        parts = random.choice(["camera", "arm", "probe"], random.integers(1, 4), replace=False)
        robots[f"r{i}"] = Robot(
            f"r{i}",
            drive,
            radius=random.uniform(0.3, 0.55),
            features=("rotors" if isinstance(drive, Aerial) else "wheels", *map(str, parts)),
            dock=at,
            start=(*at, random.uniform(-3, 3)),
        )
    tasks = {f"t{m}": _task(random, f"t{m}", place) for m in range(random.integers(3, 7))}
    team = Team(
        robots=robots,
        tasks=tasks,
        capabilities={
            "see": (Way(("camera",)),),
            "lift": (Way(("arm",)),),
            "test": (Way(("probe",)), Way(("camera",), 0.5)),
        },
        boundary=((0, 0), (WIDTH, 0), (WIDTH, DEPTH), (0, DEPTH)),
        keep_out=sheds,
    )
    mishaps = [
        event
        for _ in range(random.integers(6, 20))
        for event in _mishap(random, team, random.uniform(5, seconds - 10), place)
    ]
    mud = tuple(
        GroundPatch(
            f"mud{k}", (*place(), random.uniform(1.5, 4)), random.uniform(0.03, 0.6), ("wheels",)
        )
        for k in range(random.integers(0, 3))
    )
    events = tuple(sorted(mishaps, key=lambda event: event.at))
    return team, World(noise=Noise(0.02, 0.01), ground=mud, events=events)


def _shed(random: np.random.Generator, number: int) -> KeepOut:
    (x, y), (w, h) = (random.uniform(8, 30), random.uniform(8, 20)), random.uniform(1, 5, 2)
    return KeepOut(f"shed{number}", ((x, y), (x + w, y), (x + w, y + h), (x, y + h)))


def _drive(random: np.random.Generator) -> Drive:
    speed = random.uniform(0.6, 1.6)
    ramp = None if random.random() < 0.5 else random.uniform(0.5, 1.5)
    return (
        lambda: Differential(
            max_speed=speed, max_turn_rate=random.uniform(0.8, 2), max_acceleration=ramp,
            lookahead=random.uniform(0.15, 0.35),
        ),
        lambda: Holonomic(max_speed=speed, max_acceleration=ramp),
        lambda: Aerial(max_speed=2 * speed, height=(4, 8), max_acceleration=ramp),
    )[random.choice(3, p=[0.5, 0.25, 0.25])]()  # fmt: skip


def _task(random: np.random.Generator, name: str, place) -> Task:  # noqa: ANN001
    common = {
        "name": name,
        "needs": {str(random.choice(["see", "lift", "test"])): random.choice([0.5, 1.0, 2.0])},
        "robots": HeadCount(int(random.integers(1, 3)), int(random.integers(2, 5))),
        "priority": int(random.integers(0, 5)),
    }
    return (
        lambda: Visit(
            at=place(), dwell=random.uniform(0, 20),
            heading=None if random.random() < 0.5 else random.uniform(-3, 3), **common,
        ),
        lambda: Watch(at=place(), face=place(), **common),
        lambda: Patrol(waypoints=[place() for _ in range(random.integers(2, 6))], **common),
    )[random.integers(3)]()  # fmt: skip


def _mishap(random: np.random.Generator, team: Team, at: float, place) -> list[Event]:  # noqa: ANN001
    robot = f"r{random.integers(len(team.robots))}"
    return (
        lambda: [
            FeatureEvent(
                at=at, robot=robot, feature=team.robots[robot].features[-1],
                level=str(random.choice(["error", "warn", "ok"])),
            )
        ],
        lambda: [
            PoseEvent(at=at, robot=robot, pose="silent"),
            PoseEvent(at=at + random.uniform(2, 30), robot=robot, pose="resumed"),
        ],
        lambda: [BatteryEvent(at=at, robot=robot, battery=random.uniform(0.05, 0.6))],
        lambda: [
            StalledEvent(at=at, robot=robot, stalled=True),
            StalledEvent(at=at + random.uniform(5, 60), robot=robot, stalled=False),
        ],
        lambda: [
            TaskEvent(at=at, task=f"t{random.integers(len(team.tasks))}", move=place())
        ],
    )[random.integers(5)]()  # fmt: skip
