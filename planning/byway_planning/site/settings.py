"""Settings of a site and of its layers."""

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from byway_planning.site.shapes import COORDINATE_M_MAX

#: Tiles a site may have: the tables of one revision stay below 10 MB.
TILES_MAX = 400_000
#: Nobody knows where somebody will be in a minute.
SWEEP_S_MAX = 60.0


@dataclass(frozen=True)
class SiteSettings:
    """
    What a site is made of.

    Args:
        limits_m: x_min, y_min, x_max, y_max in the site's frame; everything outside is blocked.
        cell_m: Side of a cell. Distances are exact to a fraction of it.
        origin_m: The site's origin in the coordinates that callers use (survey coordinates, say).
        reach_m: Where the distance field is cut off, at the latest after a tile; beyond it a
            coarse clearance serves. 0 for 3.2 m or eight cells, whichever is more.
        tile_cells: Cells along one side of a tile; a power of two.
        sweep_s: How far ahead the sweep of a track is blocked.
        carry_every_s: How often tracks are carried forward.

    Raises:
        ValueError: With the field, its value and what to do.
    """

    limits_m: tuple[float, float, float, float]
    cell_m: float = 0.1
    origin_m: tuple[float, float] = (0.0, 0.0)
    reach_m: float = 0.0
    tile_cells: int = 64
    sweep_s: float = 3.0
    carry_every_s: float = 0.1

    def __post_init__(self) -> None:
        # Kernels have one signature: a whole number where a float belongs would be another.
        for name in ("limits_m", "origin_m"):
            object.__setattr__(self, name, tuple(float(value) for value in getattr(self, name)))
        for name in ("cell_m", "reach_m", "sweep_s", "carry_every_s"):
            object.__setattr__(self, name, float(getattr(self, name)))
        if self.reach_m == 0.0:
            object.__setattr__(self, "reach_m", max(3.2, 8.0 * self.cell_m))
        if not np.isfinite([*self.limits_m, *self.origin_m]).all():
            raise ValueError(
                f"limits_m and origin_m must be finite, got {self.limits_m} and {self.origin_m}"
            )
        if max(abs(value) for value in self.limits_m) > COORDINATE_M_MAX:
            raise ValueError(
                f"limits_m must lie within {COORDINATE_M_MAX:.0f} m of the site's origin, got "
                f"{self.limits_m}; survey coordinates need origin_m"
            )
        x0, y0, x1, y1 = self.limits_m
        if not (x0 < x1 and y0 < y1):
            raise ValueError(f"limits_m must be x_min < x_max, y_min < y_max, got {self.limits_m}")
        if not 0.005 <= self.cell_m <= 2.0:
            raise ValueError(f"cell_m must lie between 0.005 and 2 m, got {self.cell_m}")
        if self.tile_cells not in (16, 32, 64, 128):
            raise ValueError(f"tile_cells must be 16, 32, 64 or 128, got {self.tile_cells}")
        if not self.cell_m * 4 <= self.reach_m < np.inf:
            raise ValueError(f"reach_m must be finite and at least 4 cells, got {self.reach_m}")
        if not 0.0 <= self.sweep_s <= SWEEP_S_MAX:
            raise ValueError(f"sweep_s must be within 0 and {SWEEP_S_MAX:g} s, got {self.sweep_s}")
        if not 0.0 < self.carry_every_s < math.inf:
            raise ValueError(f"carry_every_s must be above 0 s, got {self.carry_every_s}")
        rows, columns = self.tiles
        if rows * columns > TILES_MAX:
            raise ValueError(
                f"{columns} x {rows} tiles are more than {TILES_MAX}; use a larger cell_m or "
                f"smaller limits_m"
            )

    @cached_property
    def tile_m(self) -> float:
        return self.tile_cells * self.cell_m

    @cached_property
    def reach_cells(self) -> int:
        """Cells that a distance reaches; at most a tile, so that neighbours suffice."""
        return min(int(np.ceil(self.reach_m / self.cell_m - 1e-9)), self.tile_cells)

    @cached_property
    def room_cells(self) -> int:
        """Cells along one side of a room square: about 0.4 m, so that a flood is quick."""
        size = 1
        while size * self.cell_m < 0.35 and size < self.tile_cells // 4:
            size *= 2
        return size

    @cached_property
    def bucket_side(self) -> int:
        """Buckets along one side of a tile: about 1.6 m, so that a vehicle touches few."""
        # More than 32 would make the empty buckets of a tile larger than its distances.
        return min(max(1, round(self.tile_m / 1.6)), 32)

    @cached_property
    def tiles(self) -> tuple[int, int]:
        """Rows and columns of tiles that cover the limits."""
        x0, y0, x1, y1 = self.limits_m
        rows = int(np.ceil((y1 - y0) / self.tile_m - 1e-9))
        columns = int(np.ceil((x1 - x0) / self.tile_m - 1e-9))
        return max(rows, 1), max(columns, 1)

    def corner_m(self, tile: tuple[int, int]) -> tuple[float, float]:
        """Return the lower left corner of a tile (row, column)."""
        return self.limits_m[0] + tile[1] * self.tile_m, self.limits_m[1] + tile[0] * self.tile_m


@dataclass(frozen=True)
class LayerSettings:
    """
    What a layer is.

    Args:
        unknown_blocks: Cells that are unknown, and ground where nothing was ever sent, block.
        outlines_only: The layer holds polygons and discs only, never enters a raster, and may be
            left out of a replan (a unit's own outline, say).
        decay_s: How long holds what a scan says of a cell; then it is unknown. None: for ever.
    """

    unknown_blocks: bool = False
    outlines_only: bool = False
    decay_s: float | None = None

    def __post_init__(self) -> None:
        if self.decay_s is not None and not 0.0 < self.decay_s < math.inf:
            raise ValueError(f"decay_s must be above 0 s, got {self.decay_s}")
        if self.unknown_blocks and self.outlines_only:
            raise ValueError("a layer of outlines only has no cells that could be unknown")
