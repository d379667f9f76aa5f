"""The crew's real skills: changes as they travel, a site that is described as it is, jobs."""

import mmap
import time

import msgpack
import numpy as np
import pytest

from byway import frames, messages, obstacles
from byway.packed import pack, read
from bywayd.crew import trade
from bywayd.crew.memory import SiteMemory
from bywayd.crew.skills import Refused

ORIGIN_M = (5000.0, 8000.0)
SETTINGS = {
    "site": {
        "cell_m": 0.1,
        "limits_m": [4960.0, 7960.0, 5040.0, 8040.0],
        "origin_m": ORIGIN_M,
        "sweep_s": 3.0,
        "carry_every_s": 0.1,
    },
    "layers": {"own": {"unknown_blocks": False, "outlines_only": True}},
}
PLAIN = {"unknown_blocks": False, "outlines_only": False, "decay_s": None}
TUG = {
    "model": "car",
    "footprint_m": [[-0.6, -0.7], [2.2, -0.7], [2.2, 0.7], [-0.6, 0.7]],
    "turn_radius_m_min": 2.6,
}
#: A square of one metre around a point near the origin.
SQUARE_M = np.array([[-0.5, -0.5], [0.5, -0.5], [0.5, 0.5], [-0.5, 0.5]])


@pytest.fixture
def ground():
    """The shared memory, as the surveyor and as a worker has it."""
    memory = SiteMemory.create(256 * 1024 * 1024)
    yield memory, memory.map_writable(), memory.map_readable()
    memory.close()


@pytest.fixture
def site(ground):
    memory, writable, _ = ground
    return trade.new_site(SETTINGS, writable, memory.grow)


def _square(x_m: float, y_m: float) -> np.ndarray:
    return SQUARE_M + np.array(ORIGIN_M) + np.array([x_m, y_m])


def _put(layer, polygons=None, discs=None, what="put", settings=PLAIN):
    fields, packed = obstacles.pack_shapes(obstacles.shapes(polygons, discs))
    model = messages.Put if what == "put" else messages.ReplaceLayer
    message = model(layer=layer, **fields).model_dump()
    return {
        "what": what,
        "layer": layer,
        "settings": settings,
        "message": message,
        "packed": packed,
        "ids": [],
    }


def _drop(layer, *ids):
    empty = {"message": None, "packed": b"", "settings": PLAIN}
    return {"what": "drop", "layer": layer, "ids": list(ids), **empty}


def _patch(layer, corner_m, cells, settings=PLAIN):
    columns, packed = pack({"cells": cells})
    message = messages.Patch(layer=layer, corner_m=corner_m, cell_m=0.1, columns=columns)
    return {
        "what": "patch",
        "layer": layer,
        "settings": settings,
        "message": message.model_dump(),
        "packed": packed,
        "ids": [],
    }


def _apply(site, *changes):
    for change in changes:
        for _ in site.apply(change):
            pass


def _described(site, **question):
    fields, packed = site.describe(
        {"layers": None, "box_m": None, "cells": True, "guards": False, **question}, 0.0
    )
    return frames.build(messages.SiteIs, fields), packed


def _column(described, packed, name):
    return read(described.columns[name], packed)


def test_what_was_put_is_described_in_the_same_coordinates(site):
    _apply(site, _put("stacks", {"a": _square(1, 2)}, {"post": (5003.0, 8004.0, 0.25)}))
    described, packed = _described(site)
    assert described.origin_m == ORIGIN_M
    assert described.limits_m == tuple(SETTINGS["site"]["limits_m"])
    assert {layer.layer: (layer.polygons, layer.discs) for layer in described.layers} == {
        "own": (0, 0),
        "stacks": (1, 1),
    }
    assert _column(described, packed, "ids").tobytes() == b"a\npost"
    assert _column(described, packed, "starts").tolist() == [0, 4]
    np.testing.assert_allclose(_column(described, packed, "vertices_m"), _square(1, 2), atol=1e-9)
    np.testing.assert_allclose(_column(described, packed, "discs_m"), [[5003.0, 8004.0, 0.25]])


def test_cells_are_described_as_one_rectangle_a_layer(site):
    cells = np.array([[1, 0], [2, 1]], np.uint8)
    _apply(site, _patch("lidar", (5000.0, 8000.0), cells))
    described, packed = _described(site, layers=["lidar"])
    (layer,) = described.layers
    (grid,) = layer.cells
    found = _column(described, packed, grid.column)
    column, row = (round((m - c) / 0.1) for m, c in zip(ORIGIN_M, grid.corner_m, strict=True))
    assert found[row : row + 2, column : column + 2].tolist() == cells.tolist()
    assert found.sum() == cells.sum()
    described, _ = _described(site, cells=False)
    assert all(layer.cells == [] for layer in described.layers)


def test_a_box_and_a_choice_of_layers_narrow_the_description(site):
    _apply(site, _put("stacks", {"near": _square(0, 0), "far": _square(30, 30)}))
    described, packed = _described(site, box_m=(4990.0, 7990.0, 5010.0, 8010.0))
    assert _column(described, packed, "ids").tobytes() == b"near"
    described, _ = _described(site, layers=["own"])
    assert [layer.layer for layer in described.layers] == ["own"]


