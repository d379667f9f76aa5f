"""
The obstacles of a site in tables that can be shared, one slot an obstacle.

A slot keeps its number while its obstacle lives. A dropped obstacle leaves an empty slot (its
box can touch nothing); slots are closed up when more than half of the corners are gone.
"""

from collections.abc import Iterator
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning.site.shapes import ID_BYTES_MAX, DiscShape, PolygonShape, Shape
from byway_planning.site.tables import Table

#: Room for the number of a piece of a track's sweep.
NAME = np.dtype(f"S{ID_BYTES_MAX + 8}")
NOWHERE: Final = (np.inf, np.inf, -np.inf, -np.inf)
#: A disc without radius, farther away than any site.
NO_DISC: Final = (1e12, 1e12, 0.0)


class Records:
    """Tables of polygons and discs; owned by one SiteModel."""

    def __init__(self) -> None:
        self._by_layer: dict[int, dict[str, tuple[Shape, int]]] = {}
        self.tables = {
            "vertices": Table(np.float64, 2),
            "starts": Table(np.int64),
            "boxes": Table(np.float64, 4),
            "polygon_layers": Table(np.int32),
            "polygon_names": Table(NAME),
            "discs": Table(np.float64, 3),
            "disc_layers": Table(np.int32),
            "disc_names": Table(NAME),
        }
        self._reset()

    def _reset(self) -> None:
        for table in self.tables.values():
            table.empty()
        self.tables["starts"].append([0])
        self._gone_vertices = 0

    def names(self, layer: int) -> list[str]:
        return list(self._by_layer.get(layer, {}))

    def items(self) -> Iterator[tuple[int, str, Shape]]:
        for layer, obstacles in self._by_layer.items():
            for name, (shape, _) in obstacles.items():
                yield layer, name, shape

    def put(self, layer: int, name: str, shape: Shape) -> None:
        """Add an obstacle, or replace the one of that name."""
        self.drop(layer, name)
        tables = self.tables
        kind = "polygon" if isinstance(shape, PolygonShape) else "disc"
        if isinstance(shape, PolygonShape):
            tables["vertices"].append(shape.vertices_m)
            slot = tables["starts"].append([tables["vertices"].count]) - 1
            tables["boxes"].append(shape.box_m)
        else:
            slot = tables["discs"].append((shape.x_m, shape.y_m, shape.radius_m))
        tables[f"{kind}_layers"].append([layer])
        tables[f"{kind}_names"].append(np.array([name.encode()], NAME))
        self._by_layer.setdefault(layer, {})[name] = (shape, slot)

    def drop(self, layer: int, name: str) -> Shape | None:
        """Forget an obstacle; return its shape, or None when there was none."""
        found = self._by_layer.get(layer, {}).pop(name, None)
        if found is None:
            return None
        shape, slot = found
        if isinstance(shape, PolygonShape):
            self.tables["boxes"][slot] = NOWHERE
            self.tables["polygon_layers"][slot] = -1
            self._gone_vertices += len(shape.vertices_m)
        else:
            self.tables["discs"][slot] = NO_DISC
            self.tables["disc_layers"][slot] = -1
            self._gone_vertices += 1
        alive_and_gone = self.tables["vertices"].count + self.tables["discs"].count
        if self._gone_vertices > 1024 + alive_and_gone // 2:
            self._close_up()
        return shape

    def _close_up(self) -> None:
        alive = self._by_layer
        self._by_layer = {}
        self._reset()
        for layer, obstacles in alive.items():
            for name, (shape, _) in obstacles.items():
                self.put(layer, name, shape)


def shape_from(
    kind: str,
    row: int,
    vertices: npt.NDArray[np.float64],
    starts: npt.NDArray[np.int64],
    discs: npt.NDArray[np.float64],
) -> Shape:
    """Rebuild the shape in a slot of published tables."""
    if kind == "polygon":
        return PolygonShape.trusted(vertices[starts[row] : starts[row + 1]])
    return DiscShape(*(float(value) for value in discs[row]))
