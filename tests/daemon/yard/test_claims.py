"""Claims: they cover where a vehicle goes, stay apart, and are given back."""

import math

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.daemon.yard.lines import arc

from bywayd.outlines import outline_of, placed
from bywayd.settings import load
from bywayd.yard.claims import (
    GAP_M,
    GROWN_M,
    STEP_M,
    Ground,
    apart,
    claim_ahead,
    claim_here,
    told_outlines,
)
from bywayd.yard.shapes import as_points, rectangle

BOX_M = as_points([(-1, -0.7), (2, -0.7), (2, 0.7), (-1, 0.7)])
VEHICLES = {name: vehicle.arguments() for name, vehicle in load().vehicles.items()}


@pytest.mark.parametrize(("name", "radius_m"), [("flatbed", 6.85), ("loader", 4.0), ("tug", 2.6)])
@pytest.mark.parametrize("gear", [1, -1])
def test_a_claim_covers_the_way_but_for_a_rim_that_the_gap_makes_good(
    name: str, radius_m: float, gear: int
) -> None:
    outline_m = outline_of(VEHICLES[name])
    line = arc((3.0, 4.0, 0.7), 1 / radius_m, gear * 6.0)
    claim = claim_ahead(line, outline_m, line.pose_at(1.0), 1.0, 5.0)
    ground = shapely.unary_union([shapely.Polygon(piece) for piece in claim.pieces]).buffer(0.03)
    assert GAP_M / 2 > 0.03
    for at_m in np.linspace(1.0, 5.0, 41):
        ring = shapely.Polygon(placed(outline_m, line.pose_at(float(at_m))))
        assert ground.contains(ring)
    assert len(claim.pieces) == math.ceil(4.0 / STEP_M) + 1


def test_a_claim_covers_the_true_pose_beside_the_line() -> None:
    line = arc((0.0, 0.0, 0.0), 0.0, 5.0)
    claim = claim_ahead(line, BOX_M, (0.0, 0.1, 0.02), 0.0, 2.0)
    ground = shapely.unary_union([shapely.Polygon(piece) for piece in claim.pieces]).buffer(1e-9)
    assert ground.contains(shapely.Polygon(placed(BOX_M, (0.0, 0.1, 0.02))))


metres = st.floats(-8.0, 8.0)


@settings(max_examples=60, deadline=None)
@given(metres, metres, st.floats(-3.1, 3.1), st.floats(-0.3, 0.3))
def test_claims_that_are_apart_keep_the_gap(
    x_m: float, y_m: float, turn: float, curvature: float
) -> None:
    a = claim_ahead(arc((0.0, 0.0, 0.0), 0.2, 6.0), BOX_M, (0.0, 0.0, 0.0), 0.0, 4.0)
    line = arc((x_m, y_m, turn), curvature, -6.0)
    b = claim_ahead(line, BOX_M, line.pose_at(0.0), 0.0, 4.0)
    grounds = [shapely.unary_union([shapely.Polygon(p) for p in c.pieces]) for c in (a, b)]
    away_m = grounds[0].distance(grounds[1])
    assert apart(a, b) == apart(b, a)
    if apart(a, b):
        assert away_m >= GAP_M - 1e-9
    else:
        assert away_m < GAP_M + 1e-9


def test_the_daemon_is_told_of_more_ground_than_is_claimed() -> None:
    line = arc((0.0, 0.0, 0.0), 0.2, 6.0)
    claim = claim_ahead(line, BOX_M, (0.0, 0.0, 0.0), 0.0, 4.0)
    told = told_outlines(claim)
    assert len(told) < len(claim.pieces)
    ground = shapely.unary_union([shapely.Polygon(ring) for ring in told])
    claimed = shapely.unary_union([shapely.Polygon(piece) for piece in claim.pieces])
    # shapely's rounds are polygons inside the circle
    assert ground.buffer(1e-9).contains(claimed.buffer(GROWN_M))
    assert claimed.buffer(GROWN_M + 0.15).contains(ground)


def test_ground_that_another_holds_is_not_given() -> None:
    ground = Ground()
    assert ground.take("a", claim_here(BOX_M, (0.0, 0.0, 0.0), 0.0)) is None
    assert ground.take("b", claim_here(BOX_M, (5.0, 0.0, 0.0), 0.0)) is None
    held = ground.claims["b"]
    line = arc((5.0, 0.0, math.pi), 0.0, 5.0)
    reaching = claim_ahead(line, BOX_M, line.pose_at(0.0), 0.0, 3.0)
    assert ground.take("b", reaching) == "a"
    assert ground.claims["b"] is held
    short = claim_ahead(line, BOX_M, line.pose_at(0.0), 0.0, 0.6)
    assert ground.take("b", short) is None
    assert ground.claims["b"] is short


def test_ground_given_back_can_be_taken() -> None:
    ground = Ground()
    line = arc((0.0, 0.0, 0.0), 0.0, 10.0)
    assert ground.take("a", claim_ahead(line, BOX_M, (0.0, 0.0, 0.0), 0.0, 8.0)) is None
    there = claim_here(BOX_M, (8.0, 0.0, 0.0), 0.0)
    assert ground.take("b", there) == "a"
    ground.shrink("a", claim_here(BOX_M, (0.0, 0.0, 0.0), 0.0))
    assert ground.take("b", there) is None


def test_the_crane_keeps_off_claims() -> None:
    ground = Ground()
    ground.take("a", claim_here(BOX_M, (0.0, 0.0, 0.0), 0.0))
    assert not ground.clear_of_all(rectangle(4.0, 0.0, 2.0, 1.0), 1.5)
    assert ground.clear_of_all(rectangle(4.0, 0.0, 2.0, 1.0), 0.9)
