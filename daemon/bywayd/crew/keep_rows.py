"""
What one row of the store holds: the body of a change of one obstacle, or of one patch.

Nothing here touches the file. A body is a map of the protocol without the layer, as msgpack; its
packed frame stands beside it. So the store knows nothing of geometry but where a patch lies.
"""

from __future__ import annotations

import math
import zlib
from collections.abc import Iterator, Mapping
from typing import Any, Final, TypeAlias

import msgpack

from byway import messages, obstacles
from byway.obstacles import Shapes
from byway.packed import Bytes

Point: TypeAlias = tuple[float, float]
Box: TypeAlias = tuple[float, float, float, float]

#: Corners of a patch that lie outside by no more than rounding are inside.
_rounding_m: Final = 1e-9


# -- obstacles ------------------------------------------------------------------------------------


def obstacle_rows(
    layer: str, told: Mapping[str, Any], packed: Bytes
) -> Iterator[tuple[str, bytes, bytes]]:
    """
    Return id, body and packed frame of a `put` of each obstacle.

    Args:
        told: The fields of a `put` or `replace_layer` with them all.
    """
    message = messages.Put(layer=layer, **_put_fields(told))
    for obstacle_id, one in _one_by_one(obstacles.unpack_shapes(message, packed)):
        fields, columns = obstacles.pack_shapes(one)
        where = {name: column.model_dump() for name, column in fields["columns"].items()}
        yield obstacle_id, msgpack.packb({**fields, "columns": where}), columns


def _one_by_one(found: Shapes) -> Iterator[tuple[str, Shapes]]:
    for each, ring in found.polygons.items():
        holes = {each: found.holes[each]} if each in found.holes else {}
        yield each, Shapes({each: ring}, {}, holes)
    for each, disc in found.discs.items():
        yield each, Shapes({}, {each: disc})
    for each, box in found.boxes.items():
        yield each, Shapes({}, {}, {}, {each: box})


def _put_fields(message: Mapping[str, Any]) -> dict[str, Any]:
    """Return what a `put` has of the fields of a `put` or `replace_layer`."""
    unwanted = ("layer", "expires_in_s")
    return {
        name: value
        for name, value in message.items()
        if name in messages.Put.model_fields and name not in unwanted
    }


# -- patches --------------------------------------------------------------------------------------


def patch_row(told: Mapping[str, Any], packed: Bytes) -> tuple[bytes, bytes]:
    """Return body and packed frame of a patch."""
    fields = {name: value for name, value in told.items() if name != "layer"}
    return msgpack.packb(fields), bytes(packed)


class Ground:
    """The rectangle of a patch."""

    def __init__(self, message: Mapping[str, Any]) -> None:
        x_m, y_m = map(float, message["corner_m"])
        heading_rad = float(message.get("heading_rad", 0.0))
        cell_m = float(message["cell_m"])
        rows, columns = message["columns"]["cells"]["shape"]
        self._corner_m: Point = (x_m, y_m)
        self._cos, self._sin = math.cos(heading_rad), math.sin(heading_rad)
        self._length_m, self._width_m = float(columns * cell_m), float(rows * cell_m)
        self._corners_m = [
            (x_m + self._cos * u - self._sin * v, y_m + self._sin * u + self._cos * v)
            for u in (0.0, self._length_m)
            for v in (0.0, self._width_m)
        ]

    @property
    def box_m(self) -> Box:
        """The smallest box around it: x_min, y_min, x_max, y_max."""
        xs, ys = zip(*self._corners_m, strict=True)
        return min(xs), min(ys), max(xs), max(ys)

    def covers(self, other: Ground) -> bool:
        """Whether all of the other lies within."""
        return all(self._contains(corner_m) for corner_m in other._corners_m)

    def _contains(self, point_m: Point) -> bool:
        dx_m, dy_m = point_m[0] - self._corner_m[0], point_m[1] - self._corner_m[1]
        u_m = self._cos * dx_m + self._sin * dy_m
        v_m = self._cos * dy_m - self._sin * dx_m
        slack_m = _rounding_m * (1.0 + abs(point_m[0]) + abs(point_m[1]))
        return (
            -slack_m <= u_m <= self._length_m + slack_m
            and -slack_m <= v_m <= self._width_m + slack_m
        )


def grown(box_m: Box) -> Box:
    """Return a box that is larger by what rounding can do."""
    x0, y0, x1, y1 = box_m
    slack_m = _rounding_m * (1.0 + max(map(abs, box_m)))
    return x0 - slack_m, y0 - slack_m, x1 + slack_m, y1 + slack_m


def checksum(*parts: str | bytes) -> int:
    """Return CRC-32 over the parts and their lengths."""
    value = 0
    for part in parts:
        data = part.encode() if isinstance(part, str) else part
        value = zlib.crc32(data, zlib.crc32(len(data).to_bytes(8, "little"), value))
    return value
