"""A rectangle of cells as a source sends it: checked, and written into tiles."""

import math

import numpy as np
import numpy.typing as npt

from byway_planning.site.raster import resample_kernel, resample_turned_kernel
from byway_planning.site.shapes import SiteError
from byway_planning.site.tiles import Cells

#: Rows or columns of one patch; 4096 cells of 0.1 m are more than any sensor sees at once.
PATCH_CELLS_MAX = 4096
#: A millimetre is finer than any sensor, and bounds how many patch cells a tile cell looks at.
PATCH_CELL_M_MIN = 0.001
PATCH_CELL_M_MAX = 100.0
WORST = 2


class Patch:
    """
    A patch that has been looked at.

    Args: those of `SiteModel.patch`.

    Attributes:
        box_m: x_min, y_min, x_max, y_max around it.

    Raises:
        SiteError: bad_cells, too_large or not_finite.
    """

    def __init__(
        self, corner_m: tuple[float, float], cell_m: float, cells: Cells, heading_rad: float = 0.0
    ) -> None:
        self._cells = _checked_cells(cells)
        if not np.isfinite([*corner_m, cell_m, heading_rad]).all():
            raise SiteError(
                "not_finite",
                f"corner_m {corner_m}, cell_m {cell_m}, heading_rad {heading_rad} must be finite",
            )
        if not PATCH_CELL_M_MIN <= cell_m <= PATCH_CELL_M_MAX:
            raise SiteError(
                "bad_cells",
                f"cell_m lies between {PATCH_CELL_M_MIN} and {PATCH_CELL_M_MAX} m, got {cell_m}",
            )
        self._place = np.array([*corner_m, cell_m, heading_rad], np.float64)
        self._place.flags.writeable = False
        rows, columns = self._cells.shape
        c, s = math.cos(heading_rad), math.sin(heading_rad)
        along = np.array([0.0, columns * cell_m, 0.0, columns * cell_m])
        across = np.array([0.0, 0.0, rows * cell_m, rows * cell_m])
        x, y = corner_m[0] + c * along - s * across, corner_m[1] + s * along + c * across
        self.box_m = (float(x.min()), float(y.min()), float(x.max()), float(y.max()))

    def write(self, out: Cells, corner_m: tuple[float, float], cell_m: float) -> None:
        """Write the patch into the cells of a tile with this corner."""
        self._resample(self._cells, out, corner_m, cell_m)

    def unstamp(
        self, stamps: npt.NDArray[np.float64], corner_m: tuple[float, float], cell_m: float
    ) -> None:
        """What a patch says holds until another says something else, whatever was scanned."""
        covered = np.full(stamps.shape, WORST, np.uint8)
        everywhere = np.zeros_like(self._cells)
        everywhere.flags.writeable = False
        self._resample(everywhere, covered, corner_m, cell_m)
        stamps[covered == 0] = math.inf

    def _resample(
        self, cells: Cells, out: Cells, corner_m: tuple[float, float], cell_m: float
    ) -> None:
        x, y, own_cell_m, heading_rad = self._place.tolist()
        if heading_rad == 0.0:
            resample_kernel(cells, x, y, own_cell_m, out, *corner_m, cell_m)
        else:
            resample_turned_kernel(cells, self._place, out, *corner_m, cell_m)


def _checked_cells(cells: Cells) -> Cells:
    try:
        patch = np.array(cells)
    except ValueError as fault:
        raise SiteError("bad_cells", f"a patch has rows and columns: {fault}") from None
    if patch.ndim != 2 or patch.size == 0:
        raise SiteError("bad_cells", f"a patch has rows and columns, got shape {patch.shape}")
    if max(patch.shape) > PATCH_CELLS_MAX:
        raise SiteError(
            "too_large",
            f"a patch may have {PATCH_CELLS_MAX} rows and columns at most, got {patch.shape}",
        )
    if patch.dtype != np.uint8 or patch.max() > WORST:
        raise SiteError(
            "bad_cells",
            f"cells are uint8: 0 free, 1 occupied, 2 unknown; got {patch.dtype} up to "
            f"{patch.max()}",
        )
    patch = np.ascontiguousarray(patch)
    patch.flags.writeable = False
    return patch
