"""Outlines of vehicles: what is refused, discs inside and around, offsets; shapely agrees."""

import math

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from shapely.geometry import Point, Polygon

from byway_planning.vehicles.footprint import (
    COVER_DISCS_MAX,
    area_m2,
    checked_outline,
    cover_discs,
    depth_m,
    largest_disc_inside,
    shrunk,
    smallest_disc_around,
)

few = settings(max_examples=40, deadline=None)

BOX = np.array([(-1.0, -0.95), (3.5, -0.95), (3.5, 0.95), (-1.0, 0.95)])
ELL = np.array([(0, 0), (3, 0), (3, 1), (1, 1), (1, 3), (0, 3)], np.float64)
FORK = np.array(
    [
        (-1, -0.6),
        (1, -0.6),
        (1, -0.4),
        (2.2, -0.4),
        (2.2, -0.2),
        (1, -0.2),
        (1, 0.2),
        (2.2, 0.2),
        (2.2, 0.4),
        (1, 0.4),
        (1, 0.6),
        (-1, 0.6),
    ]
)


@st.composite
def outlines(draw):
    """Star-shaped polygons, mostly concave, stretched and moved off the origin."""
    count = draw(st.integers(3, 12))
    gaps = np.array(draw(st.lists(st.floats(0.3, 1.0), min_size=count, max_size=count)))
    angles = np.cumsum(gaps) * (2.0 * math.pi / gaps.sum())
    reaches = np.array(draw(st.lists(st.floats(0.3, 3.0), min_size=count, max_size=count)))
    corners = np.column_stack([reaches * np.cos(angles), reaches * np.sin(angles)])
    corners[:, 0] *= draw(st.floats(0.5, 3.0))
    moved = corners + np.array([draw(st.floats(-2.0, 2.0)), 0.0])
    return checked_outline("outline", moved)


def points_of(outline, count=400):
    """Points of the polygon: on its boundary, and inside."""
    rng = np.random.default_rng(5)
    share = rng.random((count, 1))
    edge = rng.integers(len(outline), size=count)
    border = outline[edge] + share * (np.roll(outline, -1, axis=0)[edge] - outline[edge])
    low, high = outline.min(axis=0), outline.max(axis=0)
    spread = rng.uniform(low, high, (count, 2))
    return np.concatenate([outline, border, spread[shapely.contains_xy(Polygon(outline), spread)]])


@few
@given(outlines())
def test_cover_discs_hold_every_point_of_the_body(outline):
    discs = cover_discs(outline, largest_disc_inside(outline)[2])
    assert 1 <= len(discs) <= COVER_DISCS_MAX
    points = points_of(outline)
    reach = np.hypot(*(points[:, None] - discs[None, :, :2]).transpose(2, 0, 1))
    assert (reach - discs[:, 2]).min(axis=1).max() <= 1e-8


def test_cover_of_a_car_is_three_discs_along_it():
    discs = cover_discs(BOX, 0.95)
    assert discs == pytest.approx(
        np.array([(x, 0.0, math.hypot(0.75, 0.95)) for x in (-0.25, 1.25, 2.75)]), abs=1e-9
    )


def test_cover_of_a_concave_body_leaves_its_notch_open():
    """Three discs of the L: the corner opposite its notch is further from all than one disc is."""
    discs = cover_discs(ELL, largest_disc_inside(ELL)[2])
    assert len(discs) == 3
    around = np.pi * smallest_disc_around(ELL)[2] ** 2
    assert np.pi * (discs[:, 2] ** 2).sum() < 0.8 * around


@few
@given(outlines())
def test_the_disc_inside_is_inside_and_large(outline):
    """Never too large; at most 1 mm too small."""
    x, y, radius = largest_disc_inside(outline)
    polygon = Polygon(outline)
    assert polygon.contains(Point(x, y))
    assert radius <= polygon.exterior.distance(Point(x, y)) + 1e-12
    best = shapely.maximum_inscribed_circle(polygon, tolerance=1e-5).length
    assert radius >= best - 1e-3


@pytest.mark.parametrize(
    ("outline", "radius"),
    [
        (BOX, 0.95),
        (ELL, 2.0 - math.sqrt(2.0)),  # touches both outer sides and the inner corner
        (np.array([(0.0, 0.0), (4.0, 0.0), (0.0, 3.0)]), 1.0),  # the 3-4-5 triangle
    ],
)
def test_known_discs_inside(outline, radius):
    found = largest_disc_inside(outline)[2]
    assert radius - 1e-6 <= found <= radius


@few
@given(outlines())
def test_the_disc_around_holds_all_and_is_smallest(outline):
    x, y, radius = smallest_disc_around(outline)
    assert np.hypot(*(outline - [x, y]).T).max() <= radius
    assert radius == pytest.approx(shapely.minimum_bounding_radius(Polygon(outline)), abs=1e-9)


