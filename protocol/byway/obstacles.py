"""
Polygons, discs and boxes as packed columns, in `put`, `replace_layer` and `site_is`.

Columns: `ids` (u1: the ids of the polygons, then of the discs, then of the boxes, with line feeds
between), `starts` (<i8: ring i has the vertices starts[i] to starts[i + 1]), `vertices_m` (<f8, two
columns), `discs_m` (<f8: x, y, radius); `rings` (<i8: polygon i has the rings rings[i] to
rings[i + 1]) only where a polygon has holes, and `boxes_m` (<f8: x, y, heading, length, width) only
where there are boxes. The daemon's front looks at their sizes only.
"""

import itertools
import re
from collections.abc import Iterable, Mapping, Sequence
from typing import Any, Final, TypeAlias

import numpy as np
import numpy.typing as npt

from byway import limits, messages
from byway.errors import BadGeometry, BadMessage, BadValue, TooLarge
from byway.packed import Bytes, Column, Expected, check_columns, check_coordinates, pack, read

Ring: TypeAlias = npt.NDArray[np.float64]
Disc: TypeAlias = tuple[float, float, float]
Box: TypeAlias = tuple[float, float, float, float, float]

_Points: TypeAlias = Sequence[Sequence[float]] | npt.NDArray[Any]
#: What a caller may give: {id: [(x, y), ...]}, {id: array of shape (n, 2)}, or
#: {id: {"outline": ..., "holes": [...]}} of such; {id: (x, y, r)}; {id: (x, y, heading, l, w)}.
Polygons: TypeAlias = Mapping[str, _Points | Mapping[str, Any]]
Discs: TypeAlias = Mapping[str, Sequence[float] | npt.NDArray[Any]]
Boxes: TypeAlias = Mapping[str, Sequence[float] | npt.NDArray[Any]]

#: The fields `polygons`, `discs`, `boxes` and `columns` of a body.
Fields: TypeAlias = dict[str, Any]

_NAME: Final = re.compile(limits.name_pattern)


class Shapes:
    """
    Obstacles by id. An id is in one of the first, second and last at most.

    Attributes:
        polygons: {id: array (n, 2)}, metres: outlines.
        discs: {id: (x, y, radius)}, metres.
        holes: {id: arrays (m, 2)}, metres: only of polygons that have some.
        boxes: {id: (x, y, heading, length, width)} of the middle, metres and radians.
    """

    __slots__ = ("boxes", "discs", "holes", "polygons")

    def __init__(
        self,
        polygons: dict[str, Ring],
        discs: dict[str, Disc],
        holes: dict[str, tuple[Ring, ...]] | None = None,
        boxes: dict[str, Box] | None = None,
    ) -> None:
        self.polygons = polygons
        self.discs = discs
        self.holes = {} if holes is None else holes
        self.boxes = {} if boxes is None else boxes

    def __len__(self) -> int:
        return len(self.polygons) + len(self.discs) + len(self.boxes)


# -- what a caller gives --------------------------------------------------------------------------


def shapes(polygons: Polygons | None, discs: Discs | None, boxes: Boxes | None = None) -> Shapes:
    """
    Check what a caller gives, and copy it.

    Raises:
        BadValue: An id that is no name, one id twice, a value that is no finite number.
        BadGeometry: A polygon or hole that is not n x 2, a disc that is not three numbers, a box
            that is not five.
    """
    found = Shapes({}, {})
    taken: dict[str, str] = {}
    for what, given in (("polygon", polygons), ("disc", discs), ("box", boxes)):
        for obstacle_id, shape in (given or {}).items():
            check_id(obstacle_id)
            if (other := taken.setdefault(obstacle_id, what)) != what:
                raise BadValue(f"{obstacle_id} is a {other} and a {what}", {"id": obstacle_id})
            _take(found, what, obstacle_id, shape)
    return found