def test_replacing_a_layer_forgets_what_it_held_cells_too(site):
    _apply(site, _put("stacks", {"a": _square(0, 0), "b": _square(3, 0)}))
    _apply(site, _patch("stacks", (5001.0, 8001.0), np.ones((3, 3), np.uint8)))
    _apply(site, _put("stacks", {"c": _square(6, 0)}, what="replace"))
    assert site.obstacles()["stacks"] == 1
    described, packed = _described(site, layers=["stacks"])
    assert _column(described, packed, "ids").tobytes() == b"c"
    assert described.layers[0].cells == []


def test_dropping_takes_away_and_passes_over_what_never_was(site):
    _apply(site, _put("stacks", {"a": _square(0, 0), "b": _square(3, 0)}))
    _apply(site, _drop("stacks", "a", "never"))
    assert site.obstacles()["stacks"] == 1
    assert site.publish().revision == 1


def test_the_revision_stays_while_nothing_changes(site):
    first = site.publish()
    assert site.publish() == first
    _apply(site, _put("stacks", {"a": _square(0, 0)}))
    assert site.publish().revision == first.revision + 1


CROSSING_M = np.array([[0, 0], [2, 2], [2, 0], [0, 2]]) + ORIGIN_M
LINE_M = _square(0, 0)[:2]
HERE_M, FAR_M = ORIGIN_M, (6000.0, 8000.0)
ONES, THREES = np.ones((2, 2), np.uint8), np.full((2, 2), 3, np.uint8)
OUTLINES = SETTINGS["layers"]["own"]


@pytest.mark.parametrize(
    ("change", "code", "facts"),
    [
        (_put("stacks", {"x": CROSSING_M}), "bad_geometry", {"problem": "crossing_polygon"}),
        (_put("stacks", {"x": LINE_M}), "bad_geometry", {"problem": "too_few_vertices", "id": "x"}),
        (_put("stacks", None, {"x": (*HERE_M, -1.0)}), "bad_geometry", {"problem": "bad_radius"}),
        (_put("stacks", {"x": _square(300, 0)}), "outside_limits", {"id": "x"}),
        (_patch("lidar", FAR_M, ONES), "outside_limits", {}),
        (_patch("lidar", HERE_M, THREES), "bad_geometry", {"problem": "bad_cells"}),
        (_patch("own", HERE_M, ONES, OUTLINES), "conflict", {"problem": "outlines_only"}),
        (_put("own", {"x": _square(0, 0)}), "conflict", {"problem": "layer_mismatch"}),
    ],
)
def test_a_change_that_is_wrong_is_refused_whole_and_says_why(site, change, code, facts):
    before = site.publish()
    if change["what"] == "put" and change["layer"] == "stacks":
        # Something good in front of the bad: it must not get in either.
        good = obstacles.shapes({"good": _square(0, 0)}, None)
        message = messages.Put(**change["message"])
        found = obstacles.unpack_shapes(message, change["packed"])
        mixed = obstacles.Shapes({**good.polygons, **found.polygons}, found.discs)
        fields, packed = obstacles.pack_shapes(mixed)
        change = {**change, "message": messages.Put(layer="stacks", **fields).model_dump()}
        change["packed"] = packed
    with pytest.raises(Refused) as caught:
        _apply(site, change)
    assert caught.value.code == code
    assert facts.items() <= caught.value.facts.items()
    assert caught.value.facts["layer"] == change["layer"]
    assert site.obstacles().get("stacks", 0) == 0
    assert site.publish().revision - before.revision <= 1  # the layer itself may be new


def test_numbers_that_contradict_each_other_are_refused(site):
    change = _put("stacks", {"a": _square(0, 0)})
    change["packed"] = change["packed"].replace(b"a", b"\n", 1)
    with pytest.raises(Refused) as caught:
        _apply(site, change)
    assert caught.value.code == "bad_message"


def test_a_site_is_taken_up_again_from_its_last_snapshot(ground, site):
    memory, writable, _ = ground
    _apply(site, _put("stacks", {"a": _square(0, 0)}, {"d": (5003.0, 8000.0, 0.5)}))
    _apply(site, _patch("lidar", (5010.0, 8010.0), np.ones((4, 4), np.uint8)))
    published = site.publish()
    before = _described(site)
    again = trade.recover_site(
        SETTINGS, writable, memory.grow, published.handle, [published.handle]
    )
    described, packed = _described(again)
    assert packed == before[1]
    assert described.layers == before[0].layers
    assert again.obstacles() == {"own": 0, "stacks": 2, "lidar": 0}
    _apply(again, _drop("stacks", "a"))
    assert again.publish().revision > published.revision


# -- jobs --------------------------------------------------------------------------------------


