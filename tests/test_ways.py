"""Ways around keep-out areas, held against an independent shortest path."""

from __future__ import annotations

import math
from itertools import combinations

import networkx as nx
import numpy as np
import pytest
import shapely
from builders import ROVER, Crew, robot, team_of, watch
from test_traffic import WHEELS, Crossing

from allocator_node.program.ways import Ways
from allocator_node.settings import Settings
from allocator_node.team import KeepOut, Robot, Team

CUP = ((20, 0), (20, 10), (10, 10), (10, 9), (19, 9), (19, 1), (10, 1), (10, 0))
"""A U open to the west: walls 1 m thick, 10 m on a side."""

CLEARANCE = 0.3 + WHEELS.lookahead + Settings().margin
"""What the control point of a robot with a radius of 0.3 m keeps from an edge, m."""


def shortest(start: tuple[float, float], end: tuple[float, float], *areas: tuple) -> float:
    """Give the shortest way of a disc among polygons, by shapely and networkx alone, m.

    Its middle stays out of the areas grown by its clearance, with round corners of 128
    pieces a turn: the visibility graph of these is the textbook's configuration space
    (de Berg et al., Computational Geometry, 3rd ed., chapters 13 and 15, from memory).
    """
    grown = shapely.union_all([shapely.Polygon(area).buffer(CLEARANCE, 32) for area in areas])
    inner = grown.buffer(-1e-3)
    shapely.prepare(inner)
    places = [start, end, *map(tuple, shapely.get_coordinates(grown))]
    graph = nx.Graph()
    for one, two in combinations(range(len(places)), 2):
        if not inner.intersects(shapely.LineString([places[one], places[two]])):
            graph.add_edge(one, two, weight=math.dist(places[one], places[two]))
    return nx.shortest_path_length(graph, 0, 1, weight="weight")


@pytest.mark.parametrize(
    ("start", "place"),
    [
        ((12.0, 5.0, 0.0), (25.0, 5.0)),
        ((17.0, 5.0, 0.0), (25.0, 5.0)),
        ((5.0, 5.0, 0.0), (25.0, 5.0)),
        ((24.0, 3.0, math.pi), (15.0, 5.0)),
    ],
)
def test_a_robot_drives_around_a_cup_on_the_shortest_way(start, place):
    crossing = Crossing([start], [place], keep_out=(KeepOut("cup", CUP),)).play(60)
    point = (start[0] + WHEELS.lookahead * math.cos(start[2]), start[1])
    way = shortest(point, place, CUP)
    assert np.isfinite(crossing.arrived).all()
    # It has arrived a little before the place itself.
    assert crossing.driven[0] <= 1.05 * way
    assert crossing.driven[0] >= 0.95 * (way - Crossing.REACHED)


@pytest.mark.campaign(slice=6, whole=60)
def test_the_length_of_a_way_is_the_shortest(seed):
    random = np.random.default_rng(seed)
    areas = []
    while len(areas) < 4:
        x, y = random.uniform(0, 25, 2)
        corners = random.uniform(0, 6, (6, 2)) + (x, y)
        area = shapely.MultiPoint(corners).convex_hull
        if not any(area.distance(shapely.Polygon(other)) < 3 for other in areas):
            areas.append(tuple(map(tuple, area.exterior.coords[:-1])))
    free = [shapely.Polygon(area).buffer(CLEARANCE + 0.1) for area in areas]
    ends = []
    while len(ends) < 2:
        point = tuple(random.uniform(-2, 32, 2))
        if not any(area.contains(shapely.Point(point)) for area in free):
            ends.append(point)
    team = Team(
        robots={"r": Robot("r", WHEELS)},
        keep_out=tuple(KeepOut(f"k{i}", area) for i, area in enumerate(areas)),
    )
    ways = Ways(team, np.array([CLEARANCE]))
    points, goals = np.array([[*ends[0], 0.0]]), np.array([[[*ends[1], np.nan]]])
    lead = ways.lead(points, goals, np.ones((1, 1), bool))
    # Corners rounded by three pieces, 2 cm farther out.
    assert lead.length[0, 0] == pytest.approx(shortest(*ends, *areas), rel=0.02)


def test_a_goal_walled_in_has_no_way():
    walls = shapely.box(0, 0, 10, 10).difference(shapely.box(1, 1, 9, 9))
    left = walls.intersection(shapely.box(-1, -1, 5, 11))
    right = walls.intersection(shapely.box(5, -1, 11, 11))
    team = Team(
        robots={"r": Robot("r", WHEELS)},
        keep_out=tuple(
            KeepOut(name, tuple(map(tuple, half.exterior.coords[:-1])))
            for name, half in (("left", left), ("right", right))
        ),
    )
    ways = Ways(team, np.array([CLEARANCE]))
    lead = ways.lead(
        np.array([[-5.0, 5.0, 0.0]]), np.array([[[5.0, 5.0, np.nan]]]), np.ones((1, 1), bool)
    )
    assert np.isinf(lead.length[0, 0])


def test_a_site_without_areas_asks_for_no_map():
    team = Team(robots={"r": Robot("r", WHEELS)}, boundary=((0, 0), (9, 0), (9, 9), (0, 9)))
    assert Ways(team, np.array([CLEARANCE])).clear


def test_pricing_takes_the_way_a_robot_would_really_drive():
    """Near as the crow flies but behind a wall loses against farther on open ground."""
    wall = KeepOut("wall", ((5, -20), (6, -20), (6, 20), (5, 20)))
    near = robot("near", 3, 0, drive=ROVER)
    far = robot("far", 20, 0, drive=ROVER)
    team = team_of([near, far], [watch("spot", 8, 0)], keep_out=(wall,))
    crew = Crew(team)
    assert crew.step().group_of(0) == ("far",)
