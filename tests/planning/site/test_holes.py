"""Polygons with holes: what is refused, the ring that is made of them, and what it means."""

import math

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st

from byway_planning import Disc, LayerSettings, Memory, SiteModel, SiteSettings, plan
from byway_planning.search.question import excess_kernel
from byway_planning.site import PolygonShape, SiteError, Snapshot
from byway_planning.site.rings import split
from byway_planning.site.shapes import VERTICES_MAX, box_shape, signed_area_m2
from byway_planning.verify import clearance_m


def square(x: float, y: float, side: float) -> list[tuple[float, float]]:
    return [(x, y), (x + side, y), (x + side, y + side), (x, y + side)]


def star(rng: np.random.Generator, x: float, y: float, r: float, n: int) -> np.ndarray:
    """A ring that is not convex, within r of a middle and at least 0.3 r from it."""
    angles = np.sort(rng.uniform(0.0, 2.0 * math.pi, n))
    angles += 0.02 * np.arange(n)
    radii = rng.uniform(0.3 * r, r, n)
    return np.column_stack([x + radii * np.cos(angles), y + radii * np.sin(angles)])


def with_holes(seed: int) -> tuple[np.ndarray, list[np.ndarray]]:
    """A large outline and up to nine holes on a grid inside it."""
    rng = np.random.default_rng(seed)
    outline = star(rng, 0.0, 0.0, 1.0, 24)
    outline = outline / np.hypot(*outline.T)[:, None] * rng.uniform(6.5, 9.0, 24)[:, None]
    holes = []
    for i in range(3):
        for k in range(3):
            if rng.uniform() < 0.6:
                middle = (2.4 * (i - 1), 2.4 * (k - 1))
                holes.append(star(rng, *middle, 1.0, int(rng.integers(3, 9))))
    return outline, [h for h in holes if shapely.Polygon(h).is_valid]


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 10**6))
def test_the_ring_means_what_shapely_says(seed: int) -> None:
    outline, holes = with_holes(seed)
    world = shapely.Polygon(outline, holes)
    if not world.is_valid:
        return
    shape = PolygonShape(outline, holes)
    ring = shape.vertices_m
    assert len(ring) == len(outline) + sum(len(hole) + 2 for hole in holes)
    assert signed_area_m2(ring) == pytest.approx(world.area)
    # Outside, no point of a bridge is nearer than the polygon itself.
    rng = np.random.default_rng(seed + 1)
    line = shapely.LinearRing(ring)
    for x, y in rng.uniform(-10.0, 10.0, (60, 2)):
        point = shapely.Point(x, y)
        if not world.covers(point):
            assert line.distance(point) == pytest.approx(world.distance(point), abs=1e-12)


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10**6))
def test_bridges_can_be_taken_out_again(seed: int) -> None:
    outline, holes = with_holes(seed)
    if not shapely.Polygon(outline, holes).is_valid:
        return
    first, *others = PolygonShape(outline, holes).rings_m
    assert shapely.Polygon(first).equals(shapely.Polygon(outline))
    found = {shapely.Polygon(ring).normalize().wkt for ring in others}
    assert found == {shapely.Polygon(hole).normalize().wkt for hole in holes}
    (alone,) = split(np.array(square(0.0, 0.0, 2.0)))
    assert len(alone) == 4


@pytest.mark.parametrize(
    ("holes", "code", "word"),
    [
        ([square(8.0, 8.0, 4.0)], "bad_hole", "touches the outline"),
        ([square(0.0, 2.0, 2.0)], "bad_hole", "touches the outline"),
        ([square(20.0, 20.0, 2.0)], "bad_hole", "outside"),
        ([square(-5.0, -5.0, 30.0)], "bad_hole", "outside"),
        ([square(1.0, 1.0, 3.0), square(2.0, 2.0, 4.0)], "bad_hole", "hole 1 touches hole 0"),
        ([square(1.0, 1.0, 6.0), square(2.0, 2.0, 2.0)], "bad_hole", "hole 1 lies inside hole 0"),
        ([[(1.0, 1.0), (3.0, 3.0), (3.0, 1.0), (1.0, 3.0)]], "crossing_polygon", "hole 0"),
        ([[(1.0, 1.0), (2.0, 2.0)]], "too_few_vertices", "3 vertices"),
        ([[(1.0, 1.0), (math.nan, 2.0), (1.0, 3.0)]], "not_finite", "vertex 1"),
    ],
)
def test_bad_holes_are_refused(holes, code: str, word: str) -> None:
    with pytest.raises(SiteError, match=word) as refused:
        PolygonShape(square(0.0, 0.0, 10.0), holes)
    assert refused.value.code == code


