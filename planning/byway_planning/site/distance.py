"""
Exact Euclidean distances on a lattice, cut off at a reach.

Two passes over integers after Meijster, Roerdink and Hesselink (A General Algorithm for
Computing Distance Transforms in Linear Time, 2000): distances along columns, then the lower
envelope of parabolas along rows.
"""

import math

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel

Mask = npt.NDArray[np.uint8]
Floats4 = npt.NDArray[np.float32]


@kernel("ru1[:, ::1]", "i8", "f4[:, ::1]", allocates=True)
def distances_kernel(mask: Mask, reach: int, out: Floats4) -> None:
    """
    Distance of each lattice point to the nearest marked one, in lattice steps.

    Args:
        mask: Shape (rows, columns), 1 where marked.
        reach: Distances from `reach` on are given as `reach`.
        out: Same shape as mask, filled.
    """
    rows, columns = mask.shape
    far = reach + 1
    along = np.empty((rows, columns), np.int32)
    for c in range(columns):
        along[0, c] = 0 if mask[0, c] else far
    for r in range(1, rows):
        for c in range(columns):
            along[r, c] = 0 if mask[r, c] else min(along[r - 1, c] + 1, far)
    for r in range(rows - 2, -1, -1):
        for c in range(columns):
            if along[r + 1, c] + 1 < along[r, c]:
                along[r, c] = along[r + 1, c] + 1
    apex = np.empty(columns, np.int32)  # columns whose parabolas form the envelope
    since = np.empty(columns, np.int32)  # first column where each is the lowest
    roots = np.empty(far * far + 1, np.float32)
    for i in range(far * far + 1):
        roots[i] = min(math.sqrt(i), reach)
    for r in range(rows):
        top = 0
        apex[0], since[0] = 0, 0
        for u in range(1, columns):
            gu = along[r, u] * along[r, u]
            while top >= 0:
                t, s = since[top], apex[top]
                gs = along[r, s]
                if (t - s) * (t - s) + gs * gs > (t - u) * (t - u) + gu:
                    top -= 1
                else:
                    break
            if top < 0:
                top = 0
                apex[0], since[0] = u, 0
            else:
                s = apex[top]
                gs = along[r, s]
                cut = 1 + (u * u - s * s + gu - gs * gs) // (2 * (u - s))
                if cut < columns:
                    top += 1
                    apex[top], since[top] = u, cut
        for u in range(columns - 1, -1, -1):
            s = apex[top]
            g = along[r, s]
            square = (u - s) * (u - s) + g * g
            out[r, u] = roots[square] if square <= far * far else reach
            if u == since[top]:
                top -= 1


@kernel("ru1[:, ::1]", "u1[:, ::1]")
def corners_kernel(cells: Mask, out: Mask) -> None:
    """Mark the lattice points (rows + 1, columns + 1) that are a corner of an occupied cell."""
    rows, columns = cells.shape
    out[:, :] = 0
    for r in range(rows):
        for c in range(columns):
            if cells[r, c]:
                out[r, c] = out[r, c + 1] = out[r + 1, c] = out[r + 1, c + 1] = 1
