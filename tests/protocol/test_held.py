"""What is remembered of a layer gives the same layer again."""

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from byway import limits, messages, obstacles, scans, strokes, tracks
from byway.held import HeldLayer
from byway.packed import pack
from byway.tracks import Track

TRIANGLE = [(0.0, 0.0), (1.0, 0.0), (0.0, 1.0)]


def obstacles_of(
    kind: type[messages.Put] | type[messages.ReplaceLayer],
    polygons: dict[str, Any] | None = None,
    discs: dict[str, Any] | None = None,
    **fields: Any,
) -> tuple[messages.Put | messages.ReplaceLayer, bytes]:
    made, packed = obstacles.pack_shapes(obstacles.shapes(polygons, discs))
    return kind(layer="a", **made, **fields), packed


def patch(x_m: float = 0.0, rows: int = 2, columns: int = 2, cell_m: float = 0.5) -> Any:
    described, packed = pack({"cells": np.zeros((rows, columns), np.uint8)})
    message = messages.Patch(layer="a", corner_m=(x_m, 0.0), cell_m=cell_m, columns=described)
    return message, packed


def _patches(layer: HeldLayer) -> list[messages.Patch]:
    return [each.message for each in layer.strokes.patches]  # type: ignore[misc]


def restored(layer: HeldLayer, now_s: float) -> HeldLayer:
    """The layer of a daemon that has taken in all that it was sent."""
    copy = HeldLayer()
    for message, packed, made_s in layer.restoring("a", now_s):
        copy.take(message, packed, made_s, now_s)
    return copy


def contents(layer: HeldLayer, now_s: float) -> dict[str, Any]:
    """What a replan would see of it."""
    gone = {each for each, at_s in layer.expires_at_s.items() if at_s <= now_s}
    shapes = {**{n: r.tolist() for n, r in layer.shapes.polygons.items()}, **layer.shapes.discs}
    return {
        "shapes": {name: shape for name, shape in shapes.items() if name not in gone},
        "expires": {n: at_s for n, at_s in layer.expires_at_s.items() if n not in gone},
        "patches": [message.corner_m for message in _patches(layer)],
        "settings": layer.settings,
    }


ids = st.sets(st.sampled_from("abcd"), max_size=3)
expiries = st.sampled_from([None, 2.0, 5.0])
steps = st.lists(
    st.one_of(
        st.tuples(st.just("put"), ids, expiries),
        st.tuples(st.just("replace"), ids, expiries),
        st.tuples(st.just("drop"), ids, st.none()),
        st.tuples(st.just("patch"), st.integers(0, 3), st.none()),
        st.tuples(st.just("claim"), st.sampled_from([None, True, False]), st.none()),
    ),
    max_size=8,
)


@settings(max_examples=60, deadline=None)
@given(steps, st.sampled_from([0.0, 3.0]))
def test_a_layer_comes_back_as_it_was(found: list[tuple[Any, ...]], pause_s: float) -> None:
    layer, now_s = HeldLayer(), 0.0
    for what, some, expiry_s in found:
        packed = b""
        message: Any
        if what == "claim":
            message = messages.Claim(layer="a", unknown_blocks=some)
        elif what == "drop":
            message = messages.Drop(layer="a", ids=sorted(some))
        elif what == "patch":
            message, packed = patch(float(some))
        else:
            kind = messages.Put if what == "put" else messages.ReplaceLayer
            rings = {each: TRIANGLE for each in some if each < "c"}
            circles = {each: (0, 0, 1) for each in some if each >= "c"}
            message, packed = obstacles_of(kind, rings, circles, expires_in_s=expiry_s)
        layer.take(message, packed, now_s, now_s)
        now_s += 1.0
    now_s += pause_s
    assert contents(restored(layer, now_s), now_s) == contents(layer, now_s)