def test_too_many_vertices_in_all_are_refused() -> None:
    angles = np.linspace(0.0, 2.0 * math.pi, VERTICES_MAX - 100, endpoint=False)
    outline = 10.0 * np.column_stack([np.cos(angles), np.sin(angles)])
    hole = np.column_stack([np.cos(angles[::30]), np.sin(angles[::30])])
    with pytest.raises(SiteError, match="what joins them") as refused:
        PolygonShape(outline, [hole])
    assert refused.value.code == "too_large"


def courtyard() -> Snapshot:
    """A building with a yard in it, and a narrow yard that no vehicle fits into."""
    model = SiteModel(SiteSettings((0.0, 0.0, 40.0, 30.0)), Memory.private())
    model.declare("fixed", LayerSettings())
    outline = [(5.0, 5.0), (30.0, 5.0), (30.0, 25.0), (5.0, 25.0)]
    holes = [square(8.0, 8.0, 10.0), square(22.0, 8.0, 1.0)]
    model.put("fixed", "hall", PolygonShape(outline, holes))
    return model.publish()


@pytest.mark.parametrize(
    ("place", "is_free"),
    [((13.0, 13.0), True), ((20.0, 13.0), False), ((2.0, 2.0), True), ((22.5, 8.5), False),
     ((8.3, 13.0), False), ((17.0, 9.0), True)],
)  # fmt: skip
def test_inside_a_hole_is_free_and_inside_the_solid_is_not(place, is_free: bool) -> None:
    snapshot, disc = courtyard(), Disc(radius_m=0.6, clearance_m=0.0)
    pose = np.array([*place, 0.0])
    pose.flags.writeable = False
    assert (excess_kernel(snapshot.scene(), disc.body(), pose) > 0.0) == is_free
    assert (clearance_m(snapshot.solids(), disc, (*place, 0.0)).distance_m > 0.0) == is_free


def test_routes_stay_in_their_yard_or_out_of_it() -> None:
    snapshot, disc = courtyard(), Disc(radius_m=0.6)
    inside = plan(snapshot, disc, (10.0, 10.0, 0.0), (16.0, 16.0, 0.0),
                  time_left=lambda: 1.0, seed=1, work_max=300)  # fmt: skip
    assert inside.kind == "route"
    assert inside.cost == pytest.approx(math.hypot(6.0, 6.0))
    out = plan(snapshot, disc, (10.0, 10.0, 0.0), (35.0, 15.0, 0.0),
               time_left=lambda: 1.0, seed=1, work_max=300)  # fmt: skip
    assert out.kind == "no_route"
    assert out.remedy is not None
    assert [each.obstacle for each in out.remedy.movables] == ["hall"]


def test_a_successor_has_the_holes() -> None:
    memory = Memory.private()
    model = SiteModel(SiteSettings((0.0, 0.0, 40.0, 30.0)), memory)
    model.declare("fixed", LayerSettings())
    shape = PolygonShape(square(2.0, 2.0, 20.0), [square(5.0, 5.0, 6.0)])
    model.put("fixed", "hall", shape)
    snapshot = model.publish()
    again = SiteModel.recover(memory, snapshot.handle, [snapshot.handle])
    (_, _, found), *_ = again.publish().obstacles()
    assert found.vertices_m.tobytes() == shape.vertices_m.tobytes()
    assert len(found.rings_m) == 2


# -- boxes ------------------------------------------------------------------------------------


@settings(max_examples=50, deadline=None)
@given(
    st.tuples(st.floats(-500, 500), st.floats(-500, 500), st.floats(-7, 7)),
    st.tuples(st.floats(0.01, 50), st.floats(0.01, 50)),
)
def test_a_box_is_what_shapely_turns(pose, sides) -> None:
    x, y, heading_rad = pose
    length_m, width_m = sides
    flat = shapely.box(-length_m / 2, -width_m / 2, length_m / 2, width_m / 2)
    turned = shapely.affinity.rotate(flat, heading_rad, origin=(0, 0), use_radians=True)
    wanted = shapely.affinity.translate(turned, x, y)
    found = shapely.Polygon(box_shape(x, y, heading_rad, length_m, width_m).vertices_m)
    assert found.symmetric_difference(wanted).area < 1e-9 * (1.0 + wanted.area)


@pytest.mark.parametrize(
    ("told", "code"),
    [
        ((0.0, 0.0, 0.0, 0.0, 1.0), "bad_size"),
        ((0.0, 0.0, 0.0, 1.0, -1.0), "bad_size"),
        ((0.0, 0.0, math.nan, 1.0, 1.0), "not_finite"),
        ((0.0, 2e6, 0.0, 1.0, 1.0), "too_large"),
    ],
)
def test_bad_boxes_are_refused(told, code: str) -> None:
    with pytest.raises(SiteError) as refused:
        box_shape(*told)
    assert refused.value.code == code
