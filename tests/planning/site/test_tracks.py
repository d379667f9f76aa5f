"""Tracks: where they are, that their sweeps cover them, and how a site carries them."""

import math

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp

from byway_planning import (
    Disc,
    DiscShape,
    LayerSettings,
    Memory,
    PolygonShape,
    SiteModel,
    SiteSettings,
    plan,
)
from byway_planning.site import SiteError, Track, base_id
from byway_planning.site.tracks import hull_kernel, piece_id

FORK = [(-1.0, -0.6), (1.4, -0.6), (1.4, -0.2), (0.2, -0.2), (0.2, 0.2), (1.4, 0.2), (1.4, 0.6),
        (-1.0, 0.6)]  # fmt: skip
LIMITS = (0.0, 0.0, 60.0, 40.0)


def site(**more) -> SiteModel:
    model = SiteModel(SiteSettings(LIMITS, **more), Memory.private())
    model.declare("movers", LayerSettings())
    return model


motions = st.tuples(
    st.floats(-3, 3), st.floats(-3, 3), st.one_of(st.just(0.0), st.floats(-1.5, 1.5))
)


@settings(max_examples=40, deadline=None)
@given(motions, st.floats(0.0, 4.0))
def test_a_track_goes_where_its_equations_lead(motion, ahead_s: float) -> None:
    """Against scipy's integrator: position, heading and a velocity that turns."""
    vx, vy, turn = motion
    track = Track(DiscShape(0, 0, 0.4), (3.0, 4.0, 0.5), (vx, vy), turn, at_s=10.0)

    def rate(_, state):
        _, _, _, u, v = state
        return [u, v, turn, -turn * v, turn * u]

    found = solve_ivp(rate, (0.0, ahead_s), [3.0, 4.0, 0.5, vx, vy], rtol=1e-9, atol=1e-10)
    assert track.pose_at(10.0 + ahead_s) == pytest.approx(tuple(found.y[:3, -1]), abs=1e-6)


@settings(max_examples=60, deadline=None)
@given(motions, st.sampled_from(["disc", "fork"]), st.floats(0.0, 0.5), st.floats(0.0, 0.8),
       st.floats(0.0, 5.0), st.floats(0.5, 4.0))  # fmt: skip
def test_a_sweep_covers_the_grown_body_at_every_time(
    motion, body, unsure_m, growth_mps, late_s, ahead_s
) -> None:
    """By dense sampling with shapely; and it is no larger than it has to be by much."""
    shape = DiscShape(0.1, 0.0, 0.4) if body == "disc" else PolygonShape(FORK)
    vx, vy, turn = motion
    track = Track(shape, (3.0, 4.0, 0.5), (vx, vy), turn, unsure_m, growth_mps, at_s=10.0)
    now_s = 10.0 + late_s
    pieces = []
    for piece in track.sweep(now_s, ahead_s):
        if isinstance(piece, DiscShape):
            pieces.append(shapely.Point(piece.x_m, piece.y_m).buffer(piece.radius_m + 1e-4, 256))
        else:
            assert shapely.is_valid(shapely.Polygon(piece.vertices_m))
            assert shapely.is_ccw(shapely.LinearRing(piece.vertices_m))
            pieces.append(shapely.Polygon(piece.vertices_m))
    swept = shapely.union_all(pieces)
    flat = shapely.Point(0.1, 0.0).buffer(0.4, 64) if body == "disc" else shapely.Polygon(FORK)
    bodies = []
    for t in np.linspace(0.0, ahead_s, 40):
        x, y, heading = track.pose_at(now_s + t)
        placed = shapely.affinity.rotate(flat, heading, origin=(0, 0), use_radians=True)
        placed = shapely.affinity.translate(placed, x, y)
        # A buffer of shapely lies inside the true one.
        grown = placed.buffer(unsure_m + growth_mps * (late_s + t), 32)
        assert grown.difference(swept).area < 1e-9
        bodies.append(grown)
    covered = shapely.union_all(bodies).convex_hull
    assert swept.area < 1.4 * covered.buffer(0.15).area


@settings(max_examples=50, deadline=None)
@given(st.integers(0, 10**6), st.integers(3, 60))
def test_hulls_are_those_of_shapely(seed: int, count: int) -> None:
    # Whole numbers, for which there is no doubt what lies on a line.
    points = np.round(np.random.default_rng(seed).normal(0.0, 20.0, (count, 2)))
    points = np.unique(points, axis=0)
    wanted = shapely.MultiPoint(points).convex_hull
    if wanted.geom_type != "Polygon":
        return
    points = np.ascontiguousarray(points[np.lexsort(points.T[::-1])])
    out = np.empty((len(points) + 1, 2))
    found = out[: hull_kernel(points, out)]
    assert shapely.Polygon(found).equals(wanted)
    assert len(found) == len(wanted.exterior.coords) - 1