def _take(found: Shapes, what: str, obstacle_id: str, shape: Any) -> None:
    if what == "disc":
        x_m, y_m, radius_m = numbers(obstacle_id, shape, "x, y, radius").tolist()
        found.discs[obstacle_id] = (x_m, y_m, radius_m)
    elif what == "box":
        told = numbers(obstacle_id, shape, "x, y, heading, length, width").tolist()
        if abs(told[2]) > limits.heading_rad_max:
            raise BadValue(f"{obstacle_id} has a heading of {told[2]:g} rad", {"id": obstacle_id})
        if min(told[3:]) <= 0.0:
            raise BadGeometry(f"{obstacle_id} has no length or no width", {"id": obstacle_id})
        found.boxes[obstacle_id] = (told[0], told[1], told[2], told[3], told[4])
    elif isinstance(shape, Mapping):
        if "outline" not in shape or not shape.keys() <= {"outline", "holes"}:
            raise BadGeometry(
                f"{obstacle_id} must have an outline, and perhaps holes", {"id": obstacle_id}
            )
        found.polygons[obstacle_id] = points(obstacle_id, shape["outline"])
        holes = tuple(points(obstacle_id, hole) for hole in shape.get("holes") or ())
        if holes:
            found.holes[obstacle_id] = holes
    else:
        found.polygons[obstacle_id] = points(obstacle_id, shape)


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


def points(obstacle_id: str, values: object) -> Ring:
    """Return a ring (n, 2) as a copy. Raises BadGeometry, BadValue, OutsideLimits."""
    array = _floats(values)
    if array.ndim != 2 or not array.size or array.shape[1] != 2:
        raise BadGeometry(f"{obstacle_id} must be a list of points (x, y)", {"id": obstacle_id})
    check_coordinates(obstacle_id, array)
    return array


def numbers(obstacle_id: str, values: object, names: str) -> Ring:
    """Return as many numbers as there are names. Raises BadGeometry, BadValue, OutsideLimits."""
    array = _floats(values)
    if array.shape != (names.count(",") + 1,):
        raise BadGeometry(f"{obstacle_id} must be the numbers {names}", {"id": obstacle_id})
    check_coordinates(obstacle_id, array)
    return array


def _floats(values: object) -> npt.NDArray[np.float64]:
    try:
        return np.array(values, np.float64)
    except (TypeError, ValueError):
        return np.empty(0)


# -- out ------------------------------------------------------------------------------------------


def pack_shapes(found: Shapes) -> tuple[Fields, bytes]:
    """
    Return the fields `polygons`, `discs`, `boxes`, `columns` of a body, and the packed frame.

    Raises:
        TooLarge: More obstacles or bytes than one change may have.
    """
    check_count(len(found), "obstacles", limits.obstacles_max)
    rings: list[Ring] = []
    first_rings = [0]
    for obstacle_id, outline in found.polygons.items():
        rings += (outline, *found.holes.get(obstacle_id, ()))
        first_rings.append(len(rings))
    columns, packed = pack(
        {
            "ids": pack_ids([*found.polygons, *found.discs, *found.boxes]),
            **pack_rings(rings),
            "discs_m": np.array(list(found.discs.values()), np.float64).reshape(-1, 3),
            **({"rings": np.array(first_rings, np.int64)} if found.holes else {}),
            **({"boxes_m": np.array(list(found.boxes.values()))} if found.boxes else {}),
        }
    )
    check_packed_size("obstacles", len(packed))
    counts = {kind: len(getattr(found, kind)) for kind in ("polygons", "discs", "boxes")}
    return {**counts, "columns": columns}, packed


def pack_rings(rings: Sequence[Ring]) -> dict[str, npt.NDArray[Any]]:
    """Return the columns `starts` and `vertices_m`."""
    starts = np.zeros(len(rings) + 1, np.int64)
    np.cumsum([len(ring) for ring in rings], out=starts[1:])
    vertices_m = np.concatenate(rings) if rings else np.empty((0, 2))
    return {"starts": starts, "vertices_m": vertices_m}


def check_count(count: int, what: str, most: int) -> None:
    """Raise TooLarge if there are more than there may be in one change."""
    if count > most:
        raise TooLarge(
            f"{count} {what} in one change, the most is {most}",
            {what: count, f"{what}_max": most},
        )


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


