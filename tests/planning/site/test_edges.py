"""Items in their buckets, outlines of cells, inside and outside, against shapely."""

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.planning.site.site_twins import buckets_of, star

from byway_planning.collision import inside_raster
from byway_planning.site import DiscShape, LayerSettings, PolygonShape, SiteModel, SiteSettings
from byway_planning.site.edges import (
    REFERENCE_X,
    REFERENCE_Y,
    bucket_kernel,
    cell_outlines_kernel,
    polygon_items,
)

CORNER_M = (-3.0, 5.0)


@settings(max_examples=50, deadline=None)
@given(st.integers(0, 2**32 - 1), st.sampled_from([0.05, 0.3, 0.7, 0.95, 1.0]))
def test_outlines_of_cells_are_their_border_with_the_cells_on_the_left(seed, density):
    rng = np.random.default_rng(seed)
    cells = (rng.random((9, 9)) < density).astype(np.uint8)
    cells.flags.writeable = False
    out = np.empty((2 * 81 + 18, 5))
    count = cell_outlines_kernel(cells, *CORNER_M, 0.2, out)
    items = out[:count]
    if not cells.any():
        assert count == 0
        return
    rows, columns = np.nonzero(cells)
    x, y = CORNER_M[0] + columns * 0.2, CORNER_M[1] + rows * 0.2
    area = shapely.union_all(shapely.box(x, y, x + 0.2, y + 0.2), grid_size=1e-6)
    lines = shapely.linestrings(items[:, :4].reshape(-1, 2, 2))
    border = shapely.union_all(lines, grid_size=1e-6)
    assert border.length == pytest.approx(area.boundary.length)
    assert lines.size == 0 or shapely.length(lines).sum() == pytest.approx(border.length)
    assert shapely.symmetric_difference(border, area.boundary, grid_size=1e-6).length < 1e-9
    middle = (items[:, :2] + items[:, 2:4]) / 2
    ahead = items[:, 2:4] - items[:, :2]
    ahead /= np.maximum(np.hypot(*ahead.T), 1e-12)[:, None]
    left = np.column_stack([-ahead[:, 1], ahead[:, 0]]) * 0.01
    # A run may be an even number of cells long, so its middle may be a corner: step aside.
    beside = middle + ahead * 0.013
    assert shapely.contains_xy(area, *(beside + left).T).all()
    assert not shapely.contains_xy(area, *(beside - left).T).any()
    assert (items[:, 4] == 0.0).all()


@settings(max_examples=50, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(1, 5))
def test_buckets_hold_every_item_that_touches_them_and_few_more(seed, side):
    rng = np.random.default_rng(seed)
    tile_m = 6.4
    bucket_m = tile_m / side
    items = np.empty((60, 5))
    items[:, :2] = CORNER_M + rng.uniform(-2.0, tile_m + 2.0, (60, 2))
    items[:, 2:4] = items[:, :2] + rng.normal(0.0, rng.choice([0.1, 2.0], (60, 1)), (60, 2))
    items[:, 4] = np.where(rng.random(60) < 0.3, rng.uniform(0.0, 2.0, 60), 0.0)
    items[::7, 2:4] = items[::7, :2]  # points
    items[::5, 0] = items[::5, 2] = CORNER_M[0] + bucket_m  # along a border of buckets
    items.flags.writeable = False
    starts = np.empty(side * side + 1, np.int64)
    total = bucket_kernel(items, *CORNER_M, bucket_m, starts, np.empty((0, 5)))
    out = np.empty((total, 5))
    assert bucket_kernel(items, *CORNER_M, bucket_m, starts, out) == total
    assert starts[0] == 0
    assert starts[-1] == total
    lines = shapely.linestrings(items[:, :4].reshape(-1, 2, 2))
    for bucket in range(side * side):
        x, y = CORNER_M[0] + bucket % side * bucket_m, CORNER_M[1] + bucket // side * bucket_m
        square = shapely.box(x, y, x + bucket_m, y + bucket_m)
        distance = shapely.distance(lines, square) - items[:, 4]
        held = {row.tobytes() for row in out[starts[bucket] : starts[bucket + 1]]}
        for row, away_m in zip(items, distance, strict=True):
            if away_m <= 0.0:
                assert row.tobytes() in held
            elif away_m > 0.42 * row[4] + 2e-9:  # a corner of the grown box, sqrt(2) - 1
                assert row.tobytes() not in held


