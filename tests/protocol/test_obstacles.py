"""Obstacles as columns: what callers give, what travels, what the surveyor gets."""

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from byway import limits, messages, obstacles
from byway.errors import BadGeometry, BadMessage, BadValue, OutsideLimits, SenderFault, TooLarge
from byway.packed import pack

names = st.text("ab1", min_size=1, max_size=4)
metres = st.floats(-1e6, 1e6)
points = st.lists(st.tuples(metres, metres), min_size=1, max_size=6)
discs = st.tuples(metres, metres, metres)


@settings(max_examples=50, deadline=None)
@given(st.dictionaries(names, st.one_of(points, discs), max_size=5))
def test_what_goes_in_comes_out(found: dict[str, list[tuple[float, float]] | tuple]) -> None:
    polygons = {name: each for name, each in found.items() if isinstance(each, list)}
    circles = {name: each for name, each in found.items() if isinstance(each, tuple)}
    fields, packed = obstacles.pack_shapes(obstacles.shapes(polygons, circles))
    message = messages.Put(layer="a", **fields)
    obstacles.check(message, packed)
    got = obstacles.unpack_shapes(message, packed)
    assert {name: [tuple(p) for p in ring.tolist()] for name, ring in got.polygons.items()} == (
        polygons
    )
    assert got.discs == circles


boxes = st.tuples(metres, metres, st.floats(-7, 7), st.floats(0.1, 9), st.floats(0.1, 9))


@settings(max_examples=50, deadline=None)
@given(st.lists(st.lists(points, min_size=1, max_size=3), max_size=4), st.lists(boxes, max_size=3))
def test_holes_and_boxes_go_in_and_come_out(
    found: list[list[list[tuple[float, float]]]], found_boxes: list[tuple]
) -> None:
    polygons = {
        f"p{number}": {"outline": rings[0], "holes": rings[1:]}
        for number, rings in enumerate(found)
    }
    told = {f"b{number}": box for number, box in enumerate(found_boxes)}
    fields, packed = obstacles.pack_shapes(obstacles.shapes(polygons, {"d": (0, 0, 1)}, told))
    assert ("rings" in fields["columns"]) == any(len(rings) > 1 for rings in found)
    assert ("boxes_m" in fields["columns"]) == bool(told)
    message = messages.Put(layer="a", **fields)
    obstacles.check(message, packed)
    got = obstacles.unpack_shapes(message, packed)
    assert len(got) == len(polygons) + 1 + len(told)
    assert got.boxes == told
    for name, polygon in polygons.items():
        rings = [got.polygons[name], *got.holes.get(name, ())]
        assert [[tuple(p) for p in ring.tolist()] for ring in rings] == [
            polygon["outline"],
            *polygon["holes"],
        ]


@pytest.mark.parametrize(
    ("shape", "error"),
    [
        ({"polygons": {"a": {"holes": []}}}, BadGeometry),
        ({"polygons": {"a": {"outline": [(0, 0)], "hole": []}}}, BadGeometry),
        ({"polygons": {"a": {"outline": [(0, 0)], "holes": [[1, 2]]}}}, BadGeometry),
        ({"boxes": {"a": (0, 0, 0, 1)}}, BadGeometry),
        ({"boxes": {"a": (0, 0, 0, 1, 0)}}, BadGeometry),
        ({"boxes": {"a": (0, 0, 0, -1, 1)}}, BadGeometry),
        ({"boxes": {"a": (0, 0, 2e3, 1, 1)}}, BadValue),
        ({"boxes": {"a": (0, 0, 0, 1, float("nan"))}}, BadValue),
        ({"boxes": {"a": (0, 0, 0, 1, 1)}, "discs": {"a": (0, 0, 1)}}, BadValue),
    ],
)
def test_holes_and_boxes_that_cannot_be_meant(
    shape: dict[str, Any], error: type[SenderFault]
) -> None:
    with pytest.raises(error) as caught:
        obstacles.shapes(shape.get("polygons"), shape.get("discs"), shape.get("boxes"))
    assert caught.value.facts["id" if "id" in caught.value.facts else "field"] == "a"


@pytest.mark.parametrize(
    ("changes", "error"),
    [
        ({"rings": np.array([0, 2])}, BadMessage),
        ({"rings": np.array([1, 1])}, BadMessage),
        ({"rings": np.array([0, 0])}, BadMessage),
        ({"boxes_m": np.array([(0.0, 0.0, 0.0, 1.0, np.inf)])}, BadValue),
        ({"boxes_m": np.array([(0.0, 0.0, 0.0, 1.0, -1.0)])}, BadGeometry),
    ],
)
def test_columns_of_holes_and_boxes_that_contradict_each_other(
    changes: dict[str, np.ndarray], error: type[SenderFault]
) -> None:
    box = {"boxes_m": np.array([(0.0, 0.0, 0.0, 1.0, 1.0)])}
    message, packed = put_of(**{**box, **changes}, ids=obstacles.pack_ids(["tri", "disc", "box"]))
    message = message.model_copy(update={"boxes": 1})
    obstacles.check(message, packed)
    with pytest.raises(error):
        obstacles.unpack_shapes(message, packed)