def test_a_replaced_layer_is_replaced_again() -> None:
    """Whatever the daemon has there now is not of this layer."""
    layer = HeldLayer()
    message = messages.ReplaceLayer(layer="a", columns=obstacles_of(messages.Put)[0].columns)
    layer.take(message, obstacles_of(messages.Put)[1], 0.0, 0.0)
    (only,) = layer.restoring("a", 0.0)
    assert isinstance(only[0], messages.ReplaceLayer)


def test_settings_stay_unless_they_are_told() -> None:
    layer = HeldLayer()
    layer.take(
        messages.Claim(layer="a", lease_s=5.0, unknown_blocks=True, outlines_only=True), b"", 0, 0
    )
    layer.take(messages.Claim(layer="a"), b"", 0.0, 0.0)
    assert layer.settings == {"lease_s": None, "unknown_blocks": True, "outlines_only": True}


def test_expired_obstacles_do_not_pile_up() -> None:
    layer = HeldLayer()
    for number in range(1000):
        message, packed = obstacles_of(messages.Put, {f"p{number}": TRIANGLE}, expires_in_s=1.5)
        layer.take(message, packed, float(number), float(number))
    assert len(layer.shapes.polygons) <= 64


def test_obstacles_that_last_longer_than_others_stay() -> None:
    layer = HeldLayer()
    names = [f"p{number}" for number in range(200)]
    message, packed = obstacles_of(messages.Put, dict.fromkeys(names, TRIANGLE), expires_in_s=100.0)
    layer.take(message, packed, 0.0, 50.0)
    assert len(layer.shapes.polygons) == 200
    assert restored(layer, 99.0).shapes.polygons.keys() == set(names)
    assert not restored(layer, 100.0).shapes.polygons


def test_a_patch_takes_the_place_of_what_it_covers() -> None:
    layer = HeldLayer()
    for each in (patch(0.0), patch(1.0), patch(0.0), patch(0.0, rows=1), patch(0.0, 8, 8)):
        layer.take(*each, 0.0, 0.0)
    assert [message.columns["cells"].shape for message in _patches(layer)] == [(8, 8)]
    assert not layer.strokes.is_incomplete


def test_too_many_or_too_large_patches_make_it_incomplete(monkeypatch: pytest.MonkeyPatch) -> None:
    layer = HeldLayer()
    for number in range(strokes.patches_max):
        layer.take(*patch(10.0 * number), 0.0, 0.0)
    assert not layer.strokes.is_incomplete
    layer.take(*patch(-10.0), 0.0, 0.0)
    assert layer.strokes.is_incomplete
    assert len(layer.strokes.patches) == strokes.patches_max
    layer.take(*obstacles_of(messages.ReplaceLayer), 0.0, 0.0)
    assert not layer.strokes.is_incomplete
    monkeypatch.setattr(strokes, "patch_bytes_max", 100)
    layer.take(*patch(0.0, 8, 8), 0.0, 0.0)
    layer.take(*patch(100.0, 8, 8), 0.0, 0.0)
    assert layer.strokes.is_incomplete
    assert [message.corner_m for message in _patches(layer)] == [(100.0, 0.0)]


@pytest.mark.parametrize(("limit", "value"), [("obstacles_max", 3), ("packed_bytes_max", 400)])
def test_what_was_put_in_pieces_is_sent_in_pieces(
    monkeypatch: pytest.MonkeyPatch, limit: str, value: int
) -> None:
    layer = HeldLayer()
    layer.take(*obstacles_of(messages.ReplaceLayer), 0.0, 0.0)
    for number in range(4):
        rings = {f"p{number}": TRIANGLE, f"q{number}": TRIANGLE}
        discs = {f"d{number}": (0, 0, 1)}
        layer.take(*obstacles_of(messages.Put, rings, discs), 0.0, 0.0)
    monkeypatch.setattr(limits, limit, value)
    changes = list(layer.restoring("a", 0.0))
    assert [message.kind for message, _, _ in changes] == ["replace_layer"] + ["put"] * (
        len(changes) - 1
    )
    assert len(changes) == 4 if limit == "obstacles_max" else len(changes) > 1
    assert all(len(packed) <= limits.packed_bytes_max for _, packed, _ in changes)
    assert contents(restored(layer, 0.0), 0.0) == contents(layer, 0.0)