# -- in -------------------------------------------------------------------------------------------


def check(message: messages.Put | messages.ReplaceLayer, packed: Bytes) -> None:
    """Check the sizes of the columns against the counts; raises BadMessage or TooLarge."""
    check_count(count_of(message), "obstacles", limits.obstacles_max)
    has_holes = "rings" in message.columns
    check_columns(
        message.columns,
        packed,
        shape_columns(message.polygons, message.discs, message.boxes, has_holes=has_holes),
    )


def count_of(message: messages.Put | messages.ReplaceLayer) -> int:
    """Return how many obstacles a change has."""
    return message.polygons + message.discs + message.boxes


def shape_columns(polygons: int, discs: int, boxes: int = 0, *, has_holes: bool) -> Expected:
    """Return what `check_columns` shall expect of so many obstacles."""
    return {
        "ids": ("u1", (None,)),
        "starts": ("<i8", (None if has_holes else polygons + 1,)),
        "vertices_m": ("<f8", (None, 2)),
        "discs_m": ("<f8", (discs, 3)),
        **({"rings": ("<i8", (polygons + 1,))} if has_holes else {}),
        **({"boxes_m": ("<f8", (boxes, 5))} if boxes else {}),
    }


def ids_of(columns: Mapping[str, Column], packed: Bytes, count: int) -> list[str]:
    """
    Return the ids: those of the polygons, then those of the discs, then those of the boxes.

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
        BadMessage, BadValue, BadGeometry, OutsideLimits: If the columns contradict each other, or
            have ids or numbers that cannot be meant.
    """
    ids = iter(ids_of(message.columns, packed, count_of(message)))
    polygons, discs = shapes_in(message.columns, packed)
    found = Shapes({}, {})
    for outline, *holes in polygons:
        obstacle_id = next(ids)
        found.polygons[obstacle_id] = outline
        if holes:
            found.holes[obstacle_id] = tuple(holes)
    found.discs = dict(zip(itertools.islice(ids, len(discs)), discs, strict=True))
    if message.boxes:
        boxes_m = read(message.columns["boxes_m"], packed)
        check_coordinates("boxes_m", boxes_m)
        for obstacle_id, box in zip(ids, boxes_m.tolist(), strict=True):
            _take(found, "box", obstacle_id, box)
    return found


def shapes_in(columns: Mapping[str, Column], packed: Bytes) -> tuple[list[list[Ring]], list[Disc]]:
    """
    Return polygons and discs in their order; see `unpack_shapes`.

    Each polygon is a list of rings, views of the frame: its outline, then its holes.
    """
    discs_m = read(columns["discs_m"], packed)
    check_coordinates("discs_m", discs_m)
    discs = [(x_m, y_m, radius_m) for x_m, y_m, radius_m in discs_m.tolist()]
    rings = rings_in(columns, packed)
    if "rings" not in columns:
        return [[ring] for ring in rings], discs
    firsts = read(columns["rings"], packed)
    if firsts[0] != 0 or firsts[-1] != len(rings) or (firsts[1:] <= firsts[:-1]).any():
        raise BadMessage(
            "rings must rise from 0 to the number of rings", {"field": "columns.rings"}
        )
    bounds = itertools.pairwise(firsts.tolist())
    return [rings[begin:end] for begin, end in bounds], discs


def rings_in(columns: Mapping[str, Column], packed: Bytes) -> list[Ring]:
    """Return the rings of `starts` and `vertices_m`, views of the frame."""
    starts = read(columns["starts"], packed)
    vertices_m = read(columns["vertices_m"], packed)
    is_rising = len(starts) and starts[0] == 0 and not (starts[1:] < starts[:-1]).any()
    if not is_rising or starts[-1] != len(vertices_m):
        raise BadMessage(
            "starts must rise from 0 to the number of vertices", {"field": "columns.starts"}
        )
    check_coordinates("vertices_m", vertices_m)
    return [vertices_m[begin:end] for begin, end in itertools.pairwise(starts.tolist())]
