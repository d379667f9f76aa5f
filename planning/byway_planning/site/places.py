"""Which tiles of a site something may touch."""

import math

import numpy as np
import numpy.typing as npt

from byway_planning.site.settings import SiteSettings
from byway_planning.site.shapes import PolygonShape, Shape
from byway_planning.site.tiles import Tile


def tiles_in(s: SiteSettings, x0: float, y0: float, x1: float, y1: float) -> list[Tile]:
    """Return the tiles that a box touches, its border included."""
    rows, columns = s.tiles
    c0 = math.floor((x0 - s.limits_m[0]) / s.tile_m - 1e-9)
    c1 = math.floor((x1 - s.limits_m[0]) / s.tile_m + 1e-9)
    r0 = math.floor((y0 - s.limits_m[1]) / s.tile_m - 1e-9)
    r1 = math.floor((y1 - s.limits_m[1]) / s.tile_m + 1e-9)
    return [
        (r, c)
        for r in range(max(r0, 0), min(r1, rows - 1) + 1)
        for c in range(max(c0, 0), min(c1, columns - 1) + 1)
    ]


def tiles_of(s: SiteSettings, shape: Shape) -> list[Tile]:
    """Return the tiles that a shape may touch: those of its box, less what lies beside edges."""
    tiles = tiles_in(s, *shape.box_m)
    if len(tiles) <= 9 or not isinstance(shape, PolygonShape) or not _is_convex(shape.vertices_m):
        return tiles
    side = s.tile_m
    ring = shape.vertices_m
    ahead = np.roll(ring, -1, axis=0)
    length = np.hypot(*(ahead - ring).T)
    normal = np.column_stack([ring[:, 1] - ahead[:, 1], ahead[:, 0] - ring[:, 0]])
    normal /= np.maximum(length, 1e-12)[:, None]
    reach = np.abs(normal).sum(axis=1) * side / 2 + 1e-6
    kept = []
    for tile in tiles:
        x, y = s.corner_m(tile)
        middle = np.array([x + side / 2, y + side / 2])
        # Inside distance to each edge's line; a convex shape misses a tile that lies beyond one
        # of them as a whole.
        inside = ((middle - ring) * normal).sum(axis=1)
        if (inside >= -reach).all():
            kept.append(tile)
    return kept


def _is_convex(ring: npt.NDArray[np.float64]) -> bool:
    d = np.roll(ring, -1, axis=0) - ring
    e = np.roll(d, -1, axis=0)
    return bool((d[:, 0] * e[:, 1] - d[:, 1] * e[:, 0] >= -1e-12).all())


def touches_limits(s: SiteSettings, box_m: tuple[float, float, float, float]) -> bool:
    """Tell whether a box lies within the limits of the site, at least with its border."""
    x0, y0, x1, y1 = box_m
    a0, b0, a1, b1 = s.limits_m
    return x1 >= a0 and x0 <= a1 and y1 >= b0 and y0 <= b1


def overlaps_limits(s: SiteSettings, box_m: tuple[float, float, float, float]) -> bool:
    """Tell whether some of a box's area lies within the limits of the site."""
    x0, y0, x1, y1 = box_m
    a0, b0, a1, b1 = s.limits_m
    return x1 > a0 and x0 < a1 and y1 > b0 and y0 < b1
