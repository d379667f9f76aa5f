"""Swept traces of points, against sampling with refinement and against laws."""

import math

import numpy as np
import pytest
import shapely
from scipy import optimize
from tests.planning.route_scenes import after, star

from byway_planning.verify.geometry import (
    BEND_PER_M_MIN,
    bend_of,
    body_trace,
    driven,
    is_inside,
    obstacle_trace,
    point_to_segment,
    segment_to_segment,
    segments_cross,
    trace_to_segment,
    turned,
)

# Straight, below and above the least bend, the tug's, and sharper than any vehicle's.
CURVATURES = [0.0, 1e-7, -2.9e-6, 3.1e-6, 1e-3, -0.2, 0.2, 1.0, -3.0]


def where(curvature: float, sigma: float, x: float, y: float) -> tuple[float, float]:
    """A body point after driving sigma from the middle pose, by turning and moving."""
    px, py, turn = after((0.0, 0.0, 0.0), curvature, sigma)
    if abs(curvature) < 1e-3:  # the circle's own coordinates lose digits here
        px, py = sigma, 0.5 * curvature * sigma**2
    c, s = math.cos(turn), math.sin(turn)
    return px + c * x - s * y, py + s * x + c * y


def seen(curvature: float, sigma: float, x: float, y: float) -> tuple[float, float]:
    """A point of the ground, seen from the body after sigma."""
    px, py = where(curvature, sigma, 0.0, 0.0)
    c, s = math.cos(curvature * sigma), math.sin(curvature * sigma)
    return c * (x - px) + s * (y - py), c * (y - py) - s * (x - px)


def least(distance, half: float) -> float:
    """The least value on [-half, half]: sampled, then refined around the lowest samples."""
    at = np.linspace(-half, half, 161)
    values = np.array([distance(s) for s in at])
    best = values.min()
    for i in np.argsort(values)[:3]:
        low, high = at[max(i - 1, 0)], at[min(i + 1, len(at) - 1)]
        found = optimize.minimize_scalar(
            distance, bounds=(low, high), method="bounded", options={"xatol": 1e-10}
        )
        best = min(best, found.fun)
    return float(best)


@pytest.mark.parametrize("curvature", CURVATURES)
@pytest.mark.parametrize("motion", ["body", "ground"])
def test_a_trace_is_as_far_from_an_edge_as_its_nearest_point(curvature: float, motion: str) -> None:
    rng = np.random.default_rng(11)
    trace_of, place = (body_trace, where) if motion == "body" else (obstacle_trace, seen)
    for _ in range(12):
        half = min(rng.uniform(0.01, 1.2), 0.5 / max(abs(curvature), 1e-9))
        x, y = rng.uniform(-3.0, 3.0, 2)
        p = rng.uniform(-3.0, 3.0, 2)
        q = p + rng.uniform(-2.0, 2.0, 2) * rng.choice([0.01, 0.3, 1.0])
        bend = bend_of(curvature, half)
        ends = trace_of(bend, x, y)
        # a very flat circle is taken for its chord, and its sagitta off the distance
        flat = 0.5 * abs(curvature) * half**2 if abs(curvature) < BEND_PER_M_MIN else 0.0
        assert ends[:2] == pytest.approx(place(curvature, -half, x, y), abs=1e-8)
        assert ends[2:] == pytest.approx(place(curvature, half, x, y), abs=1e-8)
        ours = trace_to_segment(bend, x, y, ends, (p[0], p[1], q[0], q[1]))
        twin = least(
            lambda s, x=x, y=y, p=p, q=q: point_to_segment(
                *place(curvature, s, x, y), p[0], p[1], q[0], q[1]
            ),
            half,
        )
        assert ours == pytest.approx(twin, abs=1e-7 + 2.0 * flat)
        assert ours <= twin + 1e-9, "never more than the true distance"


def test_a_trace_that_crosses_an_edge_touches_it() -> None:
    bend = bend_of(0.5, 1.0)
    ends = body_trace(bend, 3.0, 0.0)
    # through the middle of the trace, and through the circle but beside the trace
    assert trace_to_segment(bend, 3.0, 0.0, ends, (2.0, 0.1, 9.0, 0.1)) == 0.0
    beside = trace_to_segment(bend, 3.0, 0.0, ends, (-4.0, 2.0, -1.0, 2.0))
    assert beside == pytest.approx(
        min(math.hypot(e[0] + 1.0, e[1] - 2.0) for e in (ends[:2], ends[2:]))
    )


