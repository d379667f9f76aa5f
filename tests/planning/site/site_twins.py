"""Sites for tests, and slow twins of what their kernels compute."""

from collections.abc import Iterator
from typing import Any

import numpy as np
import numpy.typing as npt
import shapely
from scipy.ndimage import distance_transform_edt

from byway_planning.site import (
    DiscShape,
    LayerSettings,
    PolygonShape,
    SiteModel,
    SiteSettings,
    Snapshot,
)
from byway_planning.site.scene import OPEN, SOLID, Scene

Floats = npt.NDArray[np.float64]
Cells = npt.NDArray[np.uint8]
Tile = tuple[int, int]

#: Small tiles, so that a site of a few metres has many of them.
SMALL = SiteSettings((-2.0, 1.0, 7.6, 9.0), cell_m=0.1, reach_m=1.2, tile_cells=16)


def box(x: float, y: float, width: float, height: float) -> PolygonShape:
    return PolygonShape(
        np.array([(x, y), (x + width, y), (x + width, y + height), (x, y + height)])
    )


def star(seed: int, x: float, y: float, radius: float, count: int = 12) -> PolygonShape:
    """A simple polygon around (x, y), seldom convex."""
    rng = np.random.default_rng(seed)
    angle = (np.arange(count) + rng.uniform(0.1, 0.9, count)) * 2 * np.pi / count
    reach = radius * rng.uniform(0.3, 1.0, count)
    return PolygonShape(np.column_stack([x + reach * np.cos(angle), y + reach * np.sin(angle)]))


def polygon_of(shape: PolygonShape) -> shapely.Polygon:
    return shapely.Polygon(shape.vertices_m)


def copy_of(model: SiteModel, snapshot: Snapshot) -> SiteModel:
    """A model made afresh with what a snapshot holds."""
    fresh = SiteModel(model.settings)
    for name, settings in snapshot.layers().items():
        fresh.declare(name, settings)
    for layer, name, shape in snapshot.obstacles():
        fresh.put(layer, name, shape)
    for name in snapshot.layers():
        for corner_m, cells in snapshot.cells(name):
            fresh.patch(name, corner_m, model.settings.cell_m, cells)
    return fresh


def tiles_of(scene: Scene) -> Iterator[Tile]:
    rows, columns = scene.field_of.shape
    return ((r, c) for r in range(rows) for c in range(columns))


def field_of(scene: Scene) -> npt.NDArray[np.float32]:
    """Distances at all corners of cells, joined from the tiles."""
    rows, columns = scene.field_of.shape
    side, n = scene.tile_cells, scene.tile_cells + 1
    field = np.full((rows * side + 1, columns * side + 1), -1.0, np.float32)
    for r, c in tiles_of(scene):
        at = int(scene.field_of[r, c])
        if at == OPEN:
            block = np.full((n, n), scene.reach_m, np.float32)
        elif at == SOLID:
            block = np.zeros((n, n), np.float32)
        else:
            block = scene.floats[at : at + n * n].reshape(n, n)
        part = field[r * side : r * side + n, c * side : c * side + n]
        # Tiles share the corners at their borders, and must agree there.
        assert ((part == block) | (part == -1.0)).all()
        part[:] = block
    return field


