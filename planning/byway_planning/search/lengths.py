"""
Lengths of unit curves in a table: the heuristic of the lattice near its target.

One table serves every turning radius by scaling. Rounded to the nearest entry it may be off by
a tenth of a radius either way, which a weighted search does not mind; nothing is proved with it.
"""

import functools
import math
from typing import Final, NamedTuple

import numpy as np
import numpy.typing as npt

from byway_planning.curves.dubins import dubins_length
from byway_planning.curves.reeds_shepp import reeds_shepp_length
from byway_planning.kernel import describe, kernel
from byway_planning.vehicles.body import CAR, FORWARD_CAR

HALF: Final = 30  # entries on either side of 0
STEP: Final = 0.1  # radii between entries
TURNS: Final = 72  # headings


class Lengths(NamedTuple):
    """Unit curve lengths: `table` (61, 61, 72) by dx, dy, dheading; empty for a disc."""

    table: npt.NDArray[np.float32]


describe(Lengths, "rf4[:, :, ::1]")


@kernel("i8", "f4[:, :, ::1]")
def fill_lengths_kernel(kind: int, out: npt.NDArray[np.float32]) -> None:
    """Fill the table for CAR (Reeds-Shepp) or FORWARD_CAR (Dubins)."""
    for i in range(2 * HALF + 1):
        for j in range(2 * HALF + 1):
            for k in range(TURNS):
                x, y, turn = (i - HALF) * STEP, (j - HALF) * STEP, k * 2.0 * math.pi / TURNS
                if kind == CAR:
                    out[i, j, k] = reeds_shepp_length(x, y, turn)
                else:
                    out[i, j, k] = dubins_length(x, y, turn)


@functools.cache
def lengths_of(kind: int) -> Lengths:
    """Return the table of a kind of vehicle; made once in a process (about 0.3 s)."""
    if kind not in (CAR, FORWARD_CAR):
        table = np.zeros((0, 0, 0), np.float32)
    else:
        table = np.empty((2 * HALF + 1, 2 * HALF + 1, TURNS), np.float32)
        fill_lengths_kernel(kind, table)
    table.flags.writeable = False
    return Lengths(table)


@kernel()
def guessed_length(
    lengths: Lengths,
    radius: float,
    ax: float,
    ay: float,
    ah: float,
    bx: float,
    by: float,
    bh: float,
) -> float:
    """About the length of the shortest curve from pose a to pose b, in metres."""
    dx, dy = bx - ax, by - ay
    if lengths.table.shape[0] == 0:
        return math.hypot(dx, dy)
    c, s = math.cos(ah), math.sin(ah)
    scale = 1.0 / (radius * STEP)
    u = (c * dx + s * dy) * scale
    v = (c * dy - s * dx) * scale
    if not (abs(u) < HALF and abs(v) < HALF):
        return math.hypot(dx, dy)
    turn = (bh - ah) * (TURNS / (2.0 * math.pi))
    k = math.floor(turn + 0.5) % TURNS
    i, j = math.floor(u + 0.5) + HALF, math.floor(v + 0.5) + HALF
    return radius * float(lengths.table[i, j, k])
