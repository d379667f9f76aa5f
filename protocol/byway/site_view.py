"""The site as a daemon describes it: obstacles and cells by layer, what moves, what is guarded."""

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any, TypeVar

import numpy as np
import numpy.typing as npt

from byway import frames, messages, obstacles
from byway.errors import BadReply, SenderFault
from byway.packed import Column, Expected, check_columns, read

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
        polygons: {id: array (n, 2)}, metres: outlines, those of boxes among them.
        discs: {id: (x, y, radius)}, metres.
        cells: Rectangles that do not overlap.
        holes: {id: arrays (m, 2)}, metres: of those polygons that have some.
        durable: What is acknowledged in it survives the daemon.
        decay_s: How long holds what a scan says; None: for ever.
    """

    unknown_blocks: bool
    outlines_only: bool
    polygons: Mapping[str, npt.NDArray[np.float64]]
    discs: Mapping[str, tuple[float, float, float]]
    cells: tuple[Cells, ...]
    holes: Mapping[str, tuple[npt.NDArray[np.float64], ...]] = field(default_factory=dict)
    durable: bool = False
    decay_s: float | None = None


@dataclass(frozen=True, slots=True, eq=False)
class TrackView:
    """
    An obstacle that moves, at the moment of the reply.

    Attributes:
        layer, id: Its name.
        pose: x_m, y_m, heading_rad of its body.
        velocity_mps, turn_rate_radps: How it moves.
        uncertainty_m, growth_mps: How far it may be from there, and how fast that grows.
        age_s: Since it was seen.
        outline_m: (n, 2), in the frame of its body.
        sweep_m: Outlines (n, 2) in the site: what is blocked for it.
    """

    layer: str
    id: str
    pose: tuple[float, float, float]
    velocity_mps: tuple[float, float]
    turn_rate_radps: float
    uncertainty_m: float
    growth_mps: float
    age_s: float
    outline_m: npt.NDArray[np.float64]
    sweep_m: tuple[npt.NDArray[np.float64], ...]


@dataclass(frozen=True, slots=True, eq=False)
class GuardedView:
    """
    A guarded route.

    Attributes:
        unit: Whose it is.
        progress_m: How far along it the unit is.
        state: "clear", "blocked", "unchecked".
        poses: (n, 3): x_m, y_m, heading_rad from start to goal.
        blocked: Where and by what, if it is.
    """

    unit: str
    progress_m: float
    state: str
    poses: npt.NDArray[np.float64]
    blocked: messages.BlockedIs | None


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
        tracks: What moves.
        guards: Routes that are watched, if they were asked for.
    """

    revision: int
    epoch: str
    origin_m: tuple[float, float]
    limits_m: tuple[float, float, float, float] | None
    layers: Mapping[str, LayerView]
    tracks: tuple[TrackView, ...] = ()
    guards: tuple[GuardedView, ...] = ()


def site_view(received: frames.Received) -> SiteView:
    """Return what a `site_is` says. Raises BadReply."""
    message = received.message
    if not isinstance(message, messages.SiteIs):
        raise BadReply(f"a {received.header.kind} where a site_is was due")
    try:
        check_columns(message.columns, received.packed, _expected(message))
        layers = _layers(message, received)
        tables = {name: read(column, received.packed) for name, column in message.columns.items()}
    except (SenderFault, KeyError) as fault:
        raise BadReply(f"the site cannot be read: {fault}") from fault
    return SiteView(
        message.revision,
        received.header.epoch,
        message.origin_m,
        message.limits_m,
        layers,
        tuple(_track(told, tables) for told in message.tracks),
        tuple(
            GuardedView(each.unit, each.progress_m, each.state, tables[each.column], each.blocked)
            for each in message.guards
        ),
    )


def _expected(message: messages.SiteIs) -> Expected:
    outlines = [name for track in message.tracks for name in (track.outline, *track.sweep)]
    return {
        **obstacles.shape_columns(
            sum(layer.polygons for layer in message.layers),
            sum(layer.discs for layer in message.layers),
            has_holes="rings" in message.columns,
        ),
        **{each.column: ("u1", (None, None)) for layer in message.layers for each in layer.cells},
        **dict.fromkeys(outlines, ("<f8", (None, 2))),
        **{guard.column: ("<f8", (None, 3)) for guard in message.guards},
    }


def _layers(message: messages.SiteIs, received: frames.Received) -> dict[str, LayerView]:
    packed = received.packed
    polygon_count = sum(layer.polygons for layer in message.layers)
    disc_count = sum(layer.discs for layer in message.layers)
    ids = _ids(message.columns["ids"], received, polygon_count + disc_count)
    polygons, discs = obstacles.shapes_in(message.columns, packed)
    polygons_left, discs_left = iter(polygons), iter(discs)
    polygon_ids, disc_ids = iter(ids[:polygon_count]), iter(ids[polygon_count:])
    found: dict[str, LayerView] = {}
    for layer in message.layers:
        rings = _take(layer.polygons, polygon_ids, polygons_left)
        found[layer.layer] = LayerView(
            layer.unknown_blocks,
            layer.outlines_only,
            {each: outline for each, (outline, *_) in rings.items()},
            _take(layer.discs, disc_ids, discs_left),
            tuple(
                Cells(cells.corner_m, cells.cell_m, read(message.columns[cells.column], packed))
                for cells in layer.cells
            ),
            {each: tuple(holes) for each, (_, *holes) in rings.items() if holes},
            layer.durable,
            layer.decay_s,
        )
    return found


def _ids(column: Column, received: frames.Received, count: int) -> list[str]:
    # An id may be there once in each layer, so not as in a change.
    joined = read(column, received.packed).tobytes().decode("utf-8", "replace")
    ids = joined.split("\n") if joined else []
    if len(ids) != count:
        raise BadReply(f"{len(ids)} ids for {count} obstacles")
    return ids


def _take(count: int, ids: Iterator[str], found: Iterator[Shape]) -> dict[str, Shape]:
    return {next(ids): next(found) for _ in range(count)}


def _track(told: messages.TrackIs, tables: Mapping[str, npt.NDArray[Any]]) -> TrackView:
    return TrackView(
        told.layer,
        told.id,
        told.pose,
        told.velocity_mps,
        told.turn_rate_radps,
        told.uncertainty_m,
        told.growth_mps,
        told.age_s,
        tables[told.outline],
        tuple(tables[name] for name in told.sweep),
    )
