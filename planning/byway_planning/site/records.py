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

NAME = np.dtype(f"S{ID_BYTES_MAX}")
NOWHERE: Final = (np.inf, np.inf, -np.inf, -np.inf)


class Table:
    """A numpy array that grows at its end."""

    def __init__(self, dtype: npt.DTypeLike, columns: int | None = None) -> None:
        self._rows: npt.NDArray[np.generic] = np.zeros((16, columns) if columns else 16, dtype)
        self.count = 0

    def append(self, rows: npt.ArrayLike) -> int:
        """Add rows; return the index of the first."""
        block = np.asarray(rows, self._rows.dtype).reshape(-1, *self._rows.shape[1:])
        first, self.count = self.count, self.count + len(block)
        if self.count > len(self._rows):
            bigger = np.zeros((2 * self.count, *self._rows.shape[1:]), self._rows.dtype)
            bigger[:first] = self._rows[:first]
            self._rows = bigger
        self._rows[first : self.count] = block
        return first

    @property
    def view(self) -> npt.NDArray[np.generic]:
        return self._rows[: self.count]


class Records:
    """Tables of polygons and discs; owned by one SiteModel."""

    def __init__(self) -> None:
        self._by_layer: dict[int, dict[str, tuple[Shape, int]]] = {}
        self._reset()

    def _reset(self) -> None:
        self.vertices = Table(np.float64, 2)
        self.starts = Table(np.int64)
        self.starts.append([0])
        self.boxes = Table(np.float64, 4)
        self.polygon_layers = Table(np.int32)
        self.polygon_names = Table(NAME)
        self.discs = Table(np.float64, 3)
        self.disc_layers = Table(np.int32)
        self.disc_names = Table(NAME)
        self._gone_vertices = 0

    def get(self, layer: int, name: str) -> Shape | None:
        found = self._by_layer.get(layer, {}).get(name)
        return found[0] if found else None

    def names(self, layer: int) -> list[str]:
        return list(self._by_layer.get(layer, {}))

    def items(self, layer: int) -> Iterator[tuple[str, Shape]]:
        for name, (shape, _) in self._by_layer.get(layer, {}).items():
            yield name, shape

    def put(self, layer: int, name: str, shape: Shape) -> None:
        """Add an obstacle, or replace the one of that name."""
        self.drop(layer, name)
        if isinstance(shape, PolygonShape):
            self.vertices.append(shape.vertices_m)
            slot = self.starts.append([self.vertices.count]) - 1
            self.boxes.append(shape.box_m)
            self.polygon_layers.append([layer])
            self.polygon_names.append(np.array([name.encode()], NAME))
        else:
            slot = self.discs.append((shape.x_m, shape.y_m, shape.radius_m))
            self.disc_layers.append([layer])
            self.disc_names.append(np.array([name.encode()], NAME))
        self._by_layer.setdefault(layer, {})[name] = (shape, slot)

    def drop(self, layer: int, name: str) -> Shape | None:
        """Forget an obstacle; return its shape, or None when there was none."""
        found = self._by_layer.get(layer, {}).pop(name, None)
        if found is None:
            return None
        shape, slot = found
        if isinstance(shape, PolygonShape):
            self.boxes.view[slot] = NOWHERE
            self.polygon_layers.view[slot] = -1
            self._gone_vertices += len(shape.vertices_m)
        else:
            # A disc without radius, farther away than any site.
            self.discs.view[slot] = (1e12, 1e12, 0.0)
            self.disc_layers.view[slot] = -1
            self._gone_vertices += 1
        if self._gone_vertices > 1024 + (self.vertices.count + self.discs.count) // 2:
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
        return PolygonShape(vertices[starts[row] : starts[row + 1]])
    return DiscShape(*(float(value) for value in discs[row]))