def _job(start, goal, **more):
    return {
        "job": 1,
        "start": [ORIGIN_M[0] + start[0], ORIGIN_M[1] + start[1], start[2]],
        "goal": [ORIGIN_M[0] + goal[0], ORIGIN_M[1] + goal[1], goal[2]],
        "seed": 7,
        "method": "auto",
        "left_out": [],
        "clearance_m": None,
        "start_speed_mps": 0.0,
        "start_curvature_per_m": 0.0,
        "gap_wanted": 0.0,
        **more,
    }


def _plan(ground, site, job, budget_s=0.05, better=None):
    snapshot = trade.attach(ground[2], site.publish().handle)
    end_s = time.monotonic() + budget_s
    found = trade.plan(
        snapshot,
        trade.vehicle(TUG),
        job,
        lambda: end_s - time.monotonic(),
        better or (lambda _: None),
    )
    return found, snapshot


@pytest.fixture(scope="module", autouse=True)
def warmed():
    trade.warm(lambda done, total, name: None)


def test_a_route_leaves_ready_to_travel(ground, site):
    _apply(site, _put("stacks", {"a": _square(8, 0)}))
    betters = []
    found, _ = _plan(ground, site, _job((0, 0, 0), (18, 0, 0)), better=betters.append)
    assert found["kind"] == "route"
    assert betters
    assert found["cost"] <= betters[0]["cost"]
    outcome = frames.decode_outcome(found["body"], found["packed"])
    assert outcome.kind == "route"
    assert outcome.cost == found["cost"] >= outcome.bound > 0
    assert outcome.seed == 7
    rows = {name: read(column, found["packed"]) for name, column in outcome.columns.items()}
    assert list(rows) == [
        "t_s",
        "x_m",
        "y_m",
        "heading_rad",
        "curvature_per_m",
        "speed_mps",
        "gear",
    ]
    assert (rows["x_m"][0], rows["y_m"][0]) == pytest.approx(ORIGIN_M, abs=1e-6)
    assert rows["x_m"][-1] == pytest.approx(ORIGIN_M[0] + 18, abs=1e-3)
    assert outcome.duration_s == rows["t_s"][-1]
    assert outcome.legs[-1].last == len(rows["t_s"]) - 1
    # It travels through a channel as it is.
    assert msgpack.unpackb(msgpack.packb(found)) == found


def test_a_blocked_goal_says_by_what(ground, site):
    _apply(site, _put("stacks", {"a": _square(18, 0)}))
    found, _ = _plan(ground, site, _job((0, 0, 0), (18, 0, 0)))
    assert (found["kind"], found["path"], found["packed"]) == ("goal_blocked", None, b"")
    outcome = frames.decode_outcome(found["body"], b"")
    assert (outcome.blocked_by[0].layer, outcome.blocked_by[0].id) == ("stacks", "a")
    assert outcome.blocked_by[0].depth_m > 0
    assert outcome.cost is None
    assert outcome.gap == 1.0


@pytest.mark.parametrize("more", [{"method": "magic"}, {"start_speed_mps": float("inf")}])
def test_a_senseless_request_is_refused_with_the_reason(ground, site, more):
    with pytest.raises(Refused) as caught:
        _plan(ground, site, _job((0, 0, 0), (18, 0, 0), **more))
    assert caught.value.code == "bad_value"
    assert str(next(iter(more.values()))) in str(caught.value)


def test_a_layer_that_may_not_be_left_out_is_refused(ground, site):
    _apply(site, _put("stacks", {"a": _square(8, 0)}))
    with pytest.raises(Refused) as caught:
        _plan(ground, site, _job((0, 0, 0), (18, 0, 0), left_out=["stacks"]))
    assert caught.value.code == "bad_value"


def test_a_route_stands_until_something_is_put_in_its_way(ground, site):
    job = _job((0, 0, 0), (18, 0, 0))
    found, snapshot = _plan(ground, site, job)
    tug = trade.vehicle(TUG)
    assert trade.check(snapshot, tug, job, found) == ""
    _apply(site, _put("stacks", {"a": _square(9, 0)}))
    newer = trade.attach(ground[2], site.publish().handle)
    assert "polygon" in trade.check(newer, tug, job, found)
    assert trade.check(snapshot, tug, job, found) == ""


def test_its_own_outline_is_left_out_when_a_route_is_checked_again(ground, site):
    _apply(site, _put("own", {"me": _square(0, 0)}, settings=SETTINGS["layers"]["own"]))
    job = _job((0, 0, 0), (18, 0, 0), left_out=["own"])
    found, snapshot = _plan(ground, site, job)
    assert found["kind"] == "route"
    assert trade.check(snapshot, trade.vehicle(TUG), job, found) == ""
    assert trade.check(snapshot, trade.vehicle(TUG), {**job, "left_out": []}, found) != ""


def test_a_definition_that_is_no_vehicle_is_refused():
    with pytest.raises(Refused, match="turn_radius_m_min"):
        trade.vehicle({**TUG, "turn_radius_m_min": -1.0})


def test_readers_cannot_write_to_the_site(ground, site):
    site.publish()
    readable: mmap.mmap = ground[2]
    with pytest.raises(TypeError):
        readable[0:1] = b"x"


def test_the_rehearsal_finds_a_route_and_so_comes_past_everything():
    assert trade.rehearse()["kind"] == "route"
