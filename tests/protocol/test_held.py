"""What is remembered of a layer gives the same layer again."""

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from byway import limits, messages, obstacles, strokes
from byway.held import HeldLayer
from byway.packed import pack

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