@pytest.mark.parametrize(
    ("more", "code"),
    [
        ({"velocity_mps": (math.nan, 0.0)}, "not_finite"),
        ({"pose": (0.0, math.inf, 0.0)}, "not_finite"),
        ({"velocity_mps": (200.0, 0.0)}, "bad_track"),
        ({"turn_rate_radps": 11.0}, "bad_track"),
        ({"uncertainty_m": -0.1}, "bad_track"),
        ({"growth_mps": -0.1}, "bad_track"),
    ],
)
def test_bad_tracks_are_refused(more, code: str) -> None:
    with pytest.raises(SiteError) as refused:
        Track(**{"shape": DiscShape(0, 0, 0.4), "pose": (1.0, 1.0, 0.0)} | more)
    assert refused.value.code == code


def test_ids_of_pieces_lead_back_to_the_track() -> None:
    assert base_id(piece_id("fork-1", 12)) == "fork-1"
    assert base_id("pile-7") == "pile-7"


# -- on a site --------------------------------------------------------------------------------


def walker(x: float, y: float, **more) -> Track:
    return Track(DiscShape(0, 0, 0.3), (x, y, 0.0), **more)


def on_site(model: SiteModel) -> dict[str, tuple[float, float, float, float]]:
    return {name: shape.box_m for _, name, shape in model.publish().obstacles()}


def test_tracks_are_carried_forward_and_go_when_dropped() -> None:
    model = site(sweep_s=2.0)
    model.track("movers", "ann", walker(5.0, 5.0, velocity_mps=(1.0, 0.0), at_s=100.0))
    # Two seconds, and two turns within which it is carried.
    assert on_site(model)["ann~0"] == pytest.approx((4.7, 4.7, 7.5, 5.3), abs=0.02)
    assert model.next_carry_s(100.0) == pytest.approx(100.1)
    first = model.revision
    model.carry(103.0)
    assert on_site(model)["ann~0"] == pytest.approx((7.7, 4.7, 10.5, 5.3), abs=0.02)
    assert model.revision == first + 1
    (box,) = {tuple(b) for b in model.changed_m.round(1).tolist() if b[0] > 7.0}
    assert box == pytest.approx((7.7, 4.7, 10.5, 5.3), abs=0.1)
    assert [(layer, name) for layer, name, _ in model.publish().tracks()] == [("movers", "ann")]
    assert model.drop("movers", "ann")
    assert not model.drop("movers", "ann")
    assert on_site(model) == {}
    assert model.next_carry_s(103.0) is None


def test_a_site_that_changes_often_is_not_carried_each_time() -> None:
    """At every instant, what lies there covers the next two seconds."""
    model = site(sweep_s=2.0, carry_every_s=0.1)
    ann = walker(5.0, 5.0, velocity_mps=(1.0, 0.0), at_s=100.0)
    bob = walker(5.0, 15.0, velocity_mps=(-1.0, 0.0), at_s=100.06)
    model.track("movers", "ann", ann)
    model.track("movers", "bob", bob)
    revisions = set()
    for now_s in np.arange(100.06, 101.0, 0.002):
        model.carry(now_s)
        snapshot = model.publish()
        revisions.add(snapshot.revision)
        boxes = on_site(model)
        for name, track, side in (("ann~0", ann, 0), ("bob~0", bob, 2)):
            ends = [track.pose_at(now_s + t)[0] for t in (0.0, 2.0)]
            assert boxes[name][0] <= min(ends) - 0.3
            assert boxes[name][2] >= max(ends) + 0.3
            assert abs(boxes[name][side] - track.pose_at(now_s)[0]) < 0.55
    assert 8 <= len(revisions) <= 20  # both in one turn, though they came at different times


