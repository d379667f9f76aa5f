"""Obstacles as columns: what callers give, what travels, what the surveyor gets."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from byway import limits, messages, obstacles
from byway.errors import BadMessage, BadValue, OutsideLimits, SenderFault, TooLarge
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


def test_nothing_is_something_too() -> None:
    fields, packed = obstacles.pack_shapes(obstacles.shapes(None, None))
    got = obstacles.unpack_shapes(messages.ReplaceLayer(layer="a", **fields), packed)
    assert (got.polygons, got.discs) == ({}, {})


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
