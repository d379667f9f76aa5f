"""
Floods: path lengths of the inscribed disc over a coarse grid, from one place to everywhere.

They prove at once that a goal cannot be reached, and guide every search after them. Costs are
whole numbers, 5 for a side step and 7 for a diagonal one, so that Dijkstra's algorithm runs on
a ring of integer buckets (Dial 1969) without a heap.
"""

import math
from typing import Final, NamedTuple

import numpy as np
import numpy.typing as npt

from byway_planning.collision import RASTER_CELLS
from byway_planning.kernel import describe, kernel
from byway_planning.site.scene import OPEN, SOLID, Scene

Whole4 = npt.NDArray[np.int32]
Mask = npt.NDArray[np.uint8]

SIDE_STEP: Final = 5
DIAGONAL_STEP: Final = 7
BUCKETS: Final = 8  # more than the dearest step
UNREACHED: Final = 2**30
#: Cells of a flood up to which the fine squares are used; beyond, squares four times as wide.
FINE_CELLS_MAX: Final = 90_000
#: Slack, in cells of the site, of the mask that guides: what a search can mostly drive through.
GUIDE_CELLS: Final = 1.0


class Flood(NamedTuple):
    """
    A finished flood.

    `cost` (rows, columns): cost to the flood's origin in steps of SIDE_STEP per side;
    UNREACHED where it did not come.
    """

    corner_x_m: float
    corner_y_m: float
    side_m: float
    cost: Whole4


describe(Flood, "f8", "f8", "f8", "ri4[:, ::1]")


@kernel(Scene, "i8", "f8", "u1[:, ::1]")
def room_mask_kernel(scene: Scene, level: int, wanted_m: float, out: Mask) -> None:
    """
    Mark the squares of a grid that may hold the middle of a disc.

    Args:
        level: 0 for squares of `room_cells` cells, 1 for squares four times as wide.
        wanted_m: The distance that must be reached somewhere in a square.
        out: Shape (rows, columns) of the whole site in such squares.
    """
    side = scene.tile_cells
    fine = side // scene.room_cells
    per = fine if level == 0 else side // (4 * scene.room_cells)
    base = (side + 1) * (side + 1) + (0 if level == 0 else fine * fine)
    for tr in range(scene.field_of.shape[0]):
        for tc in range(scene.field_of.shape[1]):
            offset = scene.field_of[tr, tc]
            for r in range(per):
                row = tr * per + r
                if row >= out.shape[0]:
                    break
                for c in range(per):
                    column = tc * per + c
                    if column >= out.shape[1]:
                        break
                    if offset == OPEN:
                        out[row, column] = 1
                    elif offset == SOLID:
                        out[row, column] = 0
                    else:
                        room = scene.floats[offset + base + r * per + c]
                        out[row, column] = 1 if room >= wanted_m else 0


@kernel(
    *("ru1[:, ::1]", "i8", "i8", "i8", "i8", "f8", "i4[:, ::1]", "i4[::1]", "i4[::1]"),
    allocates=True,
)
def flood_kernel(
    mask: Mask,
    row: int,
    column: int,
    other_row: int,
    other_column: int,
    stretch: float,
    cost: Whole4,
    entries: Whole4,
    links: Whole4,
) -> int:
    """
    Fill `cost` from (row, column) until `stretch` times the cost of the other end is reached.

    Args:
        mask: 1 where the disc may be. The two ends count as free.
        entries, links: Room for 8 * cells entries.

    Returns:
        The cost of the other end, or UNREACHED: then there is no way over the mask.
    """
    rows, columns = mask.shape
    heads = np.full(BUCKETS, -1, np.int32)
    cost[:, :] = UNREACHED
    cost[row, column] = 0
    entries[0] = row * columns + column
    links[0] = -1
    heads[0] = 0
    used = 1
    now = 0
    empty = 0
    until = UNREACHED
    spare = -1  # entries that were taken out, to be used again
    while empty < BUCKETS and now <= until:
        b = now % BUCKETS
        if heads[b] < 0:
            empty += 1
            now += 1
            continue
        empty = 0
        while heads[b] >= 0:
            e = heads[b]
            heads[b] = links[e]
            links[e] = spare
            spare = e
            r, c = entries[e] // columns, entries[e] % columns
            if cost[r, c] != now:
                continue
            if r == other_row and c == other_column:
                until = min(until, int(now * stretch) + 4 * SIDE_STEP)
            for dr in range(-1, 2):
                i = r + dr
                if i < 0 or i >= rows:
                    continue
                for dc in range(-1, 2):
                    j = c + dc
                    if j < 0 or j >= columns:
                        continue
                    if mask[i, j] == 0 and not (i == other_row and j == other_column):
                        continue
                    to = now + (DIAGONAL_STEP if dr != 0 and dc != 0 else SIDE_STEP)
                    if to < cost[i, j]:
                        cost[i, j] = to
                        if spare >= 0:
                            n = spare
                            spare = links[n]
                        else:
                            n = used
                            used += 1
                        entries[n] = i * columns + j
                        links[n] = heads[to % BUCKETS]
                        heads[to % BUCKETS] = n
        now += 1
    return int(cost[other_row, other_column])