def test_the_turning_centre_itself_does_not_move() -> None:
    bend = bend_of(0.5, 1.0)
    assert body_trace(bend, 0.0, 2.0) == pytest.approx((0.0, 2.0, 0.0, 2.0))
    ends = body_trace(bend, 0.0, 2.0)
    assert trace_to_segment(bend, 0.0, 2.0, ends, (1.0, 1.0, 1.0, 5.0)) == pytest.approx(1.0)


def test_an_edge_of_no_length_is_a_point() -> None:
    bend = bend_of(0.5, 0.1)
    ends = body_trace(bend, 1.0, 2.0)
    assert trace_to_segment(bend, 1.0, 2.0, ends, (3.0, 2.0, 3.0, 2.0)) == pytest.approx(
        2.0, abs=0.02
    )
    assert point_to_segment(0.0, 0.0, 3.0, 4.0, 3.0, 4.0) == 5.0


@pytest.mark.parametrize(
    ("first", "second", "distance"),
    [
        ((0, 0, 2, 0), (1, -1, 1, 1), 0.0),  # a cross
        ((0, 0, 2, 0), (1, 0.5, 1, 2), 0.5),  # an end above the middle
        ((0, 0, 2, 0), (3, 0, 5, 0), 1.0),  # in line, apart
        ((0, 0, 2, 0), (1, 0, 5, 0), 0.0),  # in line, overlapping
        ((0, 0, 2, 0), (0, 1, 2, 1), 1.0),  # parallel
        ((0, 0, 2, 0), (2, 0, 3, 3), 0.0),  # a common end
        ((0, 0, 2, 0), (1, 0, 1, 3), 0.0),  # a touch
        ((0, 0, 1, 1), (2, 1, 1, 2), math.sqrt(0.5)),
    ],
)
def test_segments_are_as_far_apart_as_they_look(
    first: tuple[float, ...], second: tuple[float, ...], distance: float
) -> None:
    for a in (first, first[2:] + first[:2]):
        for b in (second, second[2:] + second[:2]):
            assert segment_to_segment(*map(float, (*a, *b))) == pytest.approx(distance)
            assert segment_to_segment(*map(float, (*b, *a))) == pytest.approx(distance)


def test_only_segments_that_cross_cross() -> None:
    assert segments_cross(0.0, 0.0, 2.0, 0.0, 1.0, -1.0, 1.0, 1.0)
    assert not segments_cross(0.0, 0.0, 2.0, 0.0, 3.0, -1.0, 3.0, 1.0)
    assert not segments_cross(0.0, 0.0, 2.0, 0.0, 1.0, 0.1, 1.0, 1.0)


def test_driving_there_and_back_ends_where_it_began() -> None:
    for curvature in CURVATURES:
        x, y, heading = driven(3.0, -2.0, 0.4, curvature, 0.3)
        assert driven(x, y, heading, curvature, -0.3) == pytest.approx((3.0, -2.0, 0.4), abs=1e-15)
        if abs(curvature) > 1e-3:
            expected = after((3.0, -2.0, 0.4), curvature, 0.3)
            assert (x, y, heading) == pytest.approx(expected, abs=1e-12)


def test_angles_are_taken_the_short_way_round() -> None:
    assert turned(2.0 * math.pi + 0.1) == pytest.approx(0.1)
    assert turned(-2.0 * math.pi - 0.1) == pytest.approx(-0.1)
    assert abs(turned(3.0 * math.pi)) == pytest.approx(math.pi)


def test_the_inside_of_a_polygon_is_that_of_shapely() -> None:
    rng = np.random.default_rng(3)
    for _ in range(10):
        # the middle ring of three, so that the indexes matter
        rings = [star(rng, (5.0, 0.0), 1.0), star(rng, (0.0, 0.0), 2.0), star(rng, (0.0, 0.0), 9.0)]
        first = len(rings[0])
        last = first + len(rings[1])
        ring = np.concatenate(rings)
        ring.flags.writeable = False
        shape = shapely.Polygon(rings[1])
        for x, y in rng.uniform(-2.0, 2.0, (60, 2)):
            assert is_inside(ring, first, last, x, y) == shape.contains(shapely.Point(x, y))
