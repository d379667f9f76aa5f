"""
The site as tables, for whoever asks what is in it: the body and columns of `site_is`.

Obstacles lie layer after layer in common columns, polygons and discs apart: `starts` and
`vertices_m`, `discs_m`, and `ids` with those of all polygons before those of all discs. Cells
of a layer are one column each, the smallest rectangle of whole tiles that holds them.
"""

from collections.abc import Mapping
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from byway import limits
from byway.obstacles import pack_ids
from byway.packed import pack
from byway_planning.site import PolygonShape, Shape, Snapshot, base_id
from byway_planning.site.tracks import PIECE
from bywayd.crew.skills import Refused
from bywayd.crew.watch import Watch

Box = tuple[float, float, float, float]
Cells = npt.NDArray[np.uint8]

_everywhere: Final[Box] = (-np.inf, -np.inf, np.inf, np.inf)
_free: Final = 0
_unknown: Final = 2


def describe(
    snapshot: Snapshot, question: Mapping[str, Any], now_s: float, watch: Watch
) -> tuple[dict[str, Any], bytes]:
    """
    Return the fields and the packed columns of `site_is`, in the coordinates of the sources.

    Args:
        question: The fields of `site`: `layers`, `box_m`, `cells`, `guards`.
        now_s: By the clock of the tracks. watch: the guarded routes.

    Raises:
        Refused: too_large, if the columns do not fit into one message.
    """
    ox, oy = snapshot.origin_m
    wanted = question["layers"]
    names = [name for name in snapshot.layers() if wanted is None or name in wanted]
    box_m = _own_box(question["box_m"], snapshot.origin_m)
    polygons, discs = _shapes_by_layer(snapshot, names, box_m)
    columns = _obstacle_columns(polygons, discs, snapshot.origin_m)
    layers: list[dict[str, Any]] = []
    for name in names:
        grid = _grid(snapshot, name, box_m) if question["cells"] else None
        cells = []
        if grid is not None:
            (x_m, y_m), columns[f"cells-{len(layers)}"] = grid
            cells.append(
                {
                    "column": f"cells-{len(layers)}",
                    "corner_m": [x_m + ox, y_m + oy],
                    "cell_m": snapshot.settings.cell_m,
                }
            )
        layers.append(
            {
                "layer": name,
                "unknown_blocks": snapshot.layers()[name].unknown_blocks,
                "outlines_only": snapshot.layers()[name].outlines_only,
                "decay_s": snapshot.layers()[name].decay_s,
                "polygons": len(polygons[name]),
                "discs": len(discs[name]),
                "cells": cells,
            }
        )
    moving = _told_tracks(snapshot, names, box_m, now_s, columns)
    guards = _told_guards(watch, columns) if question["guards"] else []
    _check_size(columns)
    placed, packed = pack(columns)
    x0, y0, x1, y1 = snapshot.settings.limits_m
    fields = {
        "revision": snapshot.revision,
        "origin_m": [ox, oy],
        "limits_m": [x0 + ox, y0 + oy, x1 + ox, y1 + oy],
        "layers": layers,
        "tracks": moving,
        "guards": guards,
        "columns": {name: column.model_dump() for name, column in placed.items()},
    }
    return fields, packed


def _told_tracks(
    snapshot: Snapshot,
    names: list[str],
    box_m: Box,
    now_s: float,
    columns: dict[str, npt.NDArray[Any]],
) -> list[dict[str, Any]]:
    """Return what moves, as it is now; outlines and sweeps become columns."""
    ox, oy = snapshot.origin_m
    pieces: dict[tuple[str, str], list[Shape]] = {}
    for layer, obstacle_id, shape in snapshot.obstacles():
        if PIECE in obstacle_id and layer in names and _touches(shape, box_m):
            pieces.setdefault((layer, base_id(obstacle_id)), []).append(shape)
    told: list[dict[str, Any]] = []
    for layer, track_id, track in snapshot.tracks():
        shapes = pieces.get((layer, track_id))
        if not shapes:
            continue
        number = len(told)
        columns[f"track-{number}"] = track.outline_m()
        sweep = [f"sweep-{number}-{i}" for i in range(len(shapes))]
        for name, shape in zip(sweep, shapes, strict=True):
            columns[name] = _outline_of(shape) + snapshot.origin_m
        x, y, heading = track.pose_at(now_s)
        turned = track.velocity_at(now_s)
        told.append(
            {
                "layer": layer,
                "id": track_id,
                "pose": [x + ox, y + oy, heading],
                "velocity_mps": list(turned),
                "turn_rate_radps": track.turn_rate_radps,
                "uncertainty_m": track.uncertainty_at(now_s),
                "growth_mps": track.growth_mps,
                "age_s": max(0.0, now_s - track.at_s),
                "outline": f"track-{number}",
                "sweep": sweep,
            }
        )
    return told


def _outline_of(shape: Shape) -> npt.NDArray[np.float64]:
    if isinstance(shape, PolygonShape):
        return shape.vertices_m
    angles = np.linspace(0.0, 2.0 * np.pi, 32, endpoint=False)
    ring = shape.radius_m * np.column_stack([np.cos(angles), np.sin(angles)])
    return np.array([shape.x_m, shape.y_m]) + ring