@kernel()
def flood_m(flood: Flood, x: float, y: float) -> float:
    """Path length from a point to the flood's origin, in metres; inf where it did not come."""
    c = int((x - flood.corner_x_m) / flood.side_m)
    r = int((y - flood.corner_y_m) / flood.side_m)
    if r < 0 or c < 0 or r >= flood.cost.shape[0] or c >= flood.cost.shape[1]:
        return math.inf
    steps = flood.cost[r, c]
    if steps >= UNREACHED:
        return math.inf
    return float(steps * flood.side_m / SIDE_STEP)


class FloodGround:
    """The masks of one scene for one disc radius, and room to flood them in; kept per snapshot."""

    def __init__(self, scene: Scene, radius_m: float) -> None:
        self._scene = scene
        self._radius_m = radius_m
        fine_m = scene.room_cells * scene.cell_m
        width, height = scene.x_m_max - scene.x_m_min, scene.y_m_max - scene.y_m_min
        self.level = 0 if width * height / fine_m**2 <= FINE_CELLS_MAX else 1
        self.side_m = fine_m * (1 if self.level == 0 else 4)
        self.shape = (math.ceil(height / self.side_m), math.ceil(width / self.side_m))
        self._masks: dict[float, Mask] = {}
        cells = self.shape[0] * self.shape[1]
        self._entries = np.empty(8 * cells, np.int32)
        self._links = np.empty(8 * cells, np.int32)

    def mask(self, slack_cells: float) -> Mask:
        """Return where the disc may be, distances being trusted up to some cells."""
        found = self._masks.get(slack_cells)
        if found is None:
            found = np.empty(self.shape, np.uint8)
            wanted = self._radius_m - slack_cells * self._scene.cell_m
            room_mask_kernel(self._scene, self.level, wanted, found)
            found.flags.writeable = False
            self._masks[slack_cells] = found
        return found

    def square_of(self, x: float, y: float) -> tuple[int, int]:
        """Return row and column of the square that holds a point; clipped to the grid."""
        r = int((y - self._scene.corner_y_m) / self.side_m)
        c = int((x - self._scene.corner_x_m) / self.side_m)
        return min(max(r, 0), self.shape[0] - 1), min(max(c, 0), self.shape[1] - 1)

    def flood(
        self,
        origin: tuple[float, float],
        other: tuple[float, float],
        *,
        slack_cells: float,
        stretch: float,
    ) -> tuple[Flood, float]:
        """
        Flood from one point until well past another.

        Returns:
            The flood, and the path length of the other point (inf when it is not reached).
        """
        cost = np.empty(self.shape, np.int32)
        steps = flood_kernel(
            self.mask(slack_cells),
            *self.square_of(*origin),
            *self.square_of(*other),
            stretch,
            cost,
            self._entries,
            self._links,
        )
        cost.flags.writeable = False
        flood = Flood(self._scene.corner_x_m, self._scene.corner_y_m, self.side_m, cost)
        return flood, math.inf if steps >= UNREACHED else steps * self.side_m / SIDE_STEP


PROOF_CELLS: Final = RASTER_CELLS