# -- what is turned, what moves, what was scanned -------------------------------------------------


def turned(x_m: float, y_m: float, heading_rad: float, rows: int = 2) -> Any:
    message, packed = patch(0.0, rows)
    update = {"corner_m": (x_m, y_m), "heading_rad": heading_rad}
    return message.model_copy(update=update), packed


def scan(x_m: float, age_s: float = 0.0) -> Any:
    columns, packed = scans.pack_scan([0.0], [1.0])
    fields = {"origin": (x_m, 0.0, 0.0), "range_m_max": 5.0, "age_s": age_s}
    return messages.Scan(layer="a", columns=columns, **fields), packed


def track(*ids: str, age_s: float = 0.0, **fields: Any) -> Any:
    body = {"outline_m": TRIANGLE} if ids[0] < "c" else {"radius_m": 1.0}
    made, packed = tracks.pack_tracks({each: Track(pose=(1, 2, 0), **body) for each in ids})
    return messages.Track(layer="a", age_s=age_s, **made, **fields), packed


def sent(layer: HeldLayer, now_s: float) -> list[Any]:
    """What a daemon that has nothing is sent, but for the claim."""
    return [message for message, _, _ in layer.restoring("a", now_s)][1:]


def test_holes_and_boxes_come_back() -> None:
    layer = HeldLayer()
    polygons = {"p": {"outline": TRIANGLE, "holes": [TRIANGLE, TRIANGLE]}, "q": TRIANGLE}
    fields, packed = obstacles.pack_shapes(
        obstacles.shapes(polygons, None, {"b": (1, 2, 0.5, 4, 2), "c": (0, 0, 0, 1, 1)})
    )
    layer.take(messages.Put(layer="a", **fields), packed, 0.0, 0.0)
    layer.take(messages.Drop(layer="a", ids=["c"]), b"", 0.0, 0.0)
    again = restored(layer, 0.0).shapes
    assert again.boxes == {"b": (1, 2, 0.5, 4, 2)}
    assert [hole.tolist() for hole in again.holes["p"]] == [np.array(TRIANGLE).tolist()] * 2
    layer.take(*obstacles_of(messages.Put, {"p": TRIANGLE}), 0.0, 0.0)
    assert restored(layer, 0.0).shapes.holes == {}


def test_all_settings_come_back() -> None:
    told = {
        "lease_s": 5.0,
        "durable": True,
        "expected_period_s": 1.0,
        "when_stale": "report",
        "decay_s": 9.0,
    }
    layer = HeldLayer()
    layer.take(messages.Claim(layer="a", **told), b"", 0.0, 0.0)
    assert layer.lease_s == 5.0
    ((claim, _, _),) = layer.restoring("a", 0.0)
    assert claim == messages.Claim(layer="a", **told)


@pytest.mark.parametrize(
    ("later", "covers"),
    [
        ((0.0, 0.0, 0.0), True),
        ((0.0, 0.0, 0.7), False),
        ((1.0, 0.0, np.pi / 2), True),  # the same square, from another corner
        ((1.0, 1.0, np.pi), True),
        ((0.0, 0.0, np.pi / 2), False),
    ],
)
def test_a_turned_patch_covers_what_lies_under_it(
    later: tuple[float, float, float], covers: bool
) -> None:
    layer = HeldLayer()
    layer.take(*patch(), 0.0, 0.0)
    layer.take(*turned(*later), 0.0, 0.0)
    assert len(layer.strokes.patches) == (1 if covers else 2)


