"""A site for scripts: a SiteModel filled once and published."""

from collections.abc import Iterable, Mapping
from typing import Literal

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import ensure_warm
from byway_planning.site.model import SiteModel
from byway_planning.site.patches import PATCH_CELLS_MAX
from byway_planning.site.settings import LayerSettings, SiteSettings
from byway_planning.site.shapes import DiscShape, PolygonShape, Shape
from byway_planning.site.snapshot import Snapshot

Point = tuple[float, float]
#: Layer names of the sites that scripts make.
SHAPES = "shapes"
CELLS = "cells"


class Site:
    """
    Obstacles that stay as they are, ready for `plan`.

    Coordinates given here and to `plan` are the caller's; `origin_m` is subtracted inside, so
    that survey coordinates lose no precision.
    """

    def __init__(self, snapshot: Snapshot) -> None:
        self.snapshot = snapshot

    @property
    def origin_m(self) -> Point:
        return self.snapshot.origin_m

    @classmethod
    def from_grid(
        cls,
        cells: npt.NDArray[np.uint8],
        *,
        cell_m: float,
        corner_m: Point = (0.0, 0.0),
        unknown: Literal["free", "blocked"] = "free",
        polygons: Mapping[str, npt.ArrayLike] | None = None,
        discs: Mapping[str, tuple[float, float, float]] | None = None,
        limits_m: tuple[float, float, float, float] | None = None,
        origin_m: Point = (0.0, 0.0),
    ) -> "Site":
        """
        Make a site from a grid of cells and, if wished, polygons and discs.

        Args:
            cells: uint8, shape (rows, columns), row 0 at the lowest y: 0 free, 1 occupied,
                2 unknown.
            cell_m: Side of a cell.
            corner_m: Lower left corner of the grid.
            unknown: Whether unknown cells, and ground outside the grid, count as blocked.
            polygons: Rings (n, 2) by id. discs: (x, y, radius) by id.
            limits_m: x_min, y_min, x_max, y_max; outside is blocked. Default: the grid.
            origin_m: Where the site's own frame has its origin.

        Raises:
            SiteError: (a ValueError) With what was wrong, where, and what to do.
        """
        grid = np.asarray(cells)
        rows, columns = grid.shape if grid.ndim == 2 else (1, 1)
        if limits_m is None:
            x, y = corner_m
            limits_m = (x, y, x + columns * cell_m, y + rows * cell_m)
        model = cls._model(limits_m, cell_m, origin_m)
        model.declare(CELLS, LayerSettings(unknown_blocks=unknown == "blocked"))
        x, y = corner_m[0] - origin_m[0], corner_m[1] - origin_m[1]
        # A grid may be larger than the largest patch. Its parts share a row or column, so that
        # every cell of the site which the grid covers is covered by one part as a whole.
        most, step = PATCH_CELLS_MAX, PATCH_CELLS_MAX - 1
        for r in range(0, max(rows - 1, 1), step):
            for c in range(0, max(columns - 1, 1), step):
                part = grid[r : r + most, c : c + most] if grid.ndim == 2 else grid
                model.patch(CELLS, (x + c * cell_m, y + r * cell_m), cell_m, part)
        return cls._filled(model, polygons, discs)

    @classmethod
    def from_shapes(
        cls,
        polygons: Mapping[str, npt.ArrayLike] | None = None,
        discs: Mapping[str, tuple[float, float, float]] | None = None,
        *,
        limits_m: tuple[float, float, float, float],
        cell_m: float = 0.1,
        origin_m: Point = (0.0, 0.0),
    ) -> "Site":
        """Make a site from polygons and discs alone; arguments as in `from_grid`."""
        return cls._filled(cls._model(limits_m, cell_m, origin_m), polygons, discs)

    @staticmethod
    def _model(
        limits_m: tuple[float, float, float, float], cell_m: float, origin_m: Point
    ) -> SiteModel:
        ensure_warm()
        x, y = origin_m
        x0, y0, x1, y1 = limits_m
        return SiteModel(SiteSettings((x0 - x, y0 - y, x1 - x, y1 - y), cell_m, origin_m))

    @classmethod
    def _filled(
        cls,
        model: SiteModel,
        polygons: Mapping[str, npt.ArrayLike] | None,
        discs: Mapping[str, tuple[float, float, float]] | None,
    ) -> "Site":
        model.declare(SHAPES, LayerSettings())
        for name, shape in _shapes(model.settings.origin_m, polygons or {}, discs or {}):
            model.put(SHAPES, name, shape)
        return cls(model.publish())


def _shapes(
    origin_m: Point,
    polygons: Mapping[str, npt.ArrayLike],
    discs: Mapping[str, tuple[float, float, float]],
) -> Iterable[tuple[str, Shape]]:
    for name, ring in polygons.items():
        vertices = np.array(ring, float)
        if vertices.ndim == 2 and vertices.shape[1] == 2:
            vertices -= origin_m
        yield name, PolygonShape(vertices)
    for name, (x, y, radius) in discs.items():
        yield name, DiscShape(x - origin_m[0], y - origin_m[1], radius)