def test_what_is_around_a_reference_point_is_counted():
    rng = np.random.default_rng(3)
    settings_ = SiteSettings((0.0, 0.0, 12.8, 6.4), cell_m=0.1)
    model = SiteModel(settings_)
    model.declare("a", LayerSettings())
    shapes = [star(i, *rng.uniform((0, 0), (12.8, 6.4)), rng.uniform(0.3, 5.0)) for i in range(20)]
    for i, shape in enumerate(shapes):
        model.put("a", f"{i}", shape)
    model.put("a", "disc", DiscShape(5.0, 3.0, 2.0))  # its distance tells; it is not counted
    cells = (rng.random((40, 60)) < 0.5).astype(np.uint8)
    model.patch("a", (1.0, 2.0), 0.1, cells)
    polygons = [shapely.Polygon(shape.vertices_m) for shape in shapes]
    found = buckets_of(model.publish().scene())
    bucket_m = settings_.tile_m / settings_.bucket_side
    for (row, column, bucket), (around, _) in found.items():
        r, c = divmod(bucket, settings_.bucket_side)
        x = column * 6.4 + (c + REFERENCE_X) * bucket_m
        y = row * 6.4 + (r + REFERENCE_Y) * bucket_m
        wanted = sum(polygon.contains(shapely.Point(x, y)) for polygon in polygons)
        i, j = int((y - 2.0) // 0.1), int((x - 1.0) // 0.1)
        if 0 <= i < 40 and 0 <= j < 60:
            wanted += int(cells[i, j])
        assert around == wanted
    assert len(found) == 2 * settings_.bucket_side**2


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize("round_numbers", [False, True])
def test_inside_and_outside_are_told_apart_at_every_point(seed, round_numbers):
    """Round numbers put corners and edges on borders of cells and at heights asked for."""
    rng = np.random.default_rng(seed)
    model = SiteModel(SiteSettings((0.0, 0.0, 12.8, 12.8), cell_m=0.2))
    model.declare("a", LayerSettings())
    areas = []
    for i in range(12):
        ring = star(100 * seed + i, *rng.uniform(0, 12.8, 2), rng.uniform(0.5, 6.0)).vertices_m
        if round_numbers:
            x, y = np.round(rng.uniform(0, 11, 2))
            width, height = rng.integers(1, 6, 2)
            ring = np.array([(x, y), (x + width, y), (x + width, y + height), (x, y + height)])
        model.put("a", f"{i}", PolygonShape(ring))
        areas.append(shapely.Polygon(ring))
    cells = (rng.random((10, 20)) < 0.5).astype(np.uint8)
    model.patch("a", (8.0, 9.0), 0.2, cells)
    rows, columns = np.nonzero(cells)
    x, y = 8.0 + columns * 0.2, 9.0 + rows * 0.2
    area = shapely.union_all([*areas, *shapely.box(x, y, x + 0.2, y + 0.2)])
    scene = model.publish().scene()
    points = rng.uniform(0.0, 12.8, (1500, 2))
    if round_numbers:
        points[::2, 1] = np.round(points[::2, 1])  # at the height of horizontal edges
        points[::3, 0] = np.round(points[::3, 0])
    # Points on edges are for the exact distance to decide.
    points = points[(points > 0.0).all(axis=1) & (points < 12.8).all(axis=1)]
    points = points[shapely.distance(shapely.points(points), area.boundary) > 1e-9]
    points = points[
        [
            all(shapely.distance(shapely.Point(p), each.boundary) > 1e-9 for each in areas)
            for p in points
        ]
    ]
    found = [inside_raster(scene, px, py) for px, py in points.tolist()]
    assert (np.array(found) == shapely.contains_xy(area, *points.T)).all()
    assert any(found)
    assert not all(found)


def test_edges_of_a_ring_are_items_in_its_order():
    ring = np.array([(0.0, 0.0), (3.0, 0.0), (0.0, 2.0)])
    items = polygon_items(ring)
    assert items.tolist() == [
        [0.0, 0.0, 3.0, 0.0, 0.0],
        [3.0, 0.0, 0.0, 2.0, 0.0],
        [0.0, 2.0, 0.0, 0.0, 0.0],
    ]
