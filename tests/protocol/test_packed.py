"""Columns of bytes: what goes in comes out, and what does not fit is refused untouched."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from byway import limits
from byway.errors import BadMessage, BadValue, OutsideLimits
from byway.packed import DTYPES, Column, check_columns, check_coordinates, pack, read

arrays = st.sampled_from(sorted(DTYPES)).flatmap(
    lambda dtype: hnp.arrays(
        np.dtype(dtype), hnp.array_shapes(min_dims=1, max_dims=2, min_side=0, max_side=5)
    )
)


@settings(max_examples=60, deadline=None)
@given(st.dictionaries(st.text("abc", min_size=1, max_size=3), arrays, max_size=4))
def test_what_goes_in_comes_out(found: dict[str, np.ndarray]) -> None:
    columns, packed = pack(found)
    check_columns(columns, packed)
    assert len(packed) % 8 == 0
    for name, array in found.items():
        assert columns[name].offset % 8 == 0
        got = read(columns[name], packed)
        assert got.dtype == array.dtype
        assert got.tobytes() == array.tobytes()
        assert got.shape == array.shape
        assert not got.flags.writeable


@settings(max_examples=60, deadline=None)
@given(st.dictionaries(st.text("abc", min_size=1, max_size=3), arrays, max_size=4), st.data())
def test_a_cut_or_longer_frame_is_refused(
    found: dict[str, np.ndarray], data: st.DataObject
) -> None:
    columns, packed = pack(found)
    with pytest.raises(BadMessage):
        check_columns(columns, packed + b"\0")
    if packed:
        cut = data.draw(st.integers(0, len(packed) - 1))
        with pytest.raises(BadMessage):
            check_columns(columns, packed[:cut])


def test_other_byte_orders_and_layouts_travel_the_same_way() -> None:
    table = np.arange(6, dtype="<f8").reshape(2, 3)
    plain = pack({"a": table})
    assert pack({"a": table.astype(">f8")}) == plain
    assert pack({"a": np.asfortranarray(table)}) == plain


@pytest.mark.parametrize(
    "array", [np.zeros(3, complex), np.zeros(3, "u2"), np.zeros((1, 1, 1)), np.float64(1.0)]
)
def test_other_formats_do_not_travel(array: np.ndarray) -> None:
    with pytest.raises(BadValue, match="column a is"):
        pack({"a": np.asarray(array)})


def column(dtype: str = "<f8", shape: tuple[int, ...] = (2,), offset: int = 0) -> Column:
    return Column(dtype=dtype, shape=shape, offset=offset)


@pytest.mark.parametrize(
    ("columns", "problem"),
    [
        ({"a": column("<c8")}, "dtype"),
        ({"a": column(offset=8)}, "begins at byte 8 and must begin at 0"),
        ({"a": column(shape=(3,))}, "ends at byte 24 of a frame of 16"),
        ({"a": column(shape=(2**62, 2**62))}, "ends at byte"),
        ({"a": column(shape=(1,))}, "has 16 bytes, its columns take 8"),
        ({}, "has 16 bytes, its columns take 0"),
    ],
)
def test_columns_that_do_not_fit_are_refused(columns: dict[str, Column], problem: str) -> None:
    with pytest.raises(BadMessage, match=problem):
        check_columns(columns, bytes(16))


@pytest.mark.parametrize(
    ("expected", "problem"),
    [
        ({"b": ("<f8", (2,))}, "must be b, not a"),
        ({}, "must be none, not a"),
        ({"a": ("<i8", (2,))}, r"is <f8 \[2\] and must be <i8 \[2\]"),
        ({"a": ("<f8", (3,))}, r"must be <f8 \[3\]"),
        ({"a": ("<f8", (None, 2))}, r"must be <f8 \['any', 2\]"),
    ],
)
def test_other_columns_than_expected_are_refused(
    expected: dict[str, tuple[str, tuple[int | None, ...]]], problem: str
) -> None:
    with pytest.raises(BadMessage, match=problem):
        check_columns({"a": column()}, bytes(16), expected)


def test_columns_as_expected_pass() -> None:
    check_columns({"a": column()}, bytes(16), {"a": ("<f8", (None,))})


@pytest.mark.parametrize(
    ("value_m", "error"),
    [
        (np.nan, BadValue),
        (np.inf, BadValue),
        (-2.0 * limits.coordinate_m_max, OutsideLimits),
    ],
)
def test_coordinates_that_cannot_be_meant_are_refused(
    value_m: float, error: type[Exception]
) -> None:
    with pytest.raises(error, match="vertices_m"):
        check_coordinates("vertices_m", np.array([[0.0, value_m]]))


def test_good_coordinates_pass() -> None:
    check_coordinates("vertices_m", np.empty((0, 2)))
    check_coordinates("vertices_m", np.array([[limits.coordinate_m_max, -1.0]]))
