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
from byway_planning.site.scene import OPEN, Scene

Whole4 = npt.NDArray[np.int32]
Mask = npt.NDArray[np.uint8]
Point = tuple[float, float]
#: First tile row and column, last ones plus one.
Window = tuple[int, int, int, int]

SIDE_STEP: Final = 5
DIAGONAL_STEP: Final = 7
BUCKETS: Final = 8  # more than the dearest step
UNREACHED: Final = 2**30
#: Squares of a flood up to which the fine squares are used; beyond, squares four times as wide.
FINE_SQUARES_MAX: Final = 90_000
#: Slack, in cells of the site, of the mask that guides: what a search can mostly drive through.
GUIDE_CELLS: Final = 1.0
#: The limits of the site are kept to this much, which is more than a route is allowed to miss.
EXACT_M: Final = 0.001


class Flood(NamedTuple):
    """
    A finished flood.

    `cost` (rows, columns), one square of border included: cost to the origin, SIDE_STEP a side;
    UNREACHED where it did not come.
    """

    corner_x_m: float
    corner_y_m: float
    side_m: float
    cost: Whole4


describe(Flood, "f8", "f8", "f8", "ri4[:, ::1]")


@kernel()
def _holds(low: float, high: float, first: float, last: float) -> bool:
    """Do two intervals meet?"""
    return high >= first and low <= last


