"""Scans as columns: what callers give, what travels, what the surveyor gets."""

from typing import Any

import numpy as np
import pytest

from byway import limits, messages, scans
from byway.errors import BadGeometry, BadMessage, BadValue, SenderFault, TooLarge
from byway.packed import pack

BEARINGS, RANGES = [-0.5, 0.0, 0.5], [3.0, np.inf, 0.1]


def scan_of(bearings: Any = BEARINGS, ranges: Any = RANGES, **fields: Any) -> Any:
    columns, packed = scans.pack_scan(bearings, ranges)
    told = {"layer": "a", "origin": (0.0, 0.0, 0.0), "range_m_max": 25.0, "columns": columns}
    return messages.Scan(**{**told, **fields}), packed


@pytest.mark.parametrize("kind", [np.float32, np.float64])
def test_what_goes_in_comes_out(kind: Any) -> None:
    """A sensor's float32 is sent as it is: half the bytes."""
    message, packed = scan_of(np.array(BEARINGS, kind), np.array(RANGES, kind))
    scans.check(message, packed)
    bearings, ranges = scans.unpack_scan(message, packed)
    assert bearings.dtype == ranges.dtype == kind
    assert bearings.tolist() == np.array(BEARINGS, kind).tolist()
    assert ranges.tolist() == np.array(RANGES, kind).tolist()


def test_whole_numbers_and_lists_become_float64() -> None:
    message, packed = scan_of([0, 1], np.array([3, 4], np.int32))
    assert [array.dtype for array in scans.unpack_scan(message, packed)] == [np.float64] * 2


def test_a_scan_whose_beams_all_failed_says_nothing() -> None:
    message, packed = scan_of([], [])
    scans.check(message, packed)
    assert scans.unpack_scan(message, packed)[0].size == 0


@pytest.mark.parametrize(
    ("bearings", "ranges", "error"),
    [
        (BEARINGS, [1.0, 2.0], BadGeometry),
        (BEARINGS, [1.0, np.nan, 1.0], BadGeometry),
        (BEARINGS, [1.0, -0.1, 1.0], BadGeometry),
        (BEARINGS, [1.0, -np.inf, 1.0], BadGeometry),
        ([0.0, np.inf, 0.0], RANGES, BadGeometry),
        ([0.0, 2e3, 0.0], RANGES, BadGeometry),
        ([BEARINGS], [RANGES], BadGeometry),
        ("abc", RANGES, BadGeometry),
        (BEARINGS, [None, "x", 1.0], BadGeometry),
        (np.zeros(limits.beams_max + 1), np.zeros(limits.beams_max + 1), TooLarge),
    ],
)
def test_beams_that_cannot_be_meant(bearings: Any, ranges: Any, error: type[SenderFault]) -> None:
    with pytest.raises(error):
        scans.pack_scan(bearings, ranges)


def test_the_beam_at_fault_is_named() -> None:
    with pytest.raises(BadGeometry, match=r"beam 2 .* leave out") as caught:
        scans.pack_scan(BEARINGS, [1.0, 1.0, np.nan])
    assert caught.value.facts["beam"] == 2


def test_the_surveyor_looks_at_every_beam() -> None:
    """The door has touched none."""
    columns, packed = pack({"bearings_rad": np.zeros(2), "ranges_m": np.array([1.0, np.nan])})
    message, _ = scan_of(columns=columns)
    scans.check(message, packed)
    with pytest.raises(BadGeometry, match="beam 1"):
        scans.unpack_scan(message, packed)


@pytest.mark.parametrize(
    ("arrays", "error"),
    [
        ({"bearings_rad": np.zeros(2), "ranges_m": np.zeros(3)}, BadMessage),
        ({"bearings_rad": np.zeros((2, 1)), "ranges_m": np.zeros((2, 1))}, BadMessage),
        ({"bearings_rad": np.zeros(2, np.int32), "ranges_m": np.zeros(2)}, BadMessage),
        ({"bearings_rad": np.zeros(2)}, BadMessage),
        ({"ranges_m": np.zeros(2)}, BadMessage),
        ({"ranges_m": np.zeros(limits.beams_max + 1)}, TooLarge),
    ],
)
def test_the_door_refuses_other_sizes(arrays: dict[str, Any], error: type[SenderFault]) -> None:
    columns, packed = pack(arrays)
    message, _ = scan_of(columns=columns)
    with pytest.raises(error):
        scans.check(message, packed)


def test_the_door_refuses_ranges_that_leave_nothing() -> None:
    message, packed = scan_of(range_m_min=25.0)
    with pytest.raises(BadValue, match="below range_m_max"):
        scans.check(message, packed)
