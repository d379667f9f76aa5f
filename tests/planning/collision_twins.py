"""Scenes for collision tests, and exact distances in them by shapely."""

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import shapely

from byway_planning.curves.word import advance
from byway_planning.site import (
    DiscShape,
    LayerSettings,
    PolygonShape,
    SiteModel,
    SiteSettings,
    Snapshot,
)
from byway_planning.site.scene import Scene
from byway_planning.vehicles.models import Car, Disc

Floats = npt.NDArray[np.float64]
Pose = tuple[float, float, float]

BOX = ((-1.0, -0.95), (3.5, -0.95), (3.5, 0.95), (-1.0, 0.95))
WEDGE = ((-0.3, -0.5), (1.4, 0.0), (-0.3, 0.5))
#: Two arms that reach forward beside an empty slot.
FORK = (
    *((-0.6, -0.9), (2.0, -0.9), (2.0, -0.5), (0.2, -0.5)),
    *((0.2, 0.5), (2.0, 0.5), (2.0, 0.9), (-0.6, 0.9)),
)
ELL = ((-1.0, -0.95), (3.5, -0.95), (3.5, 0.95), (2.5, 0.95), (2.5, -0.2), (-1.0, 0.2))


def car(footprint: tuple[tuple[float, float], ...], clearance_m: float = 0.0) -> Car:
    return Car(footprint_m=footprint, turn_radius_m_min=3.0, clearance_m=clearance_m)


VEHICLES: Mapping[str, Car | Disc] = {
    "box": car(BOX),
    "box that keeps away": car(BOX, 0.2),
    "wedge": car(WEDGE),
    "fork": car(FORK, 0.05),
    "ell": car(ELL),
    "disc": Disc(radius_m=0.6, clearance_m=0.1),
    # Smaller than the errors of the raster: nothing but the edges can tell where it is.
    "mouse": Disc(radius_m=0.02, clearance_m=0.0),
    "sliver": car(((-0.3, -0.03), (0.9, -0.03), (0.9, 0.03), (-0.3, 0.03))),
}


@dataclass
class World:
    """A site, and the same for shapely."""

    snapshot: Snapshot
    solid: shapely.Geometry  # polygons, blocked cells, and all that is outside the limits
    discs: Floats  # (k, 3)

    @property
    def scene(self) -> Scene:
        return self.snapshot.scene()

    def distances_m(self, vehicle: Car | Disc, poses: Floats) -> Floats:
        """Distance of a vehicle to the nearest obstacle at every pose; at most 0 where it hits."""
        body = vehicle.body()
        c, s = np.cos(poses[:, 2:]), np.sin(poses[:, 2:])
        x, y = body.outline_m.T
        ring = np.stack([poses[:, :1] + c * x - s * y, poses[:, 1:2] + s * x + c * y], axis=-1)
        shapes = shapely.polygons(ring) if len(x) > 1 else shapely.points(ring[:, 0])
        shapely.prepare(self.solid)
        found: Floats = shapely.distance(shapes, self.solid)
        for cx, cy, radius in self.discs:
            found = np.minimum(found, shapely.distance(shapes, shapely.Point(cx, cy)) - radius)
        return found - body.skin_m


def world(
    limits_m: tuple[float, float, float, float],
    *,
    cell_m: float = 0.1,
    polygons: list[Floats] | None = None,
    discs: list[tuple[float, float, float]] | None = None,
    outlines: list[Floats] | None = None,
    outline_discs: list[tuple[float, float, float]] | None = None,
    cells: npt.NDArray[np.uint8] | None = None,
) -> World:
    """Make a world; `cells` begin at the lower left corner of the limits."""
    model = SiteModel(SiteSettings(limits_m, cell_m))
    model.declare("fixed", LayerSettings())
    model.declare("units", LayerSettings(outlines_only=True))
    for layer, rings, circles in (
        ("fixed", polygons or [], discs or []),
        ("units", outlines or [], outline_discs or []),
    ):
        for i, ring in enumerate(rings):
            model.put(layer, f"p{i}", PolygonShape(ring))
        for i, circle in enumerate(circles):
            model.put(layer, f"d{i}", DiscShape(*circle))
    x0, y0, x1, y1 = limits_m
    parts = [shapely.Polygon(ring) for ring in [*(polygons or []), *(outlines or [])]]
    if cells is not None:
        model.patch("fixed", (x0, y0), cell_m, cells)
        rows, columns = np.nonzero(cells == 1)
        low_x, low_y = x0 + columns * cell_m, y0 + rows * cell_m
        parts += list(shapely.box(low_x, low_y, low_x + cell_m, low_y + cell_m))
    around = shapely.box(x0 - 50, y0 - 50, x1 + 50, y1 + 50) - shapely.box(*limits_m)
    solid = shapely.union_all([*parts, around])
    every = np.array([*(discs or []), *(outline_discs or [])]).reshape(-1, 3)
    return World(model.publish(), solid, every)


def random_world(
    seed: int, cell_m: float, sizes_m: tuple[float, ...] = (5.0, 4.0, 3.0, 1.0, 0.7, 0.4, 0.15)
) -> World:
    """Polygons convex and not, some huge, some over each other; discs, cells and outlines."""
    rng = np.random.default_rng(seed)
    limits_m = (-3.0, 2.0, -3.0 + 240 * 0.1, 2.0 + 160 * 0.1)

    def place() -> Floats:
        return rng.uniform(limits_m[:2], limits_m[2:])

    def star(radius: float) -> Floats:
        n = int(rng.integers(3, 11))
        angle = (np.arange(n) + rng.uniform(0.1, 0.9, n)) * 2 * np.pi / n
        reach = radius * rng.uniform(0.3, 1.0, n)
        return place() + np.column_stack([reach * np.cos(angle), reach * np.sin(angle)])

    def disc(largest: float) -> tuple[float, float, float]:
        x, y = place()
        return (float(x), float(y), float(rng.uniform(0.05, largest)))

    shape = (math.ceil(16.0 / cell_m), math.ceil(24.0 / cell_m))
    cells = (rng.random(shape) < 12 / (shape[0] * shape[1])).astype(np.uint8)
    row, column = (int(rng.integers(0, n // 2)) for n in shape)
    cells[row : row + shape[0] // 6, column : column + shape[1] // 8] = 1
    return world(
        limits_m,
        cell_m=cell_m,
        polygons=[star(size_m) for size_m in sizes_m],
        discs=[disc(1.5), disc(0.3)],
        outlines=[star(1.5), star(0.6)],
        outline_discs=[disc(0.5)],
        cells=cells,
    )


def poses_along(pose: Pose, curvature: float, length: float, step_m: float) -> Floats:
    """Poses (n, 3) along an arc, both ends included."""
    count = max(math.ceil(abs(length) / step_m), 1)
    ends = [advance(*pose, curvature, length * i / count) for i in range(count + 1)]
    return np.array(ends)
