"""What the search reads of a site: one revision, for one request."""

from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import describe
from byway_planning.site.settings import SiteSettings

#: Tile table: no obstacle within reach of the tile, or the whole tile and its surroundings blocked.
OPEN = -1
SOLID = -2


class Scene(NamedTuple):
    """
    Distances and edges of the obstacles that count for one request.

    Site-local metres; all arrays are read-only views, mostly of memory shared between processes.
    A tile's field block holds, in `floats` from `field_of`: the distance to the nearest occupied
    cell at the (tile_cells + 1)^2 corners of its cells, in metres, cut off at `reach_m`; then, for
    squares of `room_cells` cells, the largest such distance (row by row); then the same for
    squares four times as wide. A tile's edge block (see `edges`) holds, in `wholes` from
    `edges_of`, the bucket starts and what is around their reference points, and right behind
    them, in `numbers`, the items.
    """

    cell_m: float
    tile_cells: int
    corner_x_m: float  # lower left corner of tile (0, 0)
    corner_y_m: float
    x_m_min: float
    y_m_min: float
    x_m_max: float
    y_m_max: float
    reach_m: float
    room_cells: int
    bucket_side: int  # buckets along one side of a tile
    field_of: npt.NDArray[np.int64]  # (tile rows, tile columns), offsets into floats
    edges_of: npt.NDArray[np.int64]  # (tile rows, tile columns), offsets into wholes and numbers
    floats: npt.NDArray[np.float32]
    wholes: npt.NDArray[np.int64]
    numbers: npt.NDArray[np.float64]
    far_m: npt.NDArray[np.float32]  # (4 * tile rows, 4 * tile columns): clearance of a coarse cell
    outline_items: npt.NDArray[np.float64]  # (n, 5) items of obstacles that are never rastered
    outline_starts: npt.NDArray[np.int64]  # (k + 1,)
    outline_discs: npt.NDArray[np.float64]  # (k, 3): a disc around each


FAR_PER_TILE = 4

describe(
    Scene,
    *("f8", "i8", "f8", "f8", "f8", "f8", "f8", "f8", "f8", "i8", "i8"),
    *("ri8[:, ::1]", "ri8[:, ::1]", "rf4[::1]", "ri8[::1]", "rf8[::1]", "rf4[:, ::1]"),
    *("rf8[:, ::1]", "ri8[::1]", "rf8[:, ::1]"),
)


def field_block_floats(settings: SiteSettings) -> int:
    """Return how many float32 a field block holds."""
    side, room = settings.tile_cells, settings.room_cells
    return (side + 1) ** 2 + (side // room) ** 2 + (side // (4 * room)) ** 2