def test_a_polygon_without_any_ring_is_refused() -> None:
    message, packed = put_of(
        rings=np.array([0, 0, 1]), ids=obstacles.pack_ids(["none", "tri", "disc"])
    )
    with pytest.raises(BadMessage, match="rings must rise"):
        obstacles.unpack_shapes(message.model_copy(update={"polygons": 2}), packed)


def test_nothing_is_something_too() -> None:
    fields, packed = obstacles.pack_shapes(obstacles.shapes(None, None))
    got = obstacles.unpack_shapes(messages.ReplaceLayer(layer="a", **fields), packed)
    assert (got.polygons, got.discs, got.holes, got.boxes) == ({}, {}, {}, {})


def test_callers_arrays_are_copied() -> None:
    ring = np.array([(0.0, 0.0), (1.0, 0.0), (0.0, 1.0)])
    found = obstacles.shapes({"a": ring}, None)
    ring[:] = 9.0
    assert found.polygons["a"].max() == 1.0


def put_of(**changes: np.ndarray) -> tuple[messages.Put, bytes]:
    """A put of one triangle and one disc, but for the changes."""
    columns, packed = pack(
        {
            "ids": obstacles.pack_ids(["tri", "disc"]),
            "starts": np.array([0, 3]),
            "vertices_m": np.array([(0.0, 0.0), (1.0, 0.0), (0.0, 1.0)]),
            "discs_m": np.array([(0.0, 0.0, 1.0)]),
            **changes,
        }
    )
    return messages.Put(layer="a", polygons=1, discs=1, columns=columns), packed


@pytest.mark.parametrize(
    ("changes", "error"),
    [
        ({"ids": obstacles.pack_ids(["tri"])}, BadMessage),
        ({"ids": obstacles.pack_ids([])}, BadMessage),
        ({"ids": obstacles.pack_ids(["tri", "tri"])}, BadValue),
        ({"ids": obstacles.pack_ids(["tri", "d isc"])}, BadValue),
        ({"ids": np.frombuffer(b"tri\n\xff", np.uint8)}, BadValue),
        ({"ids": np.frombuffer(b"tri\ndisc\n", np.uint8)}, BadMessage),
        ({"starts": np.array([0, 2])}, BadMessage),
        ({"starts": np.array([1, 3])}, BadMessage),
        ({"vertices_m": np.full((3, 2), np.nan)}, BadValue),
        ({"discs_m": np.array([(0.0, 0.0, np.inf)])}, BadValue),
        ({"discs_m": np.array([(0.0, 1e9, 1.0)])}, OutsideLimits),
    ],
)
def test_columns_that_contradict_each_other_are_refused(
    changes: dict[str, np.ndarray], error: type[SenderFault]
) -> None:
    message, packed = put_of(**changes)
    obstacles.check(message, packed)  # the door lets them pass: it touches no column
    with pytest.raises(error):
        obstacles.unpack_shapes(message, packed)


def test_starts_that_fall_and_wrap_are_refused() -> None:
    """A difference of 64-bit numbers can wrap around and look like a rise."""
    starts = np.array([0, 2**63 - 1, -5, 3])
    message, packed = put_of(starts=starts, ids=obstacles.pack_ids("abcd"))
    message = message.model_copy(update={"polygons": 3})
    with pytest.raises(BadMessage, match="rise"):
        obstacles.unpack_shapes(message, packed)


@pytest.mark.parametrize(
    "changes",
    [
        {"starts": np.array([0, 1, 3])},
        {"starts": np.array([0, 3], np.int32)},
        {"vertices_m": np.zeros((3, 3))},
        {"discs_m": np.zeros((2, 3))},
        {"extra": np.zeros(1)},
        {"boxes_m": np.zeros((1, 5))},
        {"rings": np.zeros(1, np.int64)},
    ],
)
def test_the_door_refuses_other_sizes(changes: dict[str, np.ndarray]) -> None:
    message, packed = put_of(**changes)
    with pytest.raises(BadMessage):
        obstacles.check(message, packed)


def test_the_door_refuses_too_many() -> None:
    message, packed = put_of()
    with pytest.raises(TooLarge):
        obstacles.check(message.model_copy(update={"discs": limits.obstacles_max}), packed)


@pytest.mark.parametrize("name", ["", "a b", "-a", "a\n", "ä", "a" * 65, 7, None])
def test_what_is_no_id_is_refused(name: object) -> None:
    assert not obstacles.is_id(name)
    with pytest.raises(BadValue, match="is no id"):
        obstacles.check_id(name)


@pytest.mark.parametrize("name", ["a", "7", "unit.tug-3", "row/4#2:b_c", "a" * 64])
def test_what_is_an_id(name: str) -> None:
    assert obstacles.check_id(name) == name
