"""PRM: its graph, its lazy search against networkx on all curves tested, its paths."""

import math

import networkx as nx
import numpy as np
import pytest
from tests.planning.search.search_scenes import (
    VEHICLES,
    box,
    check_drivable,
    question,
    random_questions,
)
from tests.planning.search.test_trees import until_found

from byway_planning import Disc, Site, plan
from byway_planning.curves.steer import steer
from byway_planning.motion import segments_free
from byway_planning.search.method import FOUND, FULL, RUNNING
from byway_planning.search.paths import path_cost
from byway_planning.search.roadmap import (
    BLOCKED,
    FREE,
    GOAL_NODE,
    GROWTH,
    START_NODE,
    WAYS_MAX,
    LazyRoadmap,
)
from byway_planning.search.sampling import SAMPLERS
from byway_planning.vehicles.body import DISC

EVERY_VEHICLE = pytest.mark.parametrize("name", VEHICLES)


def curve(search: LazyRoadmap, a: int, b: int) -> tuple[float, bool]:
    """Cost of the curve between two nodes, and whether it is free."""
    q, word = search._q, np.zeros((5, 2))
    p, to = search._map.poses[a], search._map.poses[b]
    count, _, cost = steer(
        q.body.kind, q.body.turn_radius_m, q.body.reverse_factor, q.body.direction_change_m,
        *p, *to, word,
    )  # fmt: skip
    heading = math.atan2(to[1] - p[1], to[0] - p[0]) if q.body.kind == DISC else p[2]
    return cost, segments_free(q.scene, q.body, p[0], p[1], heading, word, count)


@EVERY_VEHICLE
def test_the_first_path_is_the_cheapest_in_a_graph_with_all_curves_tested(name: str) -> None:
    """networkx's Dijkstra on what the roadmap had when the path was found."""
    q = question(VEHICLES[name])
    search = LazyRoadmap(q, "uniform")
    while search.advance(1) != FOUND:
        used = search.node_count
    graph = nx.DiGraph()
    for a in range(used):
        for i in range(search._map.counts[a]):
            b = int(search._map.ways[a, i])
            cost, free = curve(search, a, b)
            assert search._map.costs[a, i] == pytest.approx(cost, abs=1e-12)
            if search._map.states[a, i] != 0:
                assert (search._map.states[a, i] == FREE) == free
            if free:
                graph.add_edge(a, b, weight=cost)
    wanted = nx.shortest_path_length(graph, START_NODE, GOAL_NODE, weight="weight")
    assert search._map.reached[GOAL_NODE] == pytest.approx(wanted, abs=1e-9)
    tested = np.count_nonzero(
        [s for a in range(used) for s in search._map.states[a, : search._map.counts[a]]]
    )
    assert tested < 0.5 * search._map.counts[:used].sum()  # lazy is worth it
    assert (search._map.states[:used] == BLOCKED).any()


@EVERY_VEHICLE
def test_paths_are_drivable_and_get_cheaper(name: str) -> None:
    q = question(VEHICLES[name])
    search, last, found = LazyRoadmap(q), math.inf, 0
    for _ in range(1000):
        if search.advance(400) == FOUND:
            path = search.path()
            cost = path_cost(path, q.body)
            assert cost < last
            check_drivable(path, VEHICLES[name], q)
            last, found = cost, found + 1
    assert found >= 2


@EVERY_VEHICLE
def test_slices_make_no_difference(name: str) -> None:
    """Work goes on where it stopped, to the bit; so all first paths are the same."""
    paths = []
    for step in (1, 13, 5000):
        search = LazyRoadmap(question(VEHICLES[name]))
        until_found(search, step, 2_000_000)
        paths.append(search.path().tobytes())
    assert len(paths[0]) > 0
    assert paths[0] == paths[1] == paths[2]


@pytest.mark.parametrize("sampler", SAMPLERS)
def test_every_sampler_leads_to_a_path(sampler: str) -> None:
    for name in ("disc", "car"):
        q = question(VEHICLES[name])
        search = LazyRoadmap(q, sampler)
        assert until_found(search, 500, 3_000_000)[0] == FOUND
        check_drivable(search.path(), VEHICLES[name], q)


def test_paths_among_random_boxes_stand_the_check() -> None:
    found = 0
    for vehicle in (VEHICLES["dear reverse"], VEHICLES["forward"], VEHICLES["disc"]):
        for q, boxes in random_questions(vehicle, 9, 4):
            search = LazyRoadmap(q)
            if until_found(search, 500, 400_000)[0] == FOUND:
                found += 1
                check_drivable(search.path(), vehicle, q, boxes)
    assert found >= 6


def test_a_bound_holds_and_a_restart_begins_anew() -> None:
    q = question(VEHICLES["disc"])
    search = LazyRoadmap(q)
    until_found(search, 500, 1_000_000)
    first = path_cost(search.path(), q.body)
    search.restart(0.99 * first)
    assert search.node_count == 2
    assert until_found(search, 500, 3_000_000)[0] == FOUND
    assert path_cost(search.path(), q.body) < 0.99 * first


def test_a_node_keeps_its_cheapest_ways() -> None:
    """In the open many more are near than there is room for."""
    q = question(VEHICLES["disc"], {"post": box(20.0, 11.0, 0.5, 0.5)})
    search = LazyRoadmap(q)
    while search.node_count < 600:
        assert search.advance(2000) in (RUNNING, FOUND)
    counts = search._map.counts[: search.node_count]
    assert counts.max() == WAYS_MAX
    assert counts.min() >= 1


def test_memory_is_bounded_and_told(monkeypatch: pytest.MonkeyPatch) -> None:
    from byway_planning.search import roadmap

    monkeypatch.setattr(roadmap, "NODES_MAX", 300)
    search = LazyRoadmap(question(VEHICLES["disc"]))
    statuses = {search.advance(5000) for _ in range(200)}
    assert FULL in statuses
    assert search.node_count == 300


def test_the_roadmap_grows_where_there_is_no_way() -> None:
    wall = {"wall": box(20.0, 0.0, 0.5, 23.2)}  # 0.8 m are left at the top: too narrow
    disc = Disc(radius_m=0.5, clearance_m=0.0)
    search = LazyRoadmap(question(disc, wall, (5.0, 5.0, 0.0), (35.0, 5.0, 0.0)))
    sizes = set()
    for _ in range(200):
        assert search.advance(500) == RUNNING
        sizes.add(search.node_count)
    assert max(sizes) > 100 * GROWTH


def test_prm_by_name_through_plan_keeps_what_it_promises() -> None:
    site = Site.from_shapes({"wall": box(18.0, 0.0, 1.0, 15.0)}, limits_m=(0.0, 0.0, 40.0, 24.0))
    outcome = plan(
        site, VEHICLES["disc"], (5.0, 5.0, 0.0), (34.0, 6.0, 0.0),
        time_left=lambda: 1.0, seed=3, method="prm", work_max=60_000,
    )  # fmt: skip
    assert outcome.kind == "route"
    assert outcome.bound <= outcome.cost < 1.1 * outcome.bound
