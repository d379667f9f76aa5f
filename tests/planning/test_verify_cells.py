"""The check among blocked cells, and the clearance of a pose."""

import math

import numpy as np
import pytest
import shapely
from tests.planning.route_scenes import (
    BOX,
    U_SHAPE,
    Floats,
    Pose,
    car,
    codes,
    disc,
    driven,
    path_of,
    solids_of,
)

from byway_planning.route import make_route
from byway_planning.site.solids import ALL_CELLS, NO_CELLS
from byway_planning.verify import clearance_m, verify

STRAIGHT = [(0.0, 10.0)]


def test_the_clearance_of_a_pose_is_exact_and_names_what_is_nearest() -> None:
    far = [(100.0, 0.0), (101.0, 0.0), (101.0, 1.0), (100.0, 1.0)]
    near = [(20.0, 0.0), (21.0, 0.0), (21.0, 1.0), (20.0, 1.0)]
    solids = solids_of([far, near], [(3.5, 9.0, 0.5)])
    nearest = clearance_m(solids, car(), (0.0, 0.0, 0.0))
    assert (nearest.kind, nearest.number) == ("disc", 0)
    assert nearest.distance_m == pytest.approx(9.0 - 0.5 - 0.95)
    nearest = clearance_m(solids, car(), (12.0, 0.2, 0.0))
    assert (nearest.kind, nearest.number) == ("polygon", 1)
    assert nearest.distance_m == pytest.approx(20.0 - 15.5)
    assert clearance_m(solids_of(), car(), (1.0, 2.0, 3.0)) == (math.inf, "nothing", -1)
    limited = solids_of(limits=(-2.0, -9.0, 9.0, 9.0))
    assert clearance_m(limited, car(), (0.0, 0.0, 0.0))[:2] == (pytest.approx(1.0), "limits")


@pytest.mark.parametrize("turn_rad", [0.0, 0.9, -2.0])
def test_an_overlap_counts_by_its_depth(turn_rad: float) -> None:
    c, s = math.cos(turn_rad), math.sin(turn_rad)
    for depth_m in (0.001, 0.02, 0.5):
        low = 0.95 - depth_m  # the block's face, inside the left flank
        block = np.array([(0.0, low), (2.0, low), (2.0, 4.0), (0.0, 4.0)]) @ np.array(
            [[c, s], [-s, c]]
        )
        distance_m, kind, number = clearance_m(solids_of([block]), car(), (0.0, 0.0, turn_rad))
        assert (distance_m, kind, number) == (pytest.approx(-depth_m, abs=3e-6), "polygon", 0)


def test_an_overlap_is_never_deeper_than_the_inner_disc() -> None:
    block = [(-50.0, -50.0), (50.0, -50.0), (50.0, 50.0), (-50.0, 50.0)]
    assert clearance_m(solids_of([block]), car(), (0.0, 0.0, 0.0)).distance_m == pytest.approx(
        -0.95, abs=2e-3
    )
    assert clearance_m(solids_of(discs=[(0.0, 0.0, 9.0)]), disc(), (0.0, 0.0, 0.0))[0] == -0.5


@pytest.mark.parametrize("pose", [(math.nan, 0.0, 0.0), (0.0, math.inf, 0.0)])
def test_a_pose_that_is_no_pose_has_no_clearance(pose: Pose) -> None:
    with pytest.raises(ValueError, match="finite"):
        clearance_m(solids_of(), car(), pose)


# -- cells ------------------------------------------------------------


def squares_of(cells: np.ndarray, cell_m: float, corner: tuple[float, float]) -> list[Floats]:
    corners = np.array([(0, 0), (1, 0), (1, 1), (0, 1)])
    return [
        np.array(corner) + cell_m * (corners + np.array((column, row)))
        for row, column in np.argwhere(cells != 0)
    ]


