"""
Exact Euclidean distances on a lattice, cut off at a reach.

Whole numbers in two passes: the distance along each column; then, along each row, the least of
offset^2 + column^2 over all offsets below the reach. Distances are short here, so trying every
offset, many places at a time in the processor's vectors, and stopping at the largest distance
found so far, beats the linear-time envelope of parabolas (Meijster, Roerdink and Hesselink, A
General Algorithm for Computing Distance Transforms in Linear Time, 2000): measured on 192 x 192
points with a reach of 32, 1.6 against 14 ns a point where a twentieth is marked, 3.8 against
7.6 ns with a dozen marks in all.
"""

import math
from typing import Any

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel

Mask = npt.NDArray[np.uint8]
Floats4 = npt.NDArray[np.float32]
Counts4 = npt.NDArray[np.int32]


@kernel("ru1[:, ::1]", "i8", "f4[:, ::1]", allocates=True)
def distances_kernel(mask: Mask, reach: int, out: Floats4) -> None:
    """
    Distance of each lattice point to the nearest marked one, in lattice steps.

    Args:
        mask: Shape (rows + 2 * reach, columns + 2 * reach), 1 where marked: the lattice and what
            lies within reach around it.
        reach: Distances from `reach` on are given as `reach`.
        out: Shape (rows, columns), filled.
    """
    columns = out.shape[1]
    along = np.empty((out.shape[0], mask.shape[1]), np.int32)
    column = np.empty(mask.shape[1], np.int32)
    _along_columns(mask, np.int32(reach), column, along)
    _along_rows(along, reach, np.empty(columns, np.int32), out)


# The casts to int32 below are for speed: numba widens sums of whole numbers to 64 bits, and such
# loops do not run in vectors.


@kernel()
def _along_columns(mask: Mask, far: Any, below: Counts4, out: Counts4) -> None:
    """
    Distance to the nearest marked point of the same column, cut off at `far`.

    Args:
        below: Scratch, (columns of the mask,).
    """
    rows, columns = out.shape
    zero = np.int32(0)
    below[:] = far
    for r in range(rows + far):  # upwards: the nearest below or here
        marks = mask[r]
        for c in range(columns):
            step = np.int32(below[c] + 1)
            step = step if step < far else far
            below[c] = zero if marks[c] else step
        if r >= far:
            here = out[r - far]
            for c in range(columns):
                here[c] = below[c]
    below[:] = far
    for r in range(rows + 2 * far - 1, far - 1, -1):  # downwards
        marks = mask[r]
        for c in range(columns):
            step = np.int32(below[c] + 1)
            step = step if step < far else far
            below[c] = zero if marks[c] else step
        if r < rows + far:
            here = out[r - far]
            for c in range(columns):
                here[c] = below[c] if below[c] < here[c] else here[c]


@kernel()
def _along_rows(along: Counts4, reach: int, best: Counts4, out: Floats4) -> None:
    """
    Turn distances along columns into distances; squares them in place.

    Args:
        best: Scratch, (columns of out,).
    """
    rows, columns = out.shape
    for r in range(rows):
        squares, row = along[r], out[r]
        least: Any = np.int32(reach)
        for u in range(len(squares)):
            least = squares[u] if squares[u] < least else least
            squares[u] = np.int32(squares[u] * squares[u])
        for u in range(columns):
            best[u] = squares[reach + u]
        # A row without anything in reach has nothing to try.
        k = 1 if least < reach else reach
        largest: Any = np.int32(reach * reach)
        while k < reach and k * k < largest:
            left = squares[reach - k : reach - k + columns]
            right = squares[reach + k : reach + k + columns]
            add = np.int32(k * k)
            for u in range(columns):
                square = np.int32((left[u] if left[u] < right[u] else right[u]) + add)
                best[u] = square if square < best[u] else best[u]
            k += 1
            if k % 4 == 0:
                largest = np.int32(0)
                for u in range(columns):
                    largest = best[u] if best[u] > largest else largest
        for u in range(columns):
            row[u] = math.sqrt(np.float32(best[u]))


@kernel("ru1[:, ::1]", "u1[:, ::1]")
def corners_kernel(cells: Mask, out: Mask) -> None:
    """Mark the points between cells, (rows - 1, columns - 1), that touch an occupied one."""
    rows, columns = out.shape
    for r in range(rows):
        low, high, here = cells[r], cells[r + 1], out[r]
        for c in range(columns):
            here[c] = low[c] | low[c + 1] | high[c] | high[c + 1]


@kernel("ru1[:, ::1]", "u1[:, ::1]")
def grown_kernel(cells: Mask, out: Mask) -> None:
    """Mark the inner cells, (rows - 2, columns - 2), that are occupied or touch an occupied one."""
    rows, columns = out.shape
    for r in range(rows):
        low, middle, high, here = cells[r], cells[r + 1], cells[r + 2], out[r]
        for c in range(columns):
            column = low[c + 1] | middle[c + 1] | high[c + 1]
            left, right = low[c] | middle[c] | high[c], low[c + 2] | middle[c + 2] | high[c + 2]
            here[c] = left | column | right