def test_a_turned_patch_is_covered_in_survey_coordinates() -> None:
    layer = HeldLayer()
    for _ in range(2):
        layer.take(*turned(500_000.0, 5_000_000.0, 0.3), 0.0, 0.0)
    assert len(layer.strokes.patches) == 1
    layer.take(*turned(500_000.0, 5_000_000.0, 0.3, rows=3), 0.0, 0.0)
    assert len(layer.strokes.patches) == 1
    assert restored(layer, 0.0).strokes.patches[0].message.heading_rad == 0.3  # type: ignore[union-attr]


def test_scans_are_sent_again_while_they_are_fresh() -> None:
    layer = HeldLayer()
    layer.take(*scan(1.0, age_s=0.5), 10.0, 10.0)
    layer.take(*patch(), 10.0, 10.0)
    layer.take(*scan(2.0), 12.0, 12.0)
    again = sent(layer, 13.0)
    assert [message.kind for message in again] == ["scan", "patch", "scan"]
    assert [message.age_s for message in again if message.kind == "scan"] == [3.5, 1.0]
    assert [message.kind for message in sent(layer, 15.0)] == ["patch", "scan"]
    assert [message.kind for message in sent(layer, 99.0)] == ["patch"]


def test_scans_are_fresh_as_long_as_the_layer_lets_them_hold() -> None:
    layer = HeldLayer()
    layer.take(messages.Claim(layer="a", decay_s=30.0), b"", 0.0, 0.0)
    layer.take(*scan(1.0), 0.0, 0.0)
    assert len(sent(layer, 29.0)) == 1
    assert sent(layer, 30.0) == []
    layer.take(messages.Claim(layer="a", decay_s=1000.0), b"", 0.0, 0.0)
    assert sent(layer, 60.0) == []  # it cannot be told


def test_the_last_scans_are_kept(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(strokes, "scans_max", 2)
    layer = HeldLayer()
    layer.take(*patch(), 0.0, 0.0)
    for number in range(4):
        layer.take(*scan(float(number)), 0.0, 0.0)
    assert [m.origin[0] for m in sent(layer, 0.0) if m.kind == "scan"] == [2.0, 3.0]
    assert not layer.strokes.is_incomplete


def test_tracks_are_sent_again_with_their_age() -> None:
    layer = HeldLayer()
    layer.take(*track("a", "b", age_s=0.5, expires_in_s=4.0), 10.0, 10.0)
    layer.take(*track("x"), 11.0, 11.0)
    first, second = sent(layer, 12.0)
    assert (first.polygons, first.age_s, first.expires_in_s) == (2, 2.5, 2.0)
    assert (second.discs, second.age_s, second.expires_in_s) == (1, 1.0, None)
    # One without an expiry of its own is worth telling as long as a daemon would hold it.
    assert [message.polygons for message in sent(layer, 13.5)] == [2]
    assert sent(layer, 14.0) == []


def test_an_id_stands_or_moves() -> None:
    layer = HeldLayer()
    layer.take(*obstacles_of(messages.Put, {"a": TRIANGLE}), 0.0, 0.0)
    layer.take(*track("a"), 0.0, 0.0)
    assert [message.kind for message in sent(layer, 0.0)] == ["track"]
    layer.take(*obstacles_of(messages.Put, {"a": TRIANGLE}), 0.0, 0.0)
    assert [message.kind for message in sent(layer, 0.0)] == ["put"]
    layer.take(*track("a"), 0.0, 0.0)
    layer.take(*obstacles_of(messages.ReplaceLayer), 0.0, 0.0)
    assert not layer.tracks


def test_tracks_of_one_moment_in_many_messages_fit_into_some(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    layer = HeldLayer()
    for name in ("a", "b", "ba"):
        layer.take(*track(name), 0.0, 0.0)
    monkeypatch.setattr(limits, "tracks_max", 2)
    assert [message.polygons for message in sent(layer, 0.0)] == [2, 1]


def test_old_tracks_do_not_pile_up() -> None:
    layer = HeldLayer()
    for number in range(1000):
        layer.take(*track(f"a{number}"), float(number), float(number))
    assert len(layer.tracks) <= 64
