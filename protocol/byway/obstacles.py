"""
Polygons and discs as packed columns, in `put`, `replace_layer` and `site_is`.

Columns: `ids` (u1: the ids of the polygons, then of the discs, with line feeds between),
`starts` (<i8: polygon i has the vertices starts[i] to starts[i + 1]), `vertices_m` (<f8, two
columns), `discs_m` (<f8: x, y, radius). The daemon's front looks at their sizes only.
"""

import itertools
import re
from collections.abc import Iterable, Mapping, Sequence
from typing import Any, Final, TypeAlias

import numpy as np
import numpy.typing as npt

from byway import limits, messages
from byway.errors import BadGeometry, BadMessage, BadValue, TooLarge
from byway.packed import Bytes, Column, check_columns, check_coordinates, pack, read

#: What a caller may give: {id: [(x, y), ...]} or {id: array of shape (n, 2)}, and {id: (x, y, r)}.
Polygons: TypeAlias = Mapping[str, Sequence[Sequence[float]] | npt.NDArray[Any]]
Discs: TypeAlias = Mapping[str, Sequence[float] | npt.NDArray[Any]]

#: The fields `polygons`, `discs` and `columns` of a body.
Fields: TypeAlias = dict[str, Any]

_NAME: Final = re.compile(limits.name_pattern)


class Shapes:
    """
    Obstacles by id.

    Attributes:
        polygons: {id: array (n, 2)}, metres.
        discs: {id: (x, y, radius)}, metres.
    """

    __slots__ = ("discs", "polygons")

    def __init__(
        self,
        polygons: dict[str, npt.NDArray[np.float64]],
        discs: dict[str, tuple[float, float, float]],
    ) -> None:
        self.polygons = polygons
        self.discs = discs


def shapes(polygons: Polygons | None, discs: Discs | None) -> Shapes:
    """
    Check what a caller gives, and copy it.

    Raises:
        BadValue: An id that is no name, one id twice, a value that is no finite number.
        BadGeometry: A polygon that is not n x 2, a disc that is not three numbers.
    """
    rings: dict[str, npt.NDArray[np.float64]] = {}
    circles: dict[str, tuple[float, float, float]] = {}
    for obstacle_id, ring in (polygons or {}).items():
        rings[check_id(obstacle_id)] = _numbers(obstacle_id, ring, (-1, 2))
    for obstacle_id, disc in (discs or {}).items():
        if check_id(obstacle_id) in rings:
            raise BadValue(f"{obstacle_id} is a polygon and a disc", {"id": obstacle_id})
        x_m, y_m, radius_m = _numbers(obstacle_id, disc, (3,)).tolist()
        circles[obstacle_id] = (x_m, y_m, radius_m)
    return Shapes(rings, circles)


def check_id(obstacle_id: object) -> str:
    """Return an id if it is a name. Raises BadValue."""
    if not is_id(obstacle_id):
        raise BadValue(
            f"{str(obstacle_id)[:80]!r} is no id: 1 to {limits.name_chars_max} letters, digits "
            "and _.:/#-, beginning with a letter or digit",
            {"id": str(obstacle_id)[:80]},
        )
    return str(obstacle_id)


def is_id(name: object) -> bool:
    """Whether this is a name: of an obstacle, a layer, a unit, a client."""
    return isinstance(name, str) and _NAME.fullmatch(name) is not None


def _numbers(obstacle_id: str, values: object, shape: tuple[int, ...]) -> npt.NDArray[np.float64]:
    try:
        array = np.array(values, np.float64)
    except (TypeError, ValueError):
        array = np.empty(0)
    fits = array.ndim == len(shape) and array.size and array.shape[-1] == shape[-1]
    if not fits:
        wanted = "three numbers x, y, radius" if shape == (3,) else "a list of points (x, y)"
        raise BadGeometry(f"{obstacle_id} must be {wanted}", {"id": obstacle_id})
    check_coordinates(obstacle_id, array)
    return array