def _told_guards(watch: Watch, columns: dict[str, npt.NDArray[Any]]) -> list[dict[str, Any]]:
    told: list[dict[str, Any]] = []
    for unit, progress_m, blocked, poses in watch.told():
        column = f"guard-{len(told)}"
        columns[column] = poses
        told.append(
            {
                "unit": unit,
                "progress_m": progress_m,
                "state": "clear" if blocked is None else "blocked",
                "column": column,
                "blocked": None if blocked is None else _ahead(blocked, progress_m),
            }
        )
    return told


def _ahead(blocked: dict[str, Any], progress_m: float) -> dict[str, Any]:
    """As in an alert: from where the vehicle is. When it will be there is for the front to say."""
    told = {name: value for name, value in blocked.items() if name != "t_s"}
    return {**told, "distance_m": max(0.0, blocked["at_m"] - progress_m), "time_s": blocked["t_s"]}


def _own_box(box_m: Box | None, origin_m: tuple[float, float]) -> Box:
    if box_m is None:
        return _everywhere
    x0, y0, x1, y1 = box_m
    return (x0 - origin_m[0], y0 - origin_m[1], x1 - origin_m[0], y1 - origin_m[1])


_Polygons = dict[str, list[tuple[str, list[npt.NDArray[np.float64]]]]]
_Discs = dict[str, list[tuple[str, tuple[float, float, float]]]]


def _shapes_by_layer(snapshot: Snapshot, names: list[str], box_m: Box) -> tuple[_Polygons, _Discs]:
    polygons: _Polygons = {name: [] for name in names}
    discs: _Discs = {name: [] for name in names}
    for layer, obstacle_id, shape in snapshot.obstacles():
        if layer not in polygons or not _touches(shape, box_m):
            continue
        if PIECE in obstacle_id:
            continue  # told as a track
        if isinstance(shape, PolygonShape):
            polygons[layer].append((obstacle_id, shape.rings_m))
        else:
            discs[layer].append((obstacle_id, (shape.x_m, shape.y_m, shape.radius_m)))
    return polygons, discs


def _touches(shape: Shape, box_m: Box) -> bool:
    x0, y0, x1, y1 = shape.box_m
    return x1 >= box_m[0] and x0 <= box_m[2] and y1 >= box_m[1] and y0 <= box_m[3]


def _obstacle_columns(
    polygons: _Polygons, discs: _Discs, origin_m: tuple[float, float]
) -> dict[str, npt.NDArray[Any]]:
    outlines = [each for held in polygons.values() for each in held]
    rings = [ring for _, made_of in outlines for ring in made_of]
    circles = [each for held in discs.values() for each in held]
    starts = np.zeros(len(rings) + 1, np.int64)
    np.cumsum([len(ring) for ring in rings], out=starts[1:])
    vertices_m = np.concatenate(rings) if rings else np.empty((0, 2))
    discs_m = np.array([disc for _, disc in circles], np.float64).reshape(-1, 3)
    columns = {
        "ids": pack_ids(obstacle_id for obstacle_id, _ in [*outlines, *circles]),
        "starts": starts,
        "vertices_m": vertices_m + origin_m,
        "discs_m": discs_m + np.array([*origin_m, 0.0]),
    }
    if len(rings) > len(outlines):
        made_of_rings = np.zeros(len(outlines) + 1, np.int64)
        np.cumsum([len(made_of) for _, made_of in outlines], out=made_of_rings[1:])
        columns["rings"] = made_of_rings
    return columns


def _grid(snapshot: Snapshot, layer: str, box_m: Box) -> tuple[tuple[float, float], Cells] | None:
    """Return lower left corner and cells of a layer, as far as its tiles touch the box."""
    settings = snapshot.settings
    side_m = settings.tile_m
    tiles: dict[tuple[int, int], Cells] = {}
    for (x_m, y_m), cells in snapshot.cells(layer):
        if (
            x_m + side_m >= box_m[0]
            and x_m <= box_m[2]
            and y_m + side_m >= box_m[1]
            and y_m <= box_m[3]
        ):
            across = round((x_m - settings.limits_m[0]) / side_m)
            tiles[across, round((y_m - settings.limits_m[1]) / side_m)] = cells
    if not tiles:
        return None
    first_x, first_y = min(x for x, _ in tiles), min(y for _, y in tiles)
    last_x, last_y = max(x for x, _ in tiles), max(y for _, y in tiles)
    side = settings.tile_cells
    blank = _unknown if snapshot.layers()[layer].unknown_blocks else _free
    shape = ((last_y - first_y + 1) * side, (last_x - first_x + 1) * side)
    if shape[0] * shape[1] > limits.reply_bytes_max:
        raise _too_large(shape[0] * shape[1])
    grid = np.full(shape, blank, np.uint8)
    for (x, y), cells in tiles.items():
        row, column = (y - first_y) * side, (x - first_x) * side
        grid[row : row + side, column : column + side] = cells
    corner_m = (
        settings.limits_m[0] + first_x * side_m,
        settings.limits_m[1] + first_y * side_m,
    )
    return corner_m, grid


def _check_size(columns: Mapping[str, npt.NDArray[Any]]) -> None:
    size = sum(column.nbytes + 8 for column in columns.values())
    if size > limits.reply_bytes_max:
        raise _too_large(size)


def _too_large(size: int) -> Refused:
    return Refused(
        "too_large",
        f"the answer would have {size} bytes, the most is {limits.reply_bytes_max}: ask for "
        "fewer layers, a smaller box, or no cells",
        {"bytes": size, "bytes_max": limits.reply_bytes_max},
    )