@pytest.mark.parametrize("part", range(3))
def test_blocked_cells_are_squares(part: int) -> None:
    """The same scene as cells and as one polygon per cell gives the same clearances."""
    rng = np.random.default_rng(40 + part)
    blocked = 0
    for _ in range(30):
        cell_m = float(rng.choice([0.1, 0.25]))
        cells = (rng.random((rng.integers(9, 60), rng.integers(9, 60))) < 0.004).astype(np.uint8)
        r, c = rng.integers(0, 8, 2)
        cells[r : r + rng.integers(1, 9), c : c + rng.integers(1, 20)] = 1
        corner = tuple(rng.uniform(-5.0, 5.0, 2).tolist())
        middle = np.array(corner) + cell_m * 0.5 * np.array(cells.shape[::-1])
        start = (*(middle + rng.uniform(-4.0, 4.0, 2)).tolist(), float(rng.uniform(-3.0, 3.0)))
        vehicle = car(footprint_m=[U_SHAPE, BOX][part % 2], turn_radius_m_min=3.0)
        path, goal = path_of(start, [(float(rng.uniform(-0.3, 0.3)), float(rng.uniform(1, 4)))])
        route = make_route(path, vehicle)
        as_cells = solids_of(cells=cells, cell_m=cell_m, corner_m=corner)
        as_polygons = solids_of(squares_of(cells, cell_m, corner))
        one = verify(as_cells, vehicle, path, route, start, goal)
        other = verify(as_polygons, vehicle, path, route, start, goal)
        assert codes(one) == codes(other)
        blocked += len(one)
        if not one:
            assert one.clearance_m == pytest.approx(other.clearance_m, abs=1e-9)
        elif one[0].at_s_m > 0.0:
            assert one[0].at_s_m == pytest.approx(other[0].at_s_m, abs=1e-3)
        nearest = clearance_m(as_cells, vehicle, start)
        assert nearest.distance_m == pytest.approx(
            clearance_m(as_polygons, vehicle, start).distance_m, abs=3e-6
        )
        columns = as_cells.cells_of.shape[1] * 8
        assert cells[nearest.number // columns, nearest.number % columns] == 1
    assert 3 <= blocked <= 27


@pytest.mark.parametrize("upright", [False, True])
def test_a_wall_of_cells_is_passed_at_its_true_distance(upright: bool) -> None:
    """Along it, a stretch sees neither of its ends."""
    cells = np.zeros((40, 330), np.uint8)
    cells[0:10, 5:325] = 1  # its face is 1 m from the corner
    for above_m, expected in ((0.96, []), (0.9499, ["collides"])):
        corner = (-10.0, -1.0 - above_m)
        start = (0.0, 0.0, 0.0)
        if upright:
            corner, start = corner[::-1], (0.0, 0.0, math.pi / 2)
        solids = solids_of(cells=cells.T if upright else cells, cell_m=0.1, corner_m=corner)
        faults = driven(solids, car(), STRAIGHT, start)
        assert codes(faults) == expected
        if not expected:
            assert faults.clearance_m == pytest.approx(above_m - 0.95, abs=2e-6)


def test_tiles_that_are_all_blocked_or_all_free_hold_no_cells() -> None:
    tile = np.zeros((1, 8, 8), np.uint8)
    tile[0, 3, 3] = 1
    places = np.array([[ALL_CELLS, NO_CELLS, 0], [NO_CELLS, ALL_CELLS, NO_CELLS]], np.int64)
    solids = solids_of(cells=tile, cells_of=places, cell_m=1.0, corner_m=(-12.0, 20.0))
    whole = np.zeros((16, 24), np.uint8)
    whole[:8, :8] = whole[8:, 8:16] = 1
    whole[3, 19] = 1
    shapes = squares_of(whole, 1.0, (-12.0, 20.0))
    union = shapely.unary_union([shapely.Polygon(p) for p in shapes])
    rng = np.random.default_rng(9)
    overlaps = 0
    for x, y in rng.uniform((-16.0, 14.0), (16.0, 40.0), (40, 2)):
        pose = (float(x), float(y), float(rng.uniform(-3.0, 3.0)))
        nearest = clearance_m(solids, car(), pose)
        expected = shapely.Polygon(car().outline_at(pose)).distance(union)
        assert nearest.kind == "cell"
        if expected > 0.0:
            assert nearest.distance_m == pytest.approx(expected, abs=1e-9)
        else:
            overlaps += 1
            assert nearest.distance_m <= 0.0
    assert 5 < overlaps < 35
    # a vehicle that a tile swallows whole
    assert clearance_m(solids, disc(), (-8.0, 24.0, 0.0)).distance_m == -0.5
