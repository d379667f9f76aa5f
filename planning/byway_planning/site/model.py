"""
The live site: obstacles and cells in layers, from which snapshots are published.

One owner (the surveyor, or a script) changes it; everybody else reads the snapshots. A change
is checked before it is made, so a refused one leaves the site as it was. Publishing recomputes
the tiles that changed and the distances around them, writes them to fresh blocks, and makes new
tables; the blocks of the revision before stay until `release_before` says that nobody reads it.
"""

import itertools
import math
from collections.abc import Iterator, Mapping

import numpy as np
import numpy.typing as npt

from byway_planning.site.layer import Layer
from byway_planning.site.memory import Memory
from byway_planning.site.movers import Movers
from byway_planning.site.patches import Patch
from byway_planning.site.places import overlaps_limits, tiles_in, tiles_of, touches_limits
from byway_planning.site.publishing import Publisher
from byway_planning.site.raster import changed_span_kernel
from byway_planning.site.records import Records
from byway_planning.site.scans import Seen, apply_marks_kernel, checked_scan, inside
from byway_planning.site.settings import LayerSettings, SiteSettings
from byway_planning.site.shapes import ID_BYTES_MAX, Limits, Shape, SiteError
from byway_planning.site.snapshot import Handle, Snapshot, handle_for
from byway_planning.site.tiles import Cells, Tile
from byway_planning.site.tracks import Track, piece_id