def rooms_of(scene: Scene, tile: Tile, level: int) -> npt.NDArray[np.float32] | None:
    at = int(scene.field_of[tile])
    if at < 0:
        return None
    side, room = scene.tile_cells, scene.room_cells
    at += (side + 1) ** 2 + (side // room) ** 2 * level
    count = side // (room * 4**level)
    return scene.floats[at : at + count * count].reshape(count, count)


def expected_field(filled: npt.NDArray[np.bool_], cell_m: float, reach_cells: int) -> Floats:
    """Distances at the corners of cells to the nearest corner of a filled one, by scipy."""
    marks = np.zeros((filled.shape[0] + 1, filled.shape[1] + 1), bool)
    for i in range(2):
        for j in range(2):
            marks[i : i + filled.shape[0], j : j + filled.shape[1]] |= filled
    if not marks.any():
        return np.full(marks.shape, reach_cells * cell_m)
    distances: Floats = np.minimum(distance_transform_edt(~marks), reach_cells) * cell_m
    return distances


def buckets_of(scene: Scene) -> dict[tuple[int, int, int], tuple[int, list[list[float]]]]:
    """What is around the reference point and the items in order, by tile and bucket."""
    found = {}
    per = scene.bucket_side**2
    for r, c in tiles_of(scene):
        at = int(scene.edges_of[r, c])
        if at < 0:
            continue
        base = at + 2 * per + 1
        for b in range(per):
            first, last = (int(scene.wholes[at + b + i]) for i in range(2))
            rows = scene.numbers[base + 5 * first : base + 5 * last].reshape(-1, 5)
            found[r, c, b] = int(scene.wholes[at + per + 1 + b]), sorted(rows.tolist())
    return found


def blocked_of(snapshot: Snapshot) -> Cells:
    """Blocked cells of patches over the whole site, joined from the tiles."""
    solids = snapshot.solids()
    rows, columns = solids.cells_of.shape
    side = solids.tile_cells
    out = np.zeros((rows * side, columns * side), np.uint8)
    for r in range(rows):
        for c in range(columns):
            at = int(solids.cells_of[r, c])
            block: Any = {-1: 0, -2: 1}.get(at)
            if block is None:
                block = solids.cells[at : at + side * side].reshape(side, side)
            out[r * side : (r + 1) * side, c * side : (c + 1) * side] = block
    return out


def solids_of(snapshot: Snapshot) -> tuple[list[list[float]], list[list[float]]]:
    """Boxes of polygons and discs that can be met; what was dropped is out of the world."""
    solids = snapshot.solids()
    boxes = solids.boxes_m[np.isfinite(solids.boxes_m).all(axis=1)]
    discs = solids.discs_m[solids.discs_m[:, 2] > 0.0]
    rest = solids.discs_m[solids.discs_m[:, 2] <= 0.0]
    assert (np.abs(rest[:, :2]) > 1e9).all()
    return sorted(boxes.tolist()), sorted(discs.tolist())


def read_all(snapshot: Snapshot) -> dict[str, Any]:
    """Everything that a reader can see, in a form in which equal sites are equal."""
    scene = snapshot.scene()
    rows, columns = scene.field_of.shape
    every = [(r, c) for r in range(rows) for c in range(columns)]
    return {
        "layers": snapshot.layers(),
        "obstacles": {
            (layer, name): shape.vertices_m.tobytes() if isinstance(shape, PolygonShape) else shape
            for layer, name, shape in snapshot.obstacles()
        },
        "layer cells": {
            (name, corner_m): cells.tobytes()
            for name in snapshot.layers()
            for corner_m, cells in snapshot.cells(name)
        },
        "field": field_of(scene).tobytes(),
        "states": [min(int(scene.field_of[tile]), 0) for tile in every],
        "rooms": [
            None if (rooms := rooms_of(scene, tile, level)) is None else rooms.tobytes()
            for tile in every
            for level in range(2)
        ],
        "far": scene.far_m.tobytes(),
        "buckets": buckets_of(scene),
        "blocked": blocked_of(snapshot).tobytes(),
        "solids": solids_of(snapshot),
    }


def declared(model: SiteModel) -> SiteModel:
    """With a layer of every kind."""
    model.declare("fixed", LayerSettings())
    model.declare("lidar", LayerSettings())
    model.declare("fog", LayerSettings())
    model.declare("outlines", LayerSettings(outlines_only=True))
    return model


def change(model: SiteModel, rng: np.random.Generator) -> None:
    """Make one random change."""
    x0, y0, x1, y1 = model.settings.limits_m
    x, y = rng.uniform(x0, x1 - 0.1), rng.uniform(y0, y1 - 0.1)
    layer = str(rng.choice(["fixed", "lidar", "outlines"]))
    name = f"o{rng.integers(12)}"
    what = rng.choice(["star", "box", "disc", "drop", "patch", "clear"], p=PROBABLE)
    if what == "star":
        model.put(layer, name, star(int(rng.integers(1 << 30)), x, y, rng.uniform(0.1, 2.0)))
    elif what == "box":
        size = rng.integers(1, 40, 2) * 0.1  # on the borders of cells, mostly
        model.put(layer, name, box(round(x, 1), round(y, 1), *size))
    elif what == "disc":
        model.put(layer, name, DiscShape(x, y, rng.uniform(0.02, 1.5)))
    elif what == "drop":
        model.drop(layer, name)
    elif what == "patch":
        shape = rng.integers(1, 30, 2)
        cells = rng.choice(3, shape, p=[0.7, 0.2, 0.1]).astype(np.uint8)
        if rng.random() < 0.3:
            cells[:] = rng.integers(3)
        cell_m = rng.choice([0.05, 0.1, 0.1, 0.1, 0.17])
        corner_m = (x0 + (x - x0) // 0.1 * 0.1, y0 + (y - y0) // 0.1 * 0.1)
        model.patch(str(rng.choice(["lidar", "fog"])), corner_m, cell_m, cells)
    elif what == "clear":
        model.clear(layer)


PROBABLE = [0.3, 0.15, 0.15, 0.15, 0.22, 0.03]