def test_many_tracks_are_carried_a_few_at_a_time() -> None:
    model = site(sweep_s=1.0, carry_every_s=0.1)
    for i in range(35):
        track = walker(2.0 + 1.5 * i, 20.0, velocity_mps=(0.5, 0.0), at_s=100.0)
        model.track("movers", f"t{i}", track)
    model.publish()
    carried = []
    now_s = 100.0
    for _ in range(8):
        now_s = model.next_carry_s(now_s)
        model.carry(now_s)
        model.publish()
        carried.append((round(now_s, 6), len(model.changed_m) // 2))  # old box and new one
    turns = [10, 10, 10, 5]
    assert carried == [(100.1, n) for n in turns] + [(100.2, n) for n in turns]
    model.carry(101.0)  # whoever is late carries all
    model.publish()
    assert len(model.changed_m) == 70


def test_standing_tracks_and_those_outside_make_no_revisions() -> None:
    model = site(sweep_s=1.0)
    model.track("movers", "post", walker(5.0, 5.0, uncertainty_m=0.1))
    assert model.next_carry_s(3.0) is None
    model.track("movers", "ann", walker(59.0, 5.0, velocity_mps=(1.0, 0.0)))
    model.carry(10.0)
    revision = model.publish().revision
    model.carry(20.0)
    assert model.publish().revision == revision


def test_a_track_takes_the_place_of_an_obstacle_of_its_id_and_the_other_way_round() -> None:
    model = site()
    model.put("movers", "cart", PolygonShape([(5, 5), (6, 5), (6, 6), (5, 6)]))
    model.track("movers", "cart", walker(20.0, 20.0, turn_rate_radps=1.0, velocity_mps=(1.0, 0.0)))
    names = set(on_site(model))
    assert "cart" not in names
    assert "cart~0" in names
    assert len(names) > 5  # it turns: many pieces
    model.track("movers", "cart", walker(20.0, 20.0))
    assert set(on_site(model)) == {"cart~0"}
    model.put("movers", "cart", PolygonShape([(5, 5), (6, 5), (6, 6), (5, 6)]))
    assert set(on_site(model)) == {"cart"}
    assert list(model.tracks()) == []
    model.track("movers", "cart", walker(20.0, 20.0))
    model.clear("movers")
    assert on_site(model) == {}


def test_tracks_outside_or_among_outlines_are_refused_and_change_nothing() -> None:
    model = site()
    model.declare("outlines", LayerSettings(outlines_only=True))
    model.track("movers", "ann", walker(5.0, 5.0))
    before = on_site(model)
    for layer, track, code in (
        ("movers", walker(-30.0, 5.0), "outside_limits"),
        ("outlines", walker(5.0, 5.0), "outlines_only"),
        ("nowhere", walker(5.0, 5.0), "unknown_layer"),
    ):
        with pytest.raises(SiteError) as refused:
            model.track(layer, "ann", track)
        assert refused.value.code == code
    assert on_site(model) == before


def test_one_that_leaves_the_site_is_no_obstacle_there() -> None:
    model = site(sweep_s=1.0)
    model.track("movers", "ann", walker(59.0, 5.0, velocity_mps=(1.0, 0.0), at_s=0.0))
    model.carry(10.0)
    assert on_site(model) == {}
    assert [name for _, name, _ in model.tracks()] == ["ann"]
    model.track("movers", "ann", walker(50.0, 5.0, velocity_mps=(1.0, 0.0), at_s=10.0))
    assert set(on_site(model)) == {"ann~0"}


def test_routes_keep_out_of_the_sweep() -> None:
    model = site(sweep_s=3.0)
    # Coming up the middle: three seconds of it close the direct way.
    model.track("movers", "ann", walker(30.0, 18.0, velocity_mps=(0.0, 1.5), at_s=0.0))
    snapshot = model.publish()
    outcome = plan(
        snapshot, Disc(radius_m=0.5), (10.0, 20.0, 0.0), (50.0, 20.0, 0.0),
        time_left=lambda: 1.0, seed=1, work_max=400,
    )  # fmt: skip
    assert outcome.kind == "route"
    assert outcome.cost > 40.1
    blocked = plan(
        snapshot, Disc(radius_m=0.5), (10.0, 20.0, 0.0), (30.0, 21.0, 0.0),
        time_left=lambda: 1.0, seed=1, work_max=400,
    )  # fmt: skip
    assert blocked.kind == "goal_blocked"
    assert base_id(blocked.blocked_by[0].obstacle) == "ann"


def test_a_successor_carries_on() -> None:
    memory = Memory.private()
    model = SiteModel(SiteSettings(LIMITS), memory)
    model.declare("movers", LayerSettings())
    model.track("movers", "ann", walker(5.0, 5.0, velocity_mps=(1.0, 0.5), turn_rate_radps=0.4))
    fork = Track(PolygonShape(FORK), (20.0, 20.0, 1.0), (0.5, 0.0), 0.0, 0.1, 0.2, 3.0)
    model.track("movers", "fork", fork)
    snapshot = model.publish()
    again = SiteModel.recover(memory, snapshot.handle, [snapshot.handle])
    for one in (model, again):
        one.carry(4.0)
    assert on_site(again) == on_site(model)
    told = {name: track for _, name, track in again.tracks()}
    assert told["fork"].pose_at(5.0) == fork.pose_at(5.0)
    assert told["fork"].uncertainty_at(5.0) == fork.uncertainty_at(5.0)
    again.drop("movers", "ann")
    assert {base_id(name) for name in on_site(again)} == {"fork"}
