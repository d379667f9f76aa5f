"""The site as a daemon describes it: obstacles and cells by layer."""

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import TypeVar

import numpy as np
import numpy.typing as npt

from byway import frames, messages, obstacles
from byway.errors import BadReply, SenderFault
from byway.packed import Column, check_columns, read

Shape = TypeVar("Shape")


@dataclass(frozen=True, slots=True, eq=False)
class Cells:
    """
    A rectangle of cells.

    Attributes:
        corner_m: Lower left corner of cells[0, 0].
        cell_m: Side of a cell.
        cells: uint8 (rows, columns): 0 free, 1 occupied, 2 unknown; row 0 at the lowest y.
    """

    corner_m: tuple[float, float]
    cell_m: float
    cells: npt.NDArray[np.uint8]


@dataclass(frozen=True, slots=True, eq=False)
class LayerView:
    """
    One layer.

    Attributes:
        unknown_blocks: Unknown cells, and ground that was never patched, count as occupied.
        outlines_only: Obstacles only, no cells; a replan may leave the layer out.
        polygons: {id: array (n, 2)}, metres.
        discs: {id: (x, y, radius)}, metres.
        cells: Rectangles that do not overlap.
    """

    unknown_blocks: bool
    outlines_only: bool
    polygons: Mapping[str, npt.NDArray[np.float64]]
    discs: Mapping[str, tuple[float, float, float]]
    cells: tuple[Cells, ...]


@dataclass(frozen=True, slots=True, eq=False)
class SiteView:
    """
    What a daemon knows of obstacles.

    Attributes:
        revision: Of the site.
        epoch: Of the daemon.
        origin_m: Of the daemon's own frame; all coordinates here are those of the sources.
        limits_m: x_min, y_min, x_max, y_max; outside is blocked. None: without limits.
        layers: By name.
    """

    revision: int
    epoch: str
    origin_m: tuple[float, float]
    limits_m: tuple[float, float, float, float] | None
    layers: Mapping[str, LayerView]


def site_view(received: frames.Received) -> SiteView:
    """Return what a `site_is` says. Raises BadReply."""
    message = received.message
    if not isinstance(message, messages.SiteIs):
        raise BadReply(f"a {received.header.kind} where a site_is was due")
    try:
        layers = _layers(message, received)
    except (SenderFault, KeyError) as fault:
        raise BadReply(f"the site cannot be read: {fault}") from fault
    return SiteView(
        message.revision, received.header.epoch, message.origin_m, message.limits_m, layers
    )


def _layers(message: messages.SiteIs, received: frames.Received) -> dict[str, LayerView]:
    packed = received.packed
    polygon_count = sum(layer.polygons for layer in message.layers)
    disc_count = sum(layer.discs for layer in message.layers)
    shapes_at = {
        "ids": ("u1", (None,)),
        "starts": ("<i8", (polygon_count + 1,)),
        "vertices_m": ("<f8", (None, 2)),
        "discs_m": ("<f8", (disc_count, 3)),
    }
    cells_at = {
        cells.column: ("u1", (None, None)) for layer in message.layers for cells in layer.cells
    }
    check_columns(message.columns, packed, {**shapes_at, **cells_at})
    ids = _ids(message.columns["ids"], received, polygon_count + disc_count)
    rings, discs = obstacles.shapes_in(message.columns, packed)
    rings_left, discs_left = iter(rings), iter(discs)
    polygon_ids, disc_ids = iter(ids[:polygon_count]), iter(ids[polygon_count:])
    return {
        layer.layer: LayerView(
            layer.unknown_blocks,
            layer.outlines_only,
            _take(layer.polygons, polygon_ids, rings_left),
            _take(layer.discs, disc_ids, discs_left),
            tuple(
                Cells(cells.corner_m, cells.cell_m, read(message.columns[cells.column], packed))
                for cells in layer.cells
            ),
        )
        for layer in message.layers
    }


def _ids(column: Column, received: frames.Received, count: int) -> list[str]:
    # An id may be there once in each layer, so not as in a change.
    joined = read(column, received.packed).tobytes().decode("utf-8", "replace")
    ids = joined.split("\n") if joined else []
    if len(ids) != count:
        raise BadReply(f"{len(ids)} ids for {count} obstacles")
    return ids


def _take(count: int, ids: Iterator[str], found: Iterator[Shape]) -> dict[str, Shape]:
    return {next(ids): next(found) for _ in range(count)}