def test_discs_around_few_points():
    assert smallest_disc_around(np.array([(2.0, 3.0)])) == (2.0, 3.0, 0.0)
    assert smallest_disc_around(np.array([(0.0, 0.0), (2.0, 0.0)])) == pytest.approx((1, 0, 1))
    in_line = np.array([(0.0, 0.0), (1.0, 1.0), (3.0, 3.0)])
    assert smallest_disc_around(in_line) == pytest.approx((1.5, 1.5, math.sqrt(4.5)))


@few
@given(outlines(), st.integers(0, 2**31))
def test_depth_is_the_distance_to_the_boundary(outline, seed):
    points = np.random.default_rng(seed).uniform(-4.0, 4.0, (20, 2))
    polygon = Polygon(outline)
    for depth, point in zip(depth_m(outline, points), points, strict=True):
        assert abs(depth) == pytest.approx(polygon.exterior.distance(Point(point)), abs=1e-12)
        assert (depth > 0.0) == polygon.contains(Point(point))


@pytest.mark.parametrize("outline", [BOX, ELL, FORK], ids=["box", "ell", "fork"])
@pytest.mark.parametrize("by_m", [0.05, -0.05, -0.09, 0.0])
def test_offsets_are_mitred(outline, by_m):
    moved = shrunk(outline, by_m)
    expected = Polygon(outline).buffer(-by_m, join_style="mitre", mitre_limit=100.0)
    assert Polygon(moved).symmetric_difference(expected).area == pytest.approx(0.0, abs=1e-9)
    assert area_m2(moved) > 0.0


@few
@given(outlines(), st.floats(0.001, 0.2))
def test_a_shrunk_outline_is_inside_by_that_much_or_refused(outline, by_m):
    try:
        moved = shrunk(outline, by_m)
    except ValueError:
        # refused: an edge vanished, or what is left is no simple polygon
        return
    assert depth_m(outline, moved).min() >= by_m - 1e-9


def test_shrinking_to_nothing_is_refused():
    with pytest.raises(ValueError, match="move it less"):
        shrunk(BOX, 1.0)
    with pytest.raises(ValueError, match="an edge is used up"):
        shrunk(FORK, 0.12)


def test_orientation_and_closing_vertex_do_not_matter():
    closed = [*BOX[::-1].tolist(), BOX[-1].tolist()]
    outline = checked_outline("outline", closed)
    assert area_m2(outline) == pytest.approx(8.55)
    assert {tuple(v) for v in outline} == {tuple(v) for v in BOX}


@pytest.mark.parametrize(
    ("vertices", "said"),
    [
        ([(0, 0), (1, 0)], "3 to 32 vertices, got 2"),
        ([(0, 0), (1, 0), (0, 0)], "3 to 32 vertices, got 2"),
        ([(math.cos(a), math.sin(a)) for a in np.linspace(0, 6, 33)], "vertices, got 33"),
        ([(0, 0), (1, 0), (math.nan, 1)], "must be finite"),
        ([(0, 0), (4500, 0), (4500, 1900), (0, 1900)], "is it in metres"),
        ([(0, 0), (1, 1), (2, 2)], "no area"),
        ([(0, 0), (1, 1), (1, 0), (0, 1), (-1, 0.5)], "crosses or touches itself"),
        ([(0, 0), (2, 0), (2, 2), (1, 0), (0, 2)], "crosses or touches itself"),
        ([(0, 0), (2, 0), (2, 0), (1, 2)], "repeats the vertex"),
        ([(0, 0), (2, 0), (3, 0), (2, 0.0), (1, 2)], "folds back on itself"),
        ([(0, 0, 0), (1, 0, 0), (0, 1, 0)], "list of \\(x, y\\) pairs"),
        ([(0, 0), (1,)], "list of \\(x, y\\) pairs"),
        ("square", "list of \\(x, y\\) pairs"),
    ],
)
def test_what_is_no_outline_is_refused(vertices, said):
    with pytest.raises(ValueError, match=f"^hull .*{said}"):
        checked_outline("hull", vertices)


@settings(max_examples=100, deadline=None)
@given(st.lists(st.tuples(st.integers(0, 4), st.integers(0, 4)), min_size=3, max_size=6))
def test_simple_polygons_and_no_others_pass(vertices):
    """On a small grid, where touching, collinear and repeated vertices are common."""
    ring = vertices[:-1] if vertices[0] == vertices[-1] else vertices
    simple = len(ring) >= 3 and Polygon(ring).is_valid and len(set(ring)) == len(ring)
    try:
        checked_outline("outline", vertices)
    except ValueError:
        assert not simple
    else:
        assert simple
