"""
One revision of a site, immutable, readable by any process that maps its memory.

A snapshot is a handful of tables in `Memory`; its *handle* says where they are, in plain
numbers, and is all that travels between processes. Views on the tables are made on demand and
kept; nothing is copied but the few outlines that a request may leave out.
"""

from collections.abc import Hashable, Iterator, Mapping
from dataclasses import fields
from typing import Any, Final, cast

import numpy as np
import numpy.typing as npt

from byway_planning.site.edges import polygon_items
from byway_planning.site.memory import Memory
from byway_planning.site.movers import TRACK_COLUMNS, track_from
from byway_planning.site.records import NAME, NO_DISC, NOWHERE, shape_from
from byway_planning.site.scene import FAR_PER_TILE, Scene, field_block_floats
from byway_planning.site.settings import LayerSettings, SiteSettings
from byway_planning.site.shapes import Shape
from byway_planning.site.solids import Solids
from byway_planning.site.tracks import Track

Handle = dict[str, Any]
Array = npt.NDArray[Any]

#: Name, type and number of columns of every table of a snapshot (0: one-dimensional).
TABLES: Final[dict[str, tuple[npt.DTypeLike, int]]] = {
    "field_of": (np.int64, 0),
    "edges_of": (np.int64, 0),
    "cells_of": (np.int64, 0),
    "far_m": (np.float32, 0),
    "vertices": (np.float64, 2),
    "starts": (np.int64, 0),
    "boxes": (np.float64, 4),
    "polygon_layers": (np.int32, 0),
    "polygon_names": (NAME, 0),
    "discs": (np.float64, 3),
    "disc_layers": (np.int32, 0),
    "disc_names": (NAME, 0),
    "tracks": (np.float64, TRACK_COLUMNS),
    "track_names": (NAME, 0),
    "track_corners": (np.float64, 2),  # of their outlines, in their own frames
    "layer_cells": (np.int64, 3),  # layer (-1: free row), tile, offset of its tile_cells^2 cells
}