@kernel(Scene, "i8", "i8", "i8", "f8", "f8", "u1[:, ::1]")
def room_mask_kernel(
    scene: Scene,
    level: int,
    first_row: int,
    first_column: int,
    radius_m: float,
    slack_m: float,
    out: Mask,
) -> None:
    """
    Mark the squares of a grid that may hold the middle of a disc.

    Args:
        level: 0 for squares of `room_cells` cells, 1 for squares four times as wide.
        first_row, first_column: Tile at the lower left of the grid.
        radius_m: Of the disc; the limits of the site are kept exactly.
        slack_m: How far the distances of the raster may be below the true ones.
        out: Shape (rows + 2, columns + 2): whole tiles in such squares, and a border of 0.
    """
    out[:, :] = 0
    side = scene.tile_cells
    fine = side // scene.room_cells
    per = fine if level == 0 else side // (4 * scene.room_cells)
    base = (side + 1) * (side + 1) + (0 if level == 0 else fine * fine)
    square_m = side * scene.cell_m / per
    inset = radius_m - EXACT_M
    south, north = scene.y_m_min + inset, scene.y_m_max - inset
    west, east = scene.x_m_min + inset, scene.x_m_max - inset
    for i in range((out.shape[0] - 2) // per):
        for j in range((out.shape[1] - 2) // per):
            offset = scene.field_of[first_row + i, first_column + j]
            for r in range(per):
                y = scene.corner_y_m + ((first_row + i) * per + r) * square_m
                if not _holds(y, y + square_m, south, north):
                    continue
                for c in range(per):
                    free = offset == OPEN
                    if offset >= 0:
                        there = scene.floats[offset + base + r * per + c]
                        free = there >= radius_m - slack_m
                    if free:
                        x = scene.corner_x_m + ((first_column + j) * per + c) * square_m
                        free = _holds(x, x + square_m, west, east)
                    out[i * per + r + 1, j * per + c + 1] = 1 if free else 0


@kernel("ru1[:, ::1]", "i8", "i8", "f8", "i8", "i4[:, ::1]", "i4[::1]", "i4[::1]", "i4[::1]")
def flood_kernel(
    mask: Mask,
    origin: int,
    other: int,
    stretch: float,
    beyond: int,
    cost: Whole4,
    heads: Whole4,
    entries: Whole4,
    links: Whole4,
) -> int:
    """
    Fill `cost` from one square until `stretch` times the cost of the other, and more, is reached.

    Args:
        mask: 1 where the disc may be, 0 all along the border. The two ends count as free.
        origin, other: Squares, numbered row by row.
        beyond: Cost to go on for after that.
        heads: Shape (BUCKETS,). entries, links: room for 8 entries a square.

    Returns:
        The cost of the other end, or UNREACHED: then there is no way over the mask.
    """
    width = mask.shape[1]
    free, costs = mask.reshape(-1), cost.reshape(-1)
    for i in range(costs.shape[0]):
        costs[i] = UNREACHED
    for i in range(BUCKETS):
        heads[i] = -1
    costs[origin] = 0
    entries[0] = origin
    links[0] = -1
    heads[0] = 0
    used = 1
    spare = -1  # entries that were taken out, to be used again
    now = 0
    empty = 0
    until = UNREACHED
    while empty < BUCKETS and now <= until:
        b = now & (BUCKETS - 1)
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
            at = entries[e]
            if costs[at] != now:
                continue
            if at == other:
                until = min(until, int(now * stretch) + beyond)
            for turn in range(8):
                if turn < 4:
                    step = (1, -1, width, -width)[turn]
                    to = now + SIDE_STEP
                else:
                    step = (width + 1, width - 1, -width + 1, -width - 1)[turn - 4]
                    to = now + DIAGONAL_STEP
                beside = at + step
                if to >= costs[beside] or (free[beside] == 0 and beside != other):
                    continue
                costs[beside] = to
                if spare >= 0:
                    n = spare
                    spare = links[n]
                else:
                    n = used
                    used += 1
                entries[n] = beside
                c = to & (BUCKETS - 1)
                links[n] = heads[c]
                heads[c] = n
        now += 1
    return int(costs[other])


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


class FloodRoom:
    """Scratch memory of floods; grows with the largest."""

    def __init__(self) -> None:
        self.heads = np.empty(BUCKETS, np.int32)
        self.entries = np.empty(0, np.int32)
        self.links = np.empty(0, np.int32)

    def fit(self, squares: int) -> None:
        """Make room for a flood over so many squares."""
        if len(self.entries) < 8 * squares:
            self.entries = np.empty(8 * squares, np.int32)
            self.links = np.empty(8 * squares, np.int32)


def used_tiles(scene: Scene) -> Window:
    """Return the tiles around everything that stands on the site: rows and columns, half open."""
    rows, columns = np.nonzero(scene.field_of != OPEN)
    if not len(rows):
        return (0, 0, 0, 0)
    return (int(rows.min()), int(columns.min()), int(rows.max()) + 1, int(columns.max()) + 1)


def window_for(scene: Scene, used: Window, points: list[Point], margin_m: float) -> Window:
    """
    Return the tiles that a flood has to cover for some points.

    Around all that stands on the site and the points there is a free margin (or the limit of
    the site), so whatever gets round outside the window gets round inside it as well, and a
    flood that fails inside it has failed everywhere.
    """
    tile_m = scene.tile_cells * scene.cell_m
    rows = [(y - scene.corner_y_m) / tile_m for _, y in points]
    columns = [(x - scene.corner_x_m) / tile_m for x, _ in points]
    if used[2] > used[0]:
        rows += [used[0], used[2] - 1]
        columns += [used[1], used[3] - 1]
    margin = math.ceil(margin_m / tile_m)
    tile_rows, tile_columns = scene.field_of.shape
    return (
        min(max(math.floor(min(rows)) - margin, 0), tile_rows - 1),
        min(max(math.floor(min(columns)) - margin, 0), tile_columns - 1),
        min(max(math.floor(max(rows)) + margin + 1, 1), tile_rows),
        min(max(math.floor(max(columns)) + margin + 1, 1), tile_columns),
    )


class FloodGround:
    """The masks of one scene and window for one disc radius; kept per snapshot."""

    def __init__(self, scene: Scene, radius_m: float, window: Window) -> None:
        self._scene = scene
        self._radius_m = radius_m
        self._window = window
        fine = scene.tile_cells // scene.room_cells
        tiles = (window[2] - window[0], window[3] - window[1])
        self.level = 0 if tiles[0] * tiles[1] * fine**2 <= FINE_SQUARES_MAX else 1
        per = fine if self.level == 0 else scene.tile_cells // (4 * scene.room_cells)
        tile_m = scene.tile_cells * scene.cell_m
        self.side_m = tile_m / per
        self.corner_m = (
            scene.corner_x_m + window[1] * tile_m,
            scene.corner_y_m + window[0] * tile_m,
        )
        self.shape = (tiles[0] * per + 2, tiles[1] * per + 2)
        self._masks: dict[float, Mask] = {}

    def mask(self, slack_cells: float) -> Mask:
        """Return where the disc may be, distances being trusted up to some cells."""
        found = self._masks.get(slack_cells)
        if found is None:
            found = np.empty(self.shape, np.uint8)
            slack_m = slack_cells * self._scene.cell_m
            first = self._window[:2]
            room_mask_kernel(self._scene, self.level, *first, self._radius_m, slack_m, found)
            found.flags.writeable = False
            self._masks[slack_cells] = found
        return found

    def square_of(self, x: float, y: float) -> int:
        """Return the number of the square that holds a point; clipped to the site."""
        r = int((y - self.corner_m[1]) / self.side_m) + 1
        c = int((x - self.corner_m[0]) / self.side_m) + 1
        r, c = min(max(r, 1), self.shape[0] - 2), min(max(c, 1), self.shape[1] - 2)
        return r * self.shape[1] + c

    def flood(
        self,
        origin: tuple[float, float],
        other: tuple[float, float],
        room: FloodRoom,
        *,
        slack_cells: float,
        stretch: float,
        beyond_m: float,
    ) -> tuple[Flood, float]:
        """
        Flood from one point until `stretch` times as far as another, `beyond_m` and some squares.

        Returns:
            The flood, and the path length of the other point (inf when it is not reached).
        """
        room.fit(self.shape[0] * self.shape[1])
        cost = np.empty(self.shape, np.int32)
        steps = flood_kernel(
            self.mask(slack_cells),
            self.square_of(*origin),
            self.square_of(*other),
            stretch,
            4 * SIDE_STEP + math.ceil(beyond_m / self.side_m * SIDE_STEP),
            cost,
            room.heads,
            room.entries,
            room.links,
        )
        cost.flags.writeable = False
        side = self.side_m  # the border is part of the grid
        flood = Flood(self.corner_m[0] - side, self.corner_m[1] - side, side, cost)
        return flood, math.inf if steps >= UNREACHED else steps * self.side_m / SIDE_STEP


PROOF_CELLS: Final = RASTER_CELLS