def pack_shapes(found: Shapes) -> tuple[Fields, bytes]:
    """
    Return the fields `polygons`, `discs`, `columns` of a body, and the packed frame.

    Raises:
        TooLarge: More obstacles or bytes than one change may have.
    """
    count = len(found.polygons) + len(found.discs)
    if count > limits.obstacles_max:
        raise TooLarge(
            f"{count} obstacles in one change, the most is {limits.obstacles_max}",
            {"obstacles": count, "obstacles_max": limits.obstacles_max},
        )
    rings = list(found.polygons.values())
    starts = np.zeros(len(rings) + 1, np.int64)
    np.cumsum([len(ring) for ring in rings], out=starts[1:])
    columns, packed = pack(
        {
            "ids": pack_ids([*found.polygons, *found.discs]),
            "starts": starts,
            "vertices_m": np.concatenate(rings) if rings else np.empty((0, 2)),
            "discs_m": np.array(list(found.discs.values()), np.float64).reshape(-1, 3),
        }
    )
    check_packed_size("obstacles", len(packed))
    return {"polygons": len(rings), "discs": len(found.discs), "columns": columns}, packed


def check_packed_size(what: str, size_bytes: int) -> None:
    """Raise TooLarge if something does not fit into one change."""
    if size_bytes > limits.packed_bytes_max:
        raise TooLarge(
            f"the {what} take {size_bytes} bytes, the most is {limits.packed_bytes_max}",
            {"bytes": size_bytes, "bytes_max": limits.packed_bytes_max},
        )


def pack_ids(ids: Iterable[str]) -> npt.NDArray[np.uint8]:
    """Return the column `ids`."""
    return np.frombuffer("\n".join(ids).encode(), np.uint8)


def check(message: messages.Put | messages.ReplaceLayer, packed: Bytes) -> None:
    """Check the sizes of the columns against the counts; raises BadMessage or TooLarge."""
    count = message.polygons + message.discs
    if count > limits.obstacles_max:
        raise TooLarge(
            f"{count} obstacles in one change, the most is {limits.obstacles_max}",
            {"obstacles": count, "obstacles_max": limits.obstacles_max},
        )
    check_columns(
        message.columns,
        packed,
        {
            "ids": ("u1", (None,)),
            "starts": ("<i8", (message.polygons + 1,)),
            "vertices_m": ("<f8", (None, 2)),
            "discs_m": ("<f8", (message.discs, 3)),
        },
    )


def ids_of(columns: Mapping[str, Column], packed: Bytes, count: int) -> list[str]:
    """
    Return the ids: those of the polygons, then those of the discs.

    Raises:
        BadMessage: There are more or fewer than `count`.
        BadValue: One is no name, or is there twice.
    """
    joined = read(columns["ids"], packed).tobytes()
    ids = joined.decode("utf-8", "replace").split("\n") if joined else []
    if len(ids) != count:
        raise BadMessage(f"{len(ids)} ids for {count} obstacles", {"field": "columns.ids"})
    for obstacle_id in ids:
        check_id(obstacle_id)
    if len(set(ids)) != count:
        raise BadValue("one id is there twice", {"field": "columns.ids"})
    return ids


def unpack_shapes(message: messages.Put | messages.ReplaceLayer, packed: Bytes) -> Shapes:
    """
    Return the obstacles of a change that came through the door, as views of its frame.

    Whether a polygon crosses itself is for the site to say.

    Raises:
        BadMessage, BadValue, OutsideLimits: If the columns contradict each other, or have ids
            or numbers that cannot be meant.
    """
    ids = ids_of(message.columns, packed, message.polygons + message.discs)
    rings, discs = shapes_in(message.columns, packed)
    return Shapes(
        dict(zip(ids[: message.polygons], rings, strict=True)),
        dict(zip(ids[message.polygons :], discs, strict=True)),
    )


def shapes_in(
    columns: Mapping[str, Column], packed: Bytes
) -> tuple[list[npt.NDArray[np.float64]], list[tuple[float, float, float]]]:
    """Return polygons (views of the frame) and discs in their order; see `unpack_shapes`."""
    starts = read(columns["starts"], packed)
    vertices_m = read(columns["vertices_m"], packed)
    discs_m = read(columns["discs_m"], packed)
    if starts[0] != 0 or starts[-1] != len(vertices_m) or (starts[1:] < starts[:-1]).any():
        raise BadMessage(
            "starts must rise from 0 to the number of vertices", {"field": "columns.starts"}
        )
    check_coordinates("vertices_m", vertices_m)
    check_coordinates("discs_m", discs_m)
    bounds = starts.tolist()
    rings = [vertices_m[begin:end] for begin, end in itertools.pairwise(bounds)]
    return rings, [(x_m, y_m, radius_m) for x_m, y_m, radius_m in discs_m.tolist()]
