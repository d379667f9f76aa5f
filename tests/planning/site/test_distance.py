"""Distances on a lattice against scipy."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.ndimage import binary_dilation, distance_transform_edt, maximum_filter

from byway_planning.site.distance import corners_kernel, distances_kernel, grown_kernel


def read_only(array: np.ndarray) -> np.ndarray:
    array.flags.writeable = False
    return array


@settings(max_examples=60, deadline=None)
@given(
    st.integers(0, 2**32 - 1),
    st.integers(1, 40),
    st.integers(1, 40),
    st.integers(1, 40),
    st.sampled_from([0.0, 0.0005, 0.01, 0.1, 0.6, 1.0]),
)
def test_distances_are_exact_and_cut_off(seed, rows, columns, reach, density):
    rng = np.random.default_rng(seed)
    mask = (rng.random((rows + 2 * reach, columns + 2 * reach)) < density).astype(np.uint8)
    out = np.full((rows, columns), -1.0, np.float32)
    distances_kernel(read_only(mask), reach, out)
    wanted = np.full(mask.shape, float(reach))
    if mask.any():
        wanted = np.minimum(distance_transform_edt(mask == 0), reach)
    inner = wanted[reach : reach + rows, reach : reach + columns]
    # The root of a whole number, rounded once.
    assert (out == inner.astype(np.float32)).all()


@pytest.mark.parametrize("density", [0.0, 0.05, 0.5, 1.0])
def test_corners_and_neighbours_of_marked_cells_are_marked(density):
    rng = np.random.default_rng(4)
    cells = read_only((rng.random((23, 31)) < density).astype(np.uint8))
    corners = np.full((22, 30), 7, np.uint8)
    corners_kernel(cells, corners)
    # A point between four cells; the filter looks at a cell and those before it.
    assert (corners == maximum_filter(cells, size=2)[1:, 1:]).all()
    grown = np.full((21, 29), 7, np.uint8)
    grown_kernel(cells, grown)
    assert (grown == binary_dilation(cells, np.ones((3, 3)))[1:-1, 1:-1]).all()
