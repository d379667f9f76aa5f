"""Shapes are checked before they touch a site."""

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.planning.site.site_twins import star

from byway_planning.site.shapes import (
    COORDINATE_M_MAX,
    VERTICES_MAX,
    DiscShape,
    PolygonShape,
    SiteError,
    first_crossing,
    signed_area_m2,
)

SQUARE = [(0.0, 0.0), (2.0, 0.0), (2.0, 2.0), (0.0, 2.0)]


def polygon(ring: object) -> PolygonShape:
    return PolygonShape(np.array(ring, float))


@pytest.mark.parametrize("ring", [SQUARE, SQUARE[::-1], [*SQUARE, SQUARE[0]]])
def test_a_polygon_is_kept_counter_clockwise_once_around_and_read_only(ring):
    shape = polygon(ring)
    assert len(shape.vertices_m) == 4
    assert signed_area_m2(shape.vertices_m) == 4.0
    assert shape.box_m == (0.0, 0.0, 2.0, 2.0)
    with pytest.raises(ValueError, match="read-only"):
        shape.vertices_m[0, 0] = 1.0


def test_a_polygon_does_not_hold_on_to_the_array_it_was_given():
    given_ring = np.array(SQUARE)
    shape = PolygonShape(given_ring)
    given_ring[:] = 9.0
    assert shape.vertices_m.max() == 2.0


#: What is wrong, its code, and the ring.
BAD_RINGS = {
    "nothing": ("too_few_vertices", np.zeros((0, 2))),
    "two": ("too_few_vertices", SQUARE[:2]),
    "three numbers a vertex": ("too_few_vertices", [(0, 0, 0), (1, 0, 0), (0, 1, 0)]),
    "flat list": ("too_few_vertices", [0.0, 1.0, 2.0]),
    "too many": ("too_large", [(i, i * i * 1e-6) for i in range(VERTICES_MAX + 1)]),
    "nan": ("not_finite", [(0, 0), (1, 0), (np.nan, 1)]),
    "inf": ("not_finite", [(0, 0), (1, 0), (1, -np.inf)]),
    "far away": ("too_large", [(0, 0), (1, 0), (0, 2 * COORDINATE_M_MAX)]),
    "astronomical": ("too_large", [(0, 0), (1e300, 0), (0, 1e300)]),
    "crossing": ("crossing_polygon", [(0, 0), (2, 2), (2, 0), (0, 2)]),
    "corner on an edge": ("crossing_polygon", [(0, 0), (4, 0), (4, 4), (2, 0), (0, 4)]),
    "corner on a corner": ("crossing_polygon", [(0, 0), (2, 2), (4, 0), (4, 4), (2, 2), (0, 4)]),
    "edge on an edge": ("crossing_polygon", [(0, 0), (4, 0), (4, 2), (3, 0), (1, 0), (0, 2)]),
    "folding back": ("crossing_polygon", [(0, 0), (4, 0), (2, 0), (2, 3)]),
    "folding back at the seam": ("crossing_polygon", [(2, 0), (2, 3), (0, 0), (4, 0)]),
    "in a line": ("crossing_polygon", [(0, 0), (1, 1), (2, 2)]),
    "twice the same": ("crossing_polygon", [(0, 0), (2, 0), (2, 0), (0, 2)]),
    "closed twice": ("crossing_polygon", [*SQUARE, SQUARE[0], SQUARE[0]]),
    "all the same": ("crossing_polygon", [(1, 1)] * 3),
    "no area": ("too_few_vertices", [(0, 0), (1e-3, 0), (0, 1e-6)]),
}


@pytest.mark.parametrize("what", BAD_RINGS)
def test_a_bad_polygon_is_refused_with_its_code(what):
    code, ring = BAD_RINGS[what]
    with pytest.raises(SiteError) as refused:
        polygon(ring)
    assert refused.value.code == code
    assert str(refused.value) == refused.value.text


def test_refusals_name_what_is_wrong():
    with pytest.raises(SiteError, match=r"vertex 2 is \[nan, 1.0\]") as refused:
        polygon([(0, 0), (1, 0), (np.nan, 1)])
    assert refused.value.facts == {"vertex": 2}
    with pytest.raises(SiteError, match="edge 0 meets edge 2") as refused:
        polygon([(0, 0), (2, 2), (2, 0), (0, 2)])
    assert refused.value.facts == {"edges": [0, 2]}
    with pytest.raises(SiteError, match="vertices 1 and 2 are the same"):
        polygon([(0, 0), (2, 0), (2, 0), (0, 2)])
    with pytest.raises(SiteError, match="origin_m"):
        polygon([(0, 0), (1, 0), (0, 2 * COORDINATE_M_MAX)])
    with pytest.raises(SiteError, match="pairs of numbers") as refused:
        PolygonShape([(0, 0), (1, 0), (1,)])
    assert refused.value.code == "too_few_vertices"


@pytest.mark.parametrize(
    ("code", "numbers"),
    [
        ("not_finite", (np.nan, 0.0, 1.0)),
        ("not_finite", (0.0, np.inf, 1.0)),
        ("not_finite", (0.0, 0.0, np.nan)),
        ("bad_radius", (0.0, 0.0, 0.0)),
        ("bad_radius", (0.0, 0.0, -1.0)),
        ("too_large", (0.0, -2 * COORDINATE_M_MAX, 1.0)),
        ("too_large", (0.0, 0.0, 1e300)),
    ],
)
def test_a_bad_disc_is_refused_with_its_code(code, numbers):
    with pytest.raises(SiteError) as refused:
        DiscShape(*numbers)
    assert refused.value.code == code


@settings(max_examples=100, deadline=None)
@given(st.lists(st.tuples(st.integers(0, 5), st.integers(0, 5)), min_size=3, max_size=8))
def test_what_crosses_itself_is_what_shapely_calls_so(ring):
    """On a coarse lattice, where touching and overlapping are common and exact."""
    # The one difference: shapely lets a straight corner be, and takes out repeated ones.
    found = first_crossing(np.array(ring, float))
    repeated = any(ring[i] == ring[i - 1] for i in range(len(ring)))
    if repeated:
        assert found is not None
    else:
        assert (found is None) == shapely.LinearRing(ring).is_simple


@settings(max_examples=50, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(3, 60), st.floats(-900.0, 900.0))
def test_stars_are_simple_and_have_shapelys_area(seed, count, shift):
    shape = star(seed, shift, -shift, 3.0, count)
    wanted = shapely.Polygon(shape.vertices_m)
    assert signed_area_m2(shape.vertices_m) == pytest.approx(wanted.area, abs=1e-9)
    assert shape.box_m == wanted.bounds


def test_the_box_of_a_disc_goes_around_it():
    assert DiscShape(1.0, 2.0, 0.5).box_m == (0.5, 1.5, 1.5, 2.5)
