"""Nearest nodes: the grid and the look at all agree, with each other and with scipy."""

import math

import numba
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial import cKDTree

from byway_planning.kernel import numba_type
from byway_planning.search.neighbours import (
    NodeGrid,
    clear,
    distance_m,
    insert,
    nearest_k,
    nearest_k_grid,
    new_grid,
    within_radius,
)

BOUNDS = (-5.0, 0.0, 25.0, 20.0)


def nodes_of(seed, count, spread=1.0):
    """Nodes around the bounds; spread above 1 puts some of them outside."""
    rng = np.random.default_rng(seed)
    unit = rng.uniform(-0.5 * spread, 0.5 * spread, (count, 2))
    return np.column_stack([unit * [30.0, 20.0] + [10.0, 10.0], rng.uniform(-7.0, 7.0, count)])


def grid_of(nodes, cell_m):
    grid = new_grid(BOUNDS, len(nodes), cell_m)
    for i, (x, y, _) in enumerate(nodes):
        insert(grid, i, x, y)
    return grid


def by_sorting(nodes, pose, weight):
    """All nodes by distance, then index: plain numpy."""
    turn = np.abs((nodes[:, 2] - pose[2] + math.pi) % (2.0 * math.pi) - math.pi)
    distance = np.hypot(nodes[:, 0] - pose[0], nodes[:, 1] - pose[1]) + weight * turn
    return np.lexsort((np.arange(len(nodes)), distance)), distance


@settings(max_examples=60, deadline=None)
@given(
    st.integers(0, 2**31),
    st.integers(1, 120),
    st.integers(1, 8),
    st.sampled_from([0.0, 0.5, 3.0]),
    st.sampled_from([0.7, 2.0, 9.0, 100.0]),
    st.sampled_from([1.0, 2.5]),
)
def test_grid_and_look_at_all_give_the_nearest_in_order(seed, count, k, weight, cell_m, spread):
    nodes = nodes_of(seed, count, spread)
    grid = grid_of(nodes, cell_m)
    for pose in nodes_of(seed + 1, 5, 3.0):
        order, distance = by_sorting(nodes, pose, weight)
        linear, gridded = np.full(8, -7), np.full(8, -7)
        assert nearest_k(nodes, count, *pose, weight, k, linear) == min(k, count)
        assert nearest_k_grid(grid, nodes, *pose, weight, k, gridded) == min(k, count)
        assert linear.tolist() == gridded.tolist()
        found = linear[: min(k, count)]
        # two nodes may be as far as each other up to rounding
        assert distance[found] == pytest.approx(distance[order[: len(found)]], abs=1e-12)
        assert (linear[min(k, count) :] == -7).all()
        assert distance_m(nodes, found[0], *pose, weight) == pytest.approx(distance[found[0]])


@pytest.mark.parametrize("weight", [0.0, 2.0])
def test_equally_near_nodes_come_by_index(weight):
    """A lattice of nodes, each three times: most distances tie."""
    x, y = np.meshgrid(np.arange(6.0), np.arange(5.0))
    lattice = np.column_stack([x.ravel(), y.ravel(), np.zeros(30)])
    nodes = np.concatenate([lattice, lattice[::-1], lattice])
    grid = grid_of(nodes, 1.0)
    out, gridded = np.empty(7, np.int64), np.empty(7, np.int64)
    for pose in ((2.0, 2.0, 0.0), (2.5, 2.5, 1.0), (-3.0, 9.0, 0.0)):
        order, _ = by_sorting(nodes, pose, weight)
        assert nearest_k(nodes, len(nodes), *pose, weight, 7, out) == 7
        assert nearest_k_grid(grid, nodes, *pose, weight, 7, gridded) == 7
        assert out.tolist() == gridded.tolist() == order[:7].tolist()


def test_without_headings_it_is_the_tree_of_scipy():
    nodes = nodes_of(1, 800, 1.2)
    poses = nodes_of(2, 40, 1.5)
    _, expected = cKDTree(nodes[:, :2]).query(poses[:, :2], k=4)
    grid = grid_of(nodes, 1.5)
    out = np.empty(4, np.int64)
    for pose, nearest in zip(poses, expected, strict=True):
        assert nearest_k(nodes, 800, *pose, 0.0, 4, out) == 4
        assert out.tolist() == nearest.tolist()
        assert nearest_k_grid(grid, nodes, *pose, 0.0, 4, out) == 4
        assert out.tolist() == nearest.tolist()


def test_within_a_radius_it_is_the_tree_of_scipy():
    nodes = nodes_of(3, 500)
    tree = cKDTree(nodes[:, :2])
    out = np.empty(500, np.int64)
    for pose in nodes_of(4, 20):
        found = within_radius(nodes, 500, *pose, 0.0, 3.0, out)
        assert out[:found].tolist() == sorted(tree.query_ball_point(pose[:2], 3.0))


def test_headings_count_within_a_radius():
    nodes = np.array([(0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (1.0, 0.0, math.pi), (5.0, 0.0, 0.0)])
    out = np.empty(4, np.int64)
    assert within_radius(nodes, 4, 0.0, 0.0, 0.0, 1.0, 2.0, out) == 2
    assert out[:2].tolist() == [0, 1]
    assert within_radius(nodes, 4, 0.0, 0.0, 2.0 * math.pi, 1.0, 5.0, out) == 4


def test_a_small_room_shows_that_there_are_more():
    nodes = nodes_of(3, 100)
    out = np.full(5, -1)
    found = within_radius(nodes, 100, 10.0, 10.0, 0.0, 0.0, 50.0, out)
    assert found == 100
    assert out.tolist() == [0, 1, 2, 3, 4]


def test_only_the_nodes_that_count_are_looked_at():
    nodes = np.array([(5.0, 0.0, 0.0), (1.0, 0.0, 0.0), (0.0, 0.0, 0.0)])
    out = np.empty(3, np.int64)
    assert nearest_k(nodes, 2, 0.0, 0.0, 0.0, 1.0, 3, out) == 2
    assert out[:2].tolist() == [1, 0]
    assert nearest_k(nodes, 0, 0.0, 0.0, 0.0, 1.0, 3, out) == 0
    grid = new_grid(BOUNDS, 3, 1.0)
    assert nearest_k_grid(grid, nodes, 0.0, 0.0, 0.0, 1.0, 3, out) == 0


def test_a_cleared_grid_can_be_filled_again():
    nodes = nodes_of(6, 50)
    grid = grid_of(nodes, 2.0)
    clear(grid)
    out = np.empty(4, np.int64)
    assert nearest_k_grid(grid, nodes, 1.0, 1.0, 0.0, 1.0, 4, out) == 0
    insert(grid, 17, nodes[17, 0], nodes[17, 1])
    assert nearest_k_grid(grid, nodes, 1.0, 1.0, 0.0, 1.0, 4, out) == 1
    assert out[0] == 17


def test_a_grid_is_what_kernels_were_compiled_for():
    assert numba.typeof(new_grid(BOUNDS, 3, 1.0)) == numba_type(NodeGrid)


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"bounds_m": (0.0, 0.0, -1.0, 1.0)}, "bounds_m must be"),
        ({"bounds_m": (0.0, 0.0, math.nan, 1.0)}, "bounds_m must be"),
        ({"cell_m": 0.0}, "cell_m must be above 0"),
        ({"nodes_max": 0}, "nodes_max must be at least 1"),
    ],
)
def test_senseless_grids_are_refused(change, said):
    with pytest.raises(ValueError, match=said):
        new_grid(**({"bounds_m": BOUNDS, "nodes_max": 10, "cell_m": 1.0} | change))