class SiteModel:
    """See the module text."""

    def __init__(self, settings: SiteSettings, memory: Memory | None = None) -> None:
        self.settings = settings
        self.memory = memory or Memory.private()
        self.revision = 0
        self._layers: dict[str, Layer] = {}
        self._records = Records()
        #: Obstacles by tile: all and only those that may touch the tile, outlines not.
        self._by_tile: dict[Tile, dict[tuple[int, str], Shape]] = {}
        self._movers = Movers()
        tables = {**self._records.tables, **self._movers.tables}
        self._publisher = Publisher(settings, self.memory, tables)
        #: What the newest snapshot does not show yet: tiles, and cells of layers in tiles.
        self._dirty: set[Tile] = set()
        self._dirty_cells: set[tuple[str, Tile]] = set()
        self._changed = True
        self._snapshot: Snapshot | None = None
        #: Boxes around what has changed since the newest snapshot, and since the one before it.
        self._boxes: list[Limits] = []
        self.changed_m: npt.NDArray[np.float64] = np.empty((0, 4))

    # -- changes ----------------------------------------------------------------------------

    def declare(self, name: str, settings: LayerSettings) -> None:
        """Make a layer, or do nothing when it is there with these settings."""
        self._check_id(name, "layer")
        layer = self._layers.get(name)
        if layer is not None:
            if layer.settings != settings:
                raise SiteError(
                    "layer_mismatch",
                    f"layer {name!r} exists with {layer.settings}, not {settings}",
                )
            return
        self._layers[name] = Layer(len(self._layers), settings, self.settings.tile_cells)
        self._changed = True
        if settings.unknown_blocks:
            self._boxes.append(self.settings.limits_m)
            rows, columns = self.settings.tiles
            self._dirty |= {(r, c) for r in range(rows) for c in range(columns)}

    def put(self, layer: str, obstacle_id: str, shape: Shape) -> None:
        """Add an obstacle to a layer, or replace the one of that id."""
        self._layer(layer)
        self._check_id(obstacle_id, "obstacle")
        if not touches_limits(self.settings, shape.box_m):
            raise SiteError(
                "outside_limits",
                f"obstacle {obstacle_id!r} spans {shape.box_m}, the site only "
                f"{self.settings.limits_m}",
            )
        self.drop(layer, obstacle_id)
        self._put(layer, obstacle_id, shape)

    def _put(self, layer: str, obstacle_id: str, shape: Shape) -> None:
        owner = self._layer(layer)
        self._drop(layer, obstacle_id)
        self._records.put(owner.index, obstacle_id, shape)
        self._changed = True
        self._boxes.append(shape.box_m)
        if not owner.settings.outlines_only:
            for tile in tiles_of(self.settings, shape):
                self._by_tile.setdefault(tile, {})[owner.index, obstacle_id] = shape
                self._dirty.add(tile)

    def drop(self, layer: str, obstacle_id: str) -> bool:
        """Remove an obstacle, moving or not; tell whether there was one."""
        self._layer(layer)
        mover = self._movers.forget(layer, obstacle_id)
        if mover is not None:
            for i in range(mover.pieces):
                self._drop(layer, piece_id(obstacle_id, i))
            self._changed = True
            return True
        return self._drop(layer, obstacle_id)

    def _drop(self, layer: str, obstacle_id: str) -> bool:
        owner = self._layer(layer)
        shape = self._records.drop(owner.index, obstacle_id)
        if shape is None:
            return False
        self._changed = True
        self._boxes.append(shape.box_m)
        if not owner.settings.outlines_only:
            for tile in tiles_of(self.settings, shape):
                here = self._by_tile[tile]
                del here[owner.index, obstacle_id]
                if not here:
                    del self._by_tile[tile]
                self._dirty.add(tile)
        return True

    def clear(self, layer: str) -> None:
        """Forget all obstacles and cells of a layer."""
        owner = self._layer(layer)
        for name in self._movers.of(layer):
            self.drop(layer, name)
        for name in self._records.names(owner.index):
            self.drop(layer, name)
        for tile in list(owner.cells):
            self._write(layer, owner, tile, owner.base())
        owner.forget_stamps()

    def patch(
        self,
        layer: str,
        corner_m: tuple[float, float],
        cell_m: float,
        cells: Cells,
        heading_rad: float = 0.0,
    ) -> None:
        """
        Overwrite a rectangle of cells.

        Args:
            corner_m: Corner of the patch: the lower left one before it is turned.
            cell_m: Side of a patch cell; a patch that does not fit the site's own cells is
                resampled: a cell of the site whose middle it covers takes the worst of what
                overlaps it, one whose middle it does not cover can only become occupied.
            cells: Shape (rows, columns), row 0 at the lowest y; 0 free, 1 occupied, 2 unknown.
            heading_rad: Of the rows; the patch is turned about its corner.

        Raises:
            SiteError: unknown_layer, outlines_only, bad_cells, too_large, not_finite or
                outside_limits (when all of it lies outside).
        """
        owner = self._with_cells(layer)
        patch = Patch(corner_m, cell_m, cells, heading_rad)
        if not overlaps_limits(self.settings, patch.box_m):
            raise SiteError(
                "outside_limits",
                f"the patch spans {patch.box_m}, the site only {self.settings.limits_m}",
            )
        for tile in tiles_in(self.settings, *patch.box_m):
            new = owner.cells_of(tile).copy()
            patch.write(new, self.settings.corner_m(tile), self.settings.cell_m)
            stamps = owner.stamps.get(tile)
            if stamps is not None:
                patch.unstamp(stamps, self.settings.corner_m(tile), self.settings.cell_m)
            self._write(layer, owner, tile, new)

    def scan(
        self,
        layer: str,
        origin: tuple[float, float, float],
        bearings_rad: npt.ArrayLike,
        ranges_m: npt.ArrayLike,
        range_m_max: float,
        *,
        range_m_min: float = 0.0,
        at_s: float = 0.0,
    ) -> None:
        """
        Free the cells along the beams of a range sensor, and fill those at their ends.

        Args:
            origin: x_m, y_m, heading_rad of the sensor.
            bearings_rad, ranges_m: Shape (n,). A range that is not below `range_m_max` met
                nothing; one below `range_m_min` says nothing.
            at_s: When it was measured, for layers that forget; a clock of the caller's.

        Raises:
            SiteError: unknown_layer, outlines_only, bad_scan, not_finite, too_large or
                outside_limits (when the sensor stands outside).
        """
        owner = self._with_cells(layer)
        directions, lengths = checked_scan(origin, bearings_rad, ranges_m, range_m_max, range_m_min)
        x, y, _ = origin
        if not touches_limits(self.settings, (x, y, x, y)):
            raise SiteError(
                "outside_limits",
                f"the sensor at {x, y} stands outside of the site, {self.settings.limits_m}",
            )
        s = self.settings
        lengths = inside(x, y, directions, lengths, s.limits_m, s.cell_m)
        corner_m = s.limits_m[:2]
        seen = Seen(x, y, directions, lengths, corner_m, s.cell_m, s.tile_cells, s.tiles)
        for tile, marks in zip(seen.tiles, seen.marks, strict=True):
            new = owner.cells_of(tile).copy()
            apply_marks_kernel(marks, new, owner.stamps_for(tile, at_s), at_s)
            self._write(layer, owner, tile, new)

    def track(self, layer: str, track_id: str, track: Track) -> None:
        """
        Add an obstacle that moves, or tell where the one of that id is now.

        It blocks what it may sweep in the `sweep_s` after its `at_s`, until it is carried.

        Raises:
            SiteError: unknown_layer, outlines_only, too_large (the id), or outside_limits (when
                it stays outside for that time).
        """
        self.track_all(layer, {track_id: track})

    def track_all(self, layer: str, tracks: Mapping[str, Track]) -> None:
        """Do so for several by their ids: all of them, or none where one is refused."""
        self._with_cells(layer)
        sweeps: dict[str, list[Shape]] = {}
        for track_id, track in tracks.items():
            self._check_id(track_id, "track")
            sweeps[track_id] = self._sweep(track, track.at_s)
            if not sweeps[track_id]:
                raise SiteError(
                    "outside_limits",
                    f"track {track_id!r} at {track.pose} stays outside of the site, "
                    f"{self.settings.limits_m}",
                    id=track_id,
                )
        for track_id, track in tracks.items():
            self.drop(layer, track_id)
            self._movers.take(layer, track_id, track)
            self._lay(layer, track_id, sweeps[track_id], track.at_s)
            self._changed = True

    def carry(self, now_s: float) -> None:
        """
        Carry tracks forward to an instant, and forget what was scanned too long ago.

        Afterwards all that a track may sweep from `now_s` to `now_s + sweep_s` is blocked. It
        may be called with every change: what was carried a moment ago stays as it is.
        """
        for (layer, track_id), track in self._movers.due(now_s, self.settings.carry_every_s):
            self._lay(layer, track_id, self._sweep(track, now_s), now_s)
        for name, owner in self._layers.items():
            for tile, cells in owner.faded(now_s):
                self._write(name, owner, tile, cells)

    def next_carry_s(self, now_s: float) -> float | None:
        """Return when there is something to carry or to forget, from `now_s` on; None for never."""
        due = [owner.next_due_s(now_s) for owner in self._layers.values()]
        due.append(self._movers.next_due_s(now_s, self.settings.carry_every_s))
        return min((each for each in due if each is not None), default=None)

    def tracks(self) -> Iterator[tuple[str, str, Track]]:
        """Yield (layer, id, track) of every obstacle that moves."""
        for (layer, track_id), track in self._movers.items():
            yield layer, track_id, track

    def _sweep(self, track: Track, now_s: float) -> list[Shape]:
        """What blocks until the track is carried again, at the latest, and `sweep_s` from then."""
        ahead_s = self.settings.sweep_s + 2.0 * self.settings.carry_every_s
        shapes = track.sweep(now_s, ahead_s)
        return [shape for shape in shapes if overlaps_limits(self.settings, shape.box_m)]

    def _lay(self, layer: str, track_id: str, pieces: list[Shape], now_s: float) -> None:
        """Put the pieces of a sweep from `now_s` on where those before lay."""
        for i, piece in enumerate(pieces):
            self._put(layer, piece_id(track_id, i), piece)
        for i in range(len(pieces), self._movers.laid(layer, track_id, len(pieces), now_s)):
            self._drop(layer, piece_id(track_id, i))

    # -- cells of a layer -------------------------------------------------------------------

    def _with_cells(self, name: str) -> Layer:
        owner = self._layer(name)
        if owner.settings.outlines_only:
            text = f"layer {name!r} holds outlines only: no cells, and nothing that moves"
            raise SiteError("outlines_only", text)
        return owner

    def _write(self, name: str, owner: Layer, tile: Tile, new: Cells) -> None:
        """Make these the cells of a tile, if they are others."""
        old = owner.cells_of(tile)
        r0, r1, c0, c1 = changed_span_kernel(old, new)
        if r0 < 0:
            return
        owner.keep(tile, new)
        self._dirty.add(tile)
        self._dirty_cells.add((name, tile))
        self._changed = True
        x, y = self.settings.corner_m(tile)
        cell = self.settings.cell_m
        self._boxes.append((x + c0 * cell, y + r0 * cell, x + (c1 + 1) * cell, y + (r1 + 1) * cell))

    # -- publishing -------------------------------------------------------------------------

    def publish(self) -> Snapshot:
        """
        Return the newest snapshot; its revision is one higher when anything changed.

        Raises:
            MemoryFull: When the changes do not fit; they stay pending.
        """
        if not self._changed and self._snapshot is not None:
            return self._snapshot
        self._movers.write({name: layer.index for name, layer in self._layers.items()})
        places = self._publisher.publish(
            self.revision + 1,
            self._dirty,
            self._content,
            {
                (self._layers[name].index, tile): self._layers[name].cells.get(tile)
                for name, tile in sorted(self._dirty_cells)
            },
        )
        self.revision += 1
        self._dirty.clear()
        self._dirty_cells.clear()
        self._changed = False
        self.changed_m = np.array(self._boxes, np.float64).reshape(-1, 4)
        self._boxes.clear()
        layers = {name: layer.settings for name, layer in self._layers.items()}
        handle = handle_for(self.revision, self.settings, layers, places)
        self._snapshot = Snapshot(self.memory.buffer, handle, self.settings)
        return self._snapshot

    def release_before(self, revision: int) -> None:
        """Give back the memory that only snapshots older than `revision` read."""
        self._publisher.release_before(revision)

    def _content(self, tile: Tile) -> tuple[list[Shape], Cells | None]:
        return list(self._by_tile.get(tile, {}).values()), self._blocked(tile)

    def _blocked(self, tile: Tile) -> Cells | None:
        """Blocked cells of a tile, over all rastered layers; None when there is none."""
        side = self.settings.tile_cells
        found: Cells | None = None
        for layer in self._layers.values():
            cells = layer.cells.get(tile)
            if cells is None:
                if not layer.settings.unknown_blocks:
                    continue
                blocked = np.ones((side, side), np.uint8)
            elif layer.settings.unknown_blocks:
                blocked = (cells != 0).astype(np.uint8)
            else:
                blocked = (cells == 1).astype(np.uint8)
            found = blocked if found is None else found | blocked
        return found if found is not None and found.any() else None

    # -- recovery ---------------------------------------------------------------------------

    @classmethod
    def recover(cls, memory: Memory, handle: Handle, in_use: list[Handle]) -> "SiteModel":
        """
        Go on from a published snapshot after its owner died.

        Args:
            memory: The shared memory, freshly opened.
            handle: The newest snapshot that was published.
            in_use: Snapshots that others still read, and whose memory must not be touched
                until `release_before` frees them.
        """
        snapshot = Snapshot.attach(memory, handle)
        model = cls(snapshot.settings, memory)
        for name, settings in snapshot.layers().items():
            model._layers[name] = Layer(len(model._layers), settings, model.settings.tile_cells)
        for layer, name, shape in snapshot.obstacles():
            model._put(layer, name, shape)
        for layer, name, track in snapshot.tracks():
            model._movers.take(layer, name, track)
            known = set(model._records.names(model._layers[layer].index))
            ids = (piece_id(name, i) for i in itertools.count())
            pieces = sum(1 for _ in itertools.takewhile(known.__contains__, ids))
            model._movers.laid(layer, name, pieces, -math.inf)
        for name, owner in model._layers.items():
            for corner, cells in snapshot.cells(name):
                # By its middle: a corner belongs to its neighbours as well.
                x, y = (c + snapshot.settings.tile_m / 2 for c in corner)
                tile = tiles_in(model.settings, x, y, x, y)[0]
                owner.cells[tile] = cells.copy()
            owner.lost_stamps = owner.settings.decay_s is not None and bool(owner.cells)
        others = [Snapshot.attach(memory, each) for each in in_use]
        model._publisher.adopt(snapshot, others, model._filled_tiles(), model._content)
        model.revision = snapshot.revision
        model._snapshot = snapshot
        model._dirty.clear()
        model._boxes.clear()
        model._changed = False
        return model

    def _filled_tiles(self) -> set[Tile]:
        if any(layer.settings.unknown_blocks for layer in self._layers.values()):
            return set(tiles_in(self.settings, *self.settings.limits_m))
        return set(self._by_tile).union(*(layer.cells for layer in self._layers.values()))

    # -- places -----------------------------------------------------------------------------

    def _layer(self, name: str) -> Layer:
        if name not in self._layers:
            known = ", ".join(sorted(self._layers)) or "none"
            raise SiteError("unknown_layer", f"there is no layer {name!r}; known: {known}")
        return self._layers[name]

    @staticmethod
    def _check_id(name: str, what: str) -> None:
        try:
            size = 0 if "\0" in name else len(name.encode())
        except UnicodeEncodeError:
            size = 0
        if not 0 < size <= ID_BYTES_MAX:
            raise SiteError(
                "too_large",
                f"the id of a {what} has 1 to {ID_BYTES_MAX} bytes of text without zeros, not "
                f"{name[:80]!r}",
            )
