"""Filled cells against shapely, resampled patches against their definition."""

import numpy as np
import pytest
import shapely
from hypothesis import example, given, settings
from hypothesis import strategies as st
from tests.planning.site.site_twins import star

from byway_planning.site.raster import (
    changed_span_kernel,
    fill_disc_kernel,
    fill_polygon_kernel,
    resample_kernel,
)
from byway_planning.site.shapes import PolygonShape

CORNER_M = (3.7, -1.3)
CELL_M = 0.13
SIDE = 24


def cell_boxes() -> np.ndarray:
    rows, columns = np.indices((SIDE, SIDE))
    x, y = CORNER_M[0] + columns * CELL_M, CORNER_M[1] + rows * CELL_M
    boxes: np.ndarray = shapely.box(x, y, x + CELL_M, y + CELL_M)
    return boxes


def check_filled(filled: np.ndarray, shape: shapely.Geometry) -> None:
    boxes = cell_boxes()
    overlap_m2 = shapely.area(shapely.intersection(boxes, shape))
    assert (filled[overlap_m2 > 1e-9] == 1).all(), "a cell that is overlapped is missed"
    assert (filled[shapely.distance(boxes, shape) > 1e-9] == 0).all(), (
        "a cell is filled for nothing"
    )


@settings(max_examples=60, deadline=None)
@given(
    st.integers(0, 2**32 - 1),
    st.floats(2.0, 9.0),
    st.floats(-3.0, 3.0),
    st.floats(0.02, 5.0),
    st.integers(3, 40),
)
def test_a_polygon_fills_the_cells_it_overlaps_and_no_others(seed, x, y, radius, count):
    shape = star(seed, x, y, radius, count)
    out = np.zeros((SIDE, SIDE), np.uint8)
    fill_polygon_kernel(shape.vertices_m, *CORNER_M, CELL_M, out)
    check_filled(out, shapely.Polygon(shape.vertices_m))


@settings(max_examples=60, deadline=None)
@given(st.floats(2.0, 9.0), st.floats(-3.0, 3.0), st.floats(0.001, 5.0))
def test_a_disc_fills_the_cells_it_overlaps_and_no_others(x, y, radius):
    out = np.zeros((SIDE, SIDE), np.uint8)
    fill_disc_kernel(x, y, radius, *CORNER_M, CELL_M, out)
    boxes = cell_boxes()
    distance = shapely.distance(boxes, shapely.Point(x, y))
    assert (out[distance < radius - 1e-9] == 1).all()
    assert (out[distance > radius + CELL_M * 1e-6] == 0).all()


def test_shapes_are_filled_over_each_other():
    """Filling flips cells inside; what was filled before must not flip back."""
    out = np.zeros((SIDE, SIDE), np.uint8)
    whole = np.array([(0.0, -5.0), (20.0, -5.0), (20.0, 5.0), (0.0, 5.0)])
    for _ in range(3):
        fill_polygon_kernel(PolygonShape(whole).vertices_m, *CORNER_M, CELL_M, out)
        assert (out == 1).all()


def resampled(
    patch: np.ndarray, corner: tuple[float, float], cell: float, tile: np.ndarray, cell_m: float
) -> np.ndarray:
    """Every cell of a tile at the origin, overlapped cell by overlapped cell."""
    out = tile.copy()
    rows, columns = patch.shape
    rank = {0: 0, 2: 1, 1: 2}
    slack = 1e-6 * cell
    for r in range(tile.shape[0]):
        for c in range(tile.shape[1]):
            seen = [
                int(patch[i, j])
                for i in range(rows)
                for j in range(columns)
                if min((r + 1) * cell_m, corner[1] + (i + 1) * cell)
                - max(r * cell_m, corner[1] + i * cell)
                > slack
                and min((c + 1) * cell_m, corner[0] + (j + 1) * cell)
                - max(c * cell_m, corner[0] + j * cell)
                > slack
            ]
            if not seen:
                continue
            x, y = (c + 0.5) * cell_m - corner[0], (r + 0.5) * cell_m - corner[1]
            inside = slack < x < columns * cell - slack and slack < y < rows * cell - slack
            worst = max(seen, key=lambda value: rank[value])
            out[r, c] = worst if inside else 1 if worst == 1 else tile[r, c]
    return out


#: Cells of a patch in millimetres, so that borders which agree do so beyond rounding.
cells_mm = st.sampled_from([30, 50, 100, 130, 200, 250])


@settings(max_examples=60, deadline=None)
@given(
    st.integers(0, 2**32 - 1), cells_mm, st.integers(-900, 900), st.integers(-900, 900),
    st.integers(1, 12), st.integers(1, 12),
)  # fmt: skip
@example(1, 100, 0, 0, 8, 8)
@example(2, 100, -300, 200, 8, 8)
@example(3, 250, -125, 75, 4, 4)
def test_a_patch_is_resampled_on_the_safe_side(seed, cell_mm, x_mm, y_mm, rows, columns):
    rng = np.random.default_rng(seed)
    patch = rng.choice(3, (rows, columns), p=[0.6, 0.2, 0.2]).astype(np.uint8)
    tile = rng.choice(3, (8, 8)).astype(np.uint8)
    corner, cell = (x_mm / 1000, y_mm / 1000), cell_mm / 1000
    out = tile.copy()
    patch.flags.writeable = False
    resample_kernel(patch, *corner, cell, out, 0.0, 0.0, 0.1)
    assert (out == resampled(patch, corner, cell, tile, 0.1)).all()


@pytest.mark.parametrize("shift", [-8, -3, 0, 3, 8])
def test_an_aligned_patch_is_taken_as_it_is(shift):
    patch = np.random.default_rng(1).integers(0, 3, (8, 8)).astype(np.uint8)
    patch.flags.writeable = False
    out = np.full((8, 8), 9, np.uint8)
    # A corner a hair off, as sums of tenths are.
    resample_kernel(patch, shift * 0.1 + 3e-9, -2e-9, 0.1, out, 0.0, 0.0, 0.1)
    wanted = np.full((8, 8), 9, np.uint8)
    low, high = max(shift, 0), min(shift, 0)
    wanted[:, low : 8 + high] = patch[:, -high : 8 - low]
    assert (out == wanted).all()


@settings(max_examples=40, deadline=None)
@given(st.lists(st.tuples(st.integers(0, 15), st.integers(0, 15)), max_size=4))
def test_the_span_of_what_changed_holds_it_tightly(changes):
    before = np.random.default_rng(0).integers(0, 2, (16, 16)).astype(np.uint8)
    after = before.copy()
    for row, column in changes:
        after[row, column] ^= 1
    rows, columns = np.nonzero(before != after)
    for array in (before, after):
        array.flags.writeable = False
    found = changed_span_kernel(before, after)
    if len(rows):
        assert found == (rows.min(), rows.max(), columns.min(), columns.max())
    else:
        assert found[0] == -1