class Snapshot:
    """One revision of a site; see the module text."""

    def __init__(
        self, buffer: npt.NDArray[np.uint8], handle: Handle, settings: SiteSettings | None = None
    ) -> None:
        self._buffer = buffer
        self.handle = handle
        self.revision: int = handle["revision"]
        self.settings = settings or _settings_from(handle["settings"])
        self._layers: dict[str, LayerSettings] = {
            name: LayerSettings(unknown, outlines, decay_s)
            for name, unknown, outlines, decay_s in handle["layers"]
        }
        self._names: list[str] = list(self._layers)
        #: What others derive from this snapshot and want to find again; dies with it.
        self.kept: dict[Hashable, object] = {}
        self._views: dict[str, Array] = {}
        self._scenes: dict[frozenset[str], Scene] = {}
        self._solids: dict[frozenset[str], Solids] = {}

    @classmethod
    def attach(cls, memory: Memory, handle: Handle) -> "Snapshot":
        """Return the snapshot that a handle names, in memory of this or another process."""
        return cls(memory.buffer, handle)

    @property
    def origin_m(self) -> tuple[float, float]:
        return self.settings.origin_m

    def layers(self) -> dict[str, LayerSettings]:
        return dict(self._layers)

    def table(self, name: str) -> Array:
        """Return one of TABLES as a read-only view."""
        view = self._views.get(name)
        if view is None:
            dtype, columns = TABLES[name]
            offset, rows = self.handle["tables"][name]
            size = np.dtype(dtype).itemsize * rows * max(columns, 1)
            view = self._buffer[offset : offset + size].view(dtype)
            if columns:
                view = view.reshape(rows, columns)
            view.flags.writeable = False
            self._views[name] = view
        return view

    def obstacles(self) -> Iterator[tuple[str, str, Shape]]:
        """Yield (layer, id, shape) of every obstacle."""
        for kind in ("polygon", "disc"):
            for row, layer in enumerate(self.table(f"{kind}_layers")):
                if layer >= 0:
                    yield self._names[layer], self.name_of(kind, row)[1], self._shape(kind, row)

    def name_of(self, kind: str, row: int) -> tuple[str, str]:
        """Return (layer, id) of the polygon or disc in a row of `Solids`."""
        layer = int(self.table(f"{kind}_layers")[row])
        return self._names[layer], bytes(self.table(f"{kind}_names")[row]).decode()

    def layer_of_cell(self, number: int) -> str:
        """Return a layer in which a cell is blocked: its row times all columns, plus its column."""
        side = self.settings.tile_cells
        row, column = divmod(number, self.settings.tiles[1] * side)
        tile = (row // side) * self.settings.tiles[1] + column // side
        for layer, of_tile, offset in self.table("layer_cells").tolist():
            if layer < 0 or of_tile != tile:
                continue
            cell = int(self._buffer[offset + row % side * side + column % side])
            name: str = self._names[layer]
            if cell == 1 or (cell and self._layers[name].unknown_blocks):
                return name
        # Ground that nobody has looked at has no cells at all.
        return next((n for n, layer in self._layers.items() if layer.unknown_blocks), "")

    def _shape(self, kind: str, row: int) -> Shape:
        return shape_from(
            kind, row, self.table("vertices"), self.table("starts"), self.table("discs")
        )

    def tracks(self) -> Iterator[tuple[str, str, Track]]:
        """Yield (layer, id, track) of every obstacle that moves."""
        rows = self.table("tracks")
        names, corners = self.table("track_names"), self.table("track_corners")
        for row, name in zip(rows, names, strict=True):
            layer, track = track_from(row, corners)
            yield self._names[layer], bytes(name).decode(), track

    def cells(self, layer: str) -> Iterator[tuple[tuple[float, float], npt.NDArray[np.uint8]]]:
        """Yield (lower left corner, cells (n, n)) of every tile that a layer has cells in."""
        index = self._names.index(layer)
        side = self.settings.tile_cells
        columns = self.settings.tiles[1]
        table = self.table("layer_cells")
        for tile, offset in sorted(table[table[:, 0] == index, 1:].tolist()):
            row, column = divmod(tile, columns)
            corner = (
                self.settings.limits_m[0] + column * self.settings.tile_m,
                self.settings.limits_m[1] + row * self.settings.tile_m,
            )
            cells = self._buffer[offset : offset + side * side].reshape(side, side)
            cells.flags.writeable = False
            yield corner, cells

    def table_blocks(self) -> dict[str, tuple[int, int]]:
        """Return offset and bytes of every table."""
        found = {}
        for name, (offset, rows) in self.handle["tables"].items():
            dtype, columns = TABLES[name]
            # An empty table has a block as well.
            found[name] = offset, max(np.dtype(dtype).itemsize * rows * max(columns, 1), 1)
        return found

    def blocks(self) -> dict[int, int]:
        """Return offset and bytes of every block of memory that this snapshot reads."""
        s = self.settings
        found = dict(self.table_blocks().values())
        field_bytes = 4 * field_block_floats(s)
        found |= {4 * int(at): field_bytes for at in self.table("field_of") if at >= 0}
        words = self._buffer[: len(self._buffer) // 8 * 8].view(np.int64)
        buckets = s.bucket_side**2
        for at in self.table("edges_of"):
            if at >= 0:
                found[8 * int(at)] = 8 * (2 * buckets + 1 + 5 * int(words[at + buckets]))
        cells_bytes = s.tile_cells**2
        found |= {int(at): cells_bytes for at in self.table("cells_of") if at >= 0}
        found |= {int(at): cells_bytes for layer, _, at in self.table("layer_cells") if layer >= 0}
        return found

    def _check_left_out(self, left_out: frozenset[str]) -> None:
        for name in left_out:
            if name in self._layers and not self._layers[name].outlines_only:
                raise ValueError(
                    f"layer {name!r} is part of the raster and cannot be left out of a replan; "
                    f"only layers of outlines can"
                )

    def scene(self, left_out: frozenset[str] = frozenset()) -> Scene:
        """
        Return the arrays that a search reads.

        Args:
            left_out: Layers that do not count; unknown names are fine (nothing to leave out).

        Raises:
            ValueError: If a layer is not of outlines only.
        """
        if left_out not in self._scenes:
            self._check_left_out(left_out)
            self._scenes[left_out] = self._make_scene(left_out)
        return self._scenes[left_out]

    def _make_scene(self, left_out: frozenset[str]) -> Scene:
        s = self.settings
        rows, columns = s.tiles
        items, starts, discs = self._outlines(left_out)
        words = self._buffer[: len(self._buffer) // 8 * 8]
        floats, wholes, numbers = words.view(np.float32), words.view(np.int64), words.view(float)
        for view in (floats, wholes, numbers):
            view.flags.writeable = False
        x0, y0, x1, y1 = s.limits_m
        return Scene(
            *(s.cell_m, s.tile_cells, x0, y0, x0, y0, x1, y1),
            *(s.reach_cells * s.cell_m, s.room_cells, s.bucket_side),
            self.table("field_of").reshape(rows, columns),
            self.table("edges_of").reshape(rows, columns),
            *(floats, wholes, numbers),
            self.table("far_m").reshape(rows * FAR_PER_TILE, columns * FAR_PER_TILE),
            *(items, starts, discs),
        )

    def _outlines(self, left_out: frozenset[str]) -> tuple[Array, Array, Array]:
        items: list[Array] = []
        starts, discs = [0], []
        wanted = [
            i
            for i, name in enumerate(self._names)
            if self._layers[name].outlines_only and name not in left_out
        ]
        for kind in ("polygon", "disc"):
            for row in np.nonzero(np.isin(self.table(f"{kind}_layers"), wanted))[0]:
                if kind == "polygon":  # checked when it was put
                    first, last = self.table("starts")[row : row + 2]
                    ring = self.table("vertices")[first:last]
                    block = polygon_items(ring)
                    middle = (ring.min(axis=0) + ring.max(axis=0)) / 2
                    radius = float(np.hypot(*(ring - middle).T).max())
                else:
                    *middle, radius = self.table("discs")[row]
                    block = np.array([[*middle, *middle, radius]])
                discs.append((middle[0], middle[1], radius))
                items.append(block)
                starts.append(starts[-1] + len(block))
        tables = (
            np.concatenate(items) if items else np.zeros((0, 5)),
            np.array(starts, np.int64),
            np.array(discs, float).reshape(-1, 3),
        )
        for table in tables:
            table.flags.writeable = False
        return tables

    def solids(self, left_out: frozenset[str] = frozenset()) -> Solids:
        """
        Return the obstacles themselves, for the exact check.

        Row i of its polygons and discs is row i of `name_of`. Arguments as in `scene`.
        """
        if left_out not in self._solids:
            self._check_left_out(left_out)
            s = self.settings
            x0, y0, x1, y1 = s.limits_m
            boxes, discs = self.table("boxes"), self.table("discs")
            gone = [i for i, name in enumerate(self._names) if name in left_out]
            if gone:
                boxes, discs = boxes.copy(), discs.copy()
                boxes[np.isin(self.table("polygon_layers"), gone)] = NOWHERE
                discs[np.isin(self.table("disc_layers"), gone)] = NO_DISC
                boxes.flags.writeable = discs.flags.writeable = False
            memory = self._buffer.view()
            memory.flags.writeable = False
            self._solids[left_out] = Solids(
                self.table("vertices"), self.table("starts"), boxes, discs, memory,
                self.table("cells_of").reshape(s.tiles), s.cell_m, s.tile_cells, x0, y0,
                x0, y0, x1, y1,
            )  # fmt: skip
        return self._solids[left_out]


def _settings_from(told: Mapping[str, Any]) -> SiteSettings:
    limits_m, origin_m = tuple(told["limits_m"]), tuple(told["origin_m"])
    return SiteSettings(**{**told, "limits_m": limits_m, "origin_m": origin_m})


def handle_for(
    revision: int,
    settings: SiteSettings,
    layers: Mapping[str, LayerSettings],
    tables: dict[str, tuple[int, int]],
) -> Handle:
    """Return the handle of a snapshot: plain numbers and texts only."""
    return cast(
        Handle,
        {
            "revision": revision,
            "settings": {field.name: getattr(settings, field.name) for field in fields(settings)},
            "layers": [
                [name, layer.unknown_blocks, layer.outlines_only, layer.decay_s]
                for name, layer in layers.items()
            ],
            "tables": {name: list(place) for name, place in tables.items()},
        },
    )
