"""The obstacles of one request as they are, without any index or distance: what `verify` reads."""

from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import describe


class Solids(NamedTuple):
    """
    Every obstacle that counts for one request (layers left out are not in here).

    Site-local metres. All arrays are read-only.
    """

    vertices_m: npt.NDArray[np.float64]  # (v, 2): ring after ring, each counter-clockwise
    starts: npt.NDArray[np.int64]  # (p + 1,): polygon i has the vertices starts[i]:starts[i + 1]
    boxes_m: npt.NDArray[np.float64]  # (p, 4): x_min, y_min, x_max, y_max of each polygon
    discs_m: npt.NDArray[np.float64]  # (d, 3): x, y, radius
    cells: npt.NDArray[np.uint8]  # blocked cells of patches, tile after tile; 1 blocks, 0 does not
    cells_of: npt.NDArray[np.int64]  # (tile rows, tile columns): where a tile's cells begin;
    #                                  NO_CELLS: nothing blocked there, ALL_CELLS: all blocked
    cell_m: float
    tile_cells: int  # a tile has tile_cells x tile_cells cells, row 0 at the lowest y
    corner_x_m: float  # lower left corner of tile (0, 0)
    corner_y_m: float
    x_m_min: float  # limits of the site: outside is blocked
    y_m_min: float
    x_m_max: float
    y_m_max: float


NO_CELLS = -1
ALL_CELLS = -2

describe(
    Solids,
    *("rf8[:, ::1]", "ri8[::1]", "rf8[:, ::1]", "rf8[:, ::1]", "ru1[::1]", "ri8[:, ::1]"),
    *("f8", "i8", "f8", "f8", "f8", "f8", "f8", "f8"),
)
