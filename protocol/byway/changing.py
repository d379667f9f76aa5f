"""What a caller says about the site, made into changes; what cannot be meant is refused here."""

from collections.abc import Iterable, Sequence
from typing import Any, Literal, TypeAlias, TypedDict

import numpy as np
import numpy.typing as npt

from byway import frames, limits, messages, obstacles, scans, tracks
from byway.errors import BadValue
from byway.packed import Bytes, pack

#: A change and its packed columns.
Made: TypeAlias = tuple[messages.AnyChange, Bytes]


class LayerSettings(TypedDict, total=False):
    """
    What a layer is and how it is looked after; what is left out stays as it is.

    Keys:
        lease_s: Nobody else can have the layer until its source has been silent for so long.
        unknown_blocks: Unknown cells, and ground that was never patched, count as occupied.
        outlines_only: Obstacles only, no cells; replans may leave the layer out.
        durable: What is acknowledged in it survives the daemon.
        expected_period_s: A change is expected so often.
        when_stale: What becomes of it when none comes: "ignore", "report" (an event, and a mark
            in the health record), or "refuse": replans that depend on it as well.
        decay_s: How long holds what a scan says; for ever if left out.
    """

    lease_s: float | None
    unknown_blocks: bool | None
    outlines_only: bool | None
    durable: bool | None
    expected_period_s: float | None
    when_stale: Literal["ignore", "report", "refuse"] | None
    decay_s: float | None


def floats(field: str, values: Iterable[float]) -> list[float]:
    """Return plain floats, of numpy's or other numbers. Raises BadValue."""
    try:
        return [float(value) for value in values]
    except (TypeError, ValueError) as fault:
        raise BadValue(f"{field} must be numbers, not {values!r:.80}", {"field": field}) from fault


def claim(layer: str, settings: LayerSettings) -> list[Made]:
    """See `Client.claim`."""
    return [(frames.build(messages.Claim, {"layer": layer, **settings}), b"")]


def replace_layer(
    layer: str,
    polygons: obstacles.Polygons | None,
    discs: obstacles.Discs | None,
    boxes: obstacles.Boxes | None,
    expires_in_s: float | None,
    settings: LayerSettings,
) -> list[Made]:
    """See `Client.replace_layer`."""
    fields, packed = obstacles.pack_shapes(obstacles.shapes(polygons, discs, boxes))
    told = {"layer": layer, "expires_in_s": expires_in_s, **settings, **fields}
    return [(frames.build(messages.ReplaceLayer, told), packed)]


def put(
    layer: str,
    polygons: obstacles.Polygons | None,
    discs: obstacles.Discs | None,
    boxes: obstacles.Boxes | None,
    expires_in_s: float | None,
) -> list[Made]:
    """See `Client.put`."""
    fields, packed = obstacles.pack_shapes(obstacles.shapes(polygons, discs, boxes))
    told = {"layer": layer, "expires_in_s": expires_in_s, **fields}
    return [(frames.build(messages.Put, told), packed)]


def drop(layer: str, ids: Iterable[str]) -> list[Made]:
    """See `Client.drop`."""
    names = list(ids)
    pieces = [
        names[first : first + limits.drop_ids_max]
        for first in range(0, max(1, len(names)), limits.drop_ids_max)
    ]
    return [(frames.build(messages.Drop, {"layer": layer, "ids": some}), b"") for some in pieces]


def patch(
    layer: str,
    corner_m: Sequence[float],
    cell_m: float,
    cells: npt.NDArray[Any],
    heading_rad: float,
) -> list[Made]:
    """See `Client.patch`."""
    given = np.asarray(cells)
    if given.dtype != np.uint8 or given.ndim != 2:
        raise BadValue(
            f"cells must be uint8 (rows, columns), not {given.dtype} in {given.ndim} axes",
            {"field": "cells"},
        )
    obstacles.check_packed_size("cells", given.size)
    columns, packed = pack({"cells": given})
    fields = {
        "layer": layer,
        "corner_m": floats("corner_m", corner_m),
        "cell_m": cell_m,
        "heading_rad": heading_rad,
        "columns": columns,
    }
    return [(frames.build(messages.Patch, fields), packed)]


def scan(
    layer: str,
    origin: Sequence[float],
    bearings_rad: scans.Numbers,
    ranges_m: scans.Numbers,
    range_m_max: float,
    range_m_min: float,
    age_s: float,
) -> list[Made]:
    """See `Client.scan`."""
    columns, packed = scans.pack_scan(bearings_rad, ranges_m)
    fields = {
        "layer": layer,
        "origin": floats("origin", origin),
        "range_m_max": range_m_max,
        "range_m_min": range_m_min,
        "age_s": age_s,
        "columns": columns,
    }
    message = frames.build(messages.Scan, fields)
    scans.check(message, packed)
    return [(message, packed)]


def track(layer: str, found: tracks.Tracks, age_s: float, expires_in_s: float | None) -> list[Made]:
    """See `Client.track`."""
    fields, packed = tracks.pack_tracks(found)
    told = {"layer": layer, "age_s": age_s, "expires_in_s": expires_in_s, **fields}
    return [(frames.build(messages.Track, told), packed)]
