"""The world's own geometry, held against shapely and against laws."""

import math

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st

from bywayd.outlines import placed
from bywayd.yard import shapes

LOADER = [(-1.5, -1), (2, -1), (2, -0.6), (3.5, -0.6), (3.5, -0.4), (2, -0.4)]
LOADER += [(2, 0.4), (3.5, 0.4), (3.5, 0.6), (2, 0.6), (2, 1), (-1.5, 1)]
OUTLINES = {
    "box": shapes.as_points([(-1, -0.7), (2, -0.7), (2, 0.7), (-1, 0.7)]),
    "loader": shapes.as_points(LOADER),
    "triangle": shapes.as_points([(0, 0), (0.3, 0), (0, 0.3)]),
}

metres = st.floats(-4.0, 4.0)
angles = st.floats(-math.pi, math.pi)
poses = st.tuples(metres, metres, angles)
kinds = st.sampled_from(sorted(OUTLINES))


@settings(max_examples=100, deadline=None)
@given(kinds, poses, kinds, poses)
def test_distance_between_outlines_agrees_with_shapely(
    a: str, at_a: shapes.Pose, b: str, at_b: shapes.Pose
) -> None:
    ring_a, ring_b = placed(OUTLINES[a], at_a), placed(OUTLINES[b], at_b)
    expected = shapely.Polygon(ring_a).distance(shapely.Polygon(ring_b))
    # 1e-9 m: both lose about 1e-15 of coordinates below 10 m, and touching is a matter of digits.
    assert shapes.distance_m(ring_a, ring_b) == pytest.approx(expected, abs=1e-9)


@settings(max_examples=50, deadline=None)
@given(kinds, poses, metres, metres, st.floats(0.05, 2.0))
def test_distance_to_a_disc_agrees_with_shapely(
    kind: str, at: shapes.Pose, x_m: float, y_m: float, radius_m: float
) -> None:
    ring = placed(OUTLINES[kind], at)
    to_centre_m = shapely.Polygon(ring).distance(shapely.Point(x_m, y_m))
    found = shapes.disc_distance_m(ring, x_m, y_m, radius_m)
    assert found == pytest.approx(max(0.0, to_centre_m - radius_m), abs=1e-9)


def test_containment_counts_as_touching_both_ways() -> None:
    inner = shapes.rectangle(0, 0, 1, 1)
    outer = shapes.rectangle(0.2, 0.1, 5, 4, 0.3)
    assert shapes.distance_m(inner, outer) == 0.0
    assert shapes.distance_m(outer, inner) == 0.0
    assert shapes.disc_distance_m(inner, 0.1, 0.1, 0.01) == 0.0


@settings(max_examples=50, deadline=None)
@given(kinds, poses, kinds, poses)
def test_the_hull_is_convex_and_encloses(
    a: str, at_a: shapes.Pose, b: str, at_b: shapes.Pose
) -> None:
    points = np.vstack((placed(OUTLINES[a], at_a), placed(OUTLINES[b], at_b)))
    ring = shapely.Polygon(shapes.hull(points))
    expected = shapely.MultiPoint(points).convex_hull
    assert ring.area == pytest.approx(expected.area, rel=1e-9)
    assert ring.exterior.is_ccw


@settings(max_examples=100, deadline=None)
@given(poses, poses, st.floats(0.0, 1.0))
def test_apart_is_never_said_of_polygons_that_are_nearer(
    at_a: shapes.Pose, at_b: shapes.Pose, gap_m: float
) -> None:
    ring_a = shapes.hull(placed(OUTLINES["loader"], at_a))
    ring_b = shapes.hull(placed(OUTLINES["box"], at_b))
    away_m = shapely.Polygon(ring_a).distance(shapely.Polygon(ring_b))
    if shapes.convex_apart(ring_a, ring_b, gap_m):
        assert away_m >= gap_m - 1e-9
    elif away_m > 0.0:
        # Facing corners hide at most this much: an edge shows 1/sqrt(2) of their distance
        # when corners are no sharper than right angles.
        assert away_m < gap_m * math.sqrt(2) + 1e-9


@settings(max_examples=50, deadline=None)
@given(poses, st.floats(-0.6, 0.6), st.floats(-3.0, 3.0))
def test_an_arc_keeps_its_radius_and_length(
    start: shapes.Pose, curvature_per_m: float, signed_m: float
) -> None:
    end = shapes.advanced(start, curvature_per_m, signed_m)
    assert end[2] - start[2] == pytest.approx(curvature_per_m * signed_m, abs=1e-12)
    steps = 400  # Euler-Heun steps, shares nothing with the closed form
    x, y, heading = start
    for _ in range(steps):
        middle = heading + 0.5 * curvature_per_m * signed_m / steps
        x += math.cos(middle) * signed_m / steps
        y += math.sin(middle) * signed_m / steps
        heading += curvature_per_m * signed_m / steps
    # Midpoint rule: length^3 curvature^2 / (24 steps^2) is below 3e-6 m here.
    assert (end[0], end[1]) == pytest.approx((x, y), abs=5e-6)


def test_the_nearest_of_many_masses() -> None:
    masses = shapes.Masses(
        [
            shapes.Mass("kiln", shapes.rectangle(10, 0, 4, 4)),
            shapes.Mass("post", shapes.as_points([(0, 5)]), 0.5),
        ]
    )
    outline = placed(OUTLINES["box"], (4.0, 0.0, 0.0))
    assert masses.nearest(outline, 5.0) == (pytest.approx(2.0), "kiln")
    assert masses.nearest(outline, 1.9) == (math.inf, "")
    assert masses.nearest(shapes.rectangle(0, 2, 1, 1), 5.0) == (pytest.approx(2.0), "post")
    assert shapes.Masses([]).nearest(outline, 5.0) == (math.inf, "")


def test_wrapped_angles_keep_their_direction() -> None:
    for angle in (-7.0, -math.pi, 0.0, 3.0, math.pi, 9.0):
        found = shapes.wrapped(angle)
        assert -math.pi <= found < math.pi
        assert math.cos(found) == pytest.approx(math.cos(angle), abs=1e-12)
        assert math.sin(found) == pytest.approx(math.sin(angle), abs=1e-12)
