"""
Shapes from a GeoJSON file (RFC 7946), in plain metres.

The standard means degrees of longitude and latitude; here its positions are metres of the site's
own coordinates, as drawing programs export them. A file says nothing of that, so who reads it
must know. Taken are what stands on a site: polygons with holes, collections of them, points with
a radius as discs, and lines with a width as walls.
"""

import itertools
import json
import math
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final

from byway import limits

Position = tuple[float, float]
Ring = list[Position]

_NOT_A_NAME: Final = re.compile(r"[^A-Za-z0-9_.:/#-]+")
_KINDS: Final = ("polygons", "discs", "boxes")
#: Positions in one change, 16 bytes each; what else is in it takes less than the other half.
POSITIONS_MAX: Final = limits.packed_bytes_max // 32
#: What programs write that mean degrees after all.
_DEGREES: Final = re.compile(r"CRS:?84|EPSG:+4326", re.IGNORECASE)
_GEOMETRIES: Final = (
    "Polygon, MultiPolygon, Point (with a property radius_m), LineString (with a property "
    "width_m), GeometryCollection"
)


class GeoJsonFault(ValueError):
    """A file, or a place in it, that cannot be taken; the text says where and why."""


@dataclass
class Shapes:
    """What a file holds, by id."""

    #: Outline and holes.
    polygons: dict[str, tuple[Ring, list[Ring]]] = field(default_factory=dict)
    #: x, y, radius.
    discs: dict[str, tuple[float, float, float]] = field(default_factory=dict)
    #: x, y of the middle, heading, length, width.
    boxes: dict[str, tuple[float, float, float, float, float]] = field(default_factory=dict)

    def __len__(self) -> int:
        return len(self.polygons) + len(self.discs) + len(self.boxes)

    def pieces(
        self, count_max: int = limits.obstacles_max, positions_max: int = POSITIONS_MAX
    ) -> Iterator["Shapes"]:
        """Give all shapes in parts that fit into one change each; at least one part."""
        piece, positions = Shapes(), 0
        for name, kind in [(n, k) for k in _KINDS for n in getattr(self, k)]:
            shape = getattr(self, kind)[name]
            has = len(shape[0]) + sum(map(len, shape[1])) if kind == "polygons" else 1
            if len(piece) and (len(piece) == count_max or positions + has > positions_max):
                yield piece
                piece, positions = Shapes(), 0
            getattr(piece, kind)[name] = shape
            positions += has
        yield piece


def read_shapes(file: Path, id_property: str = "id") -> Shapes:
    """
    Read a file.

    Args:
        id_property: Names an obstacle if its feature has no `id` of its own; without either it
            is called by its place in the file.

    Raises:
        GeoJsonFault: With the place in the file.
        OSError: It cannot be read.
    """
    try:
        told = json.loads(file.read_text(encoding="utf-8"))
    except UnicodeDecodeError as fault:
        raise GeoJsonFault(f"{file}: is no text in UTF-8: {fault}") from None
    except json.JSONDecodeError as fault:
        raise GeoJsonFault(
            f"{file}:{fault.lineno}:{fault.colno}: is no JSON: {fault.msg}"
        ) from None
    except RecursionError:
        raise GeoJsonFault(f"{file}: is nested too deep to be a drawing") from None
    reader = _Reader(id_property)
    try:
        _check_metres(told)
        reader.take(told, "")
    except GeoJsonFault as fault:
        raise GeoJsonFault(f"{file}: {fault}") from None
    return reader.shapes


class _Reader:
    def __init__(self, id_property: str) -> None:
        self._id_property = id_property
        self.shapes = Shapes()

    def take(self, told: Any, place: str) -> None:
        kind = _member(told, "type", place)
        if kind == "FeatureCollection":
            for i, feature in enumerate(_list(told, "features", place)):
                self._feature(feature, f"{place}features[{i}]", f"f{i}")
        elif kind == "Feature":
            self._feature(told, place or "the feature", "f0")
        else:
            self._geometry(told, place, "g0", {})

    def _feature(self, told: Any, place: str, fallback: str) -> None:
        kind = _member(told, "type", place)
        if kind != "Feature":
            raise GeoJsonFault(f"{place}: is a {kind!r} where a Feature was due")
        properties = told.get("properties") or {}
        if not isinstance(properties, Mapping):
            raise GeoJsonFault(f"{place}: properties must be an object")
        name = told.get("id", properties.get(self._id_property, fallback))
        geometry = told.get("geometry")
        if geometry is None:
            return  # the standard allows a feature without a place
        self._geometry(geometry, f"{place}.geometry", _as_name(name, place), properties)

    def _geometry(self, told: Any, place: str, name: str, properties: Mapping[str, Any]) -> None:
        kind = _member(told, "type", place)
        if kind == "GeometryCollection":
            for i, each in enumerate(_list(told, "geometries", place)):
                self._geometry(each, f"{place}.geometries[{i}]", f"{name}.{i}", properties)
            return
        at = f"{place}.coordinates" if place else "coordinates"
        coordinates = _list(told, "coordinates", place)
        if kind == "Polygon":
            self._polygon(coordinates, at, name)
        elif kind == "MultiPolygon":
            for i, each in enumerate(coordinates):
                part = name if len(coordinates) == 1 else f"{name}.{i}"
                self._polygon(each, f"{at}[{i}]", part)
        elif kind == "Point":
            radius_m = _measure(properties, "radius_m", place)
            self._keep(self.shapes.discs, name, (*_position(coordinates, at), radius_m), place)
        elif kind == "LineString":
            width_m = _measure(properties, "width_m", place)
            self._wall(coordinates, at, name, width_m)
        else:
            raise GeoJsonFault(f"{place or 'the file'}: {kind!r} is not taken; {_GEOMETRIES} are")

    def _polygon(self, coordinates: Any, place: str, name: str) -> None:
        if not isinstance(coordinates, list) or not coordinates:
            raise GeoJsonFault(f"{place}: a polygon needs a ring")
        rings = [_ring(ring, f"{place}[{i}]") for i, ring in enumerate(coordinates)]
        self._keep(self.shapes.polygons, name, (rings[0], rings[1:]), place)

    def _wall(self, coordinates: list[Any], place: str, name: str, width_m: float) -> None:
        """A line with a width: a box along each piece, long enough for its corners."""
        points = [_position(each, f"{place}[{i}]") for i, each in enumerate(coordinates)]
        if len(points) < 2:
            raise GeoJsonFault(f"{place}: a line needs two points")
        for i, ((ax, ay), (bx, by)) in enumerate(itertools.pairwise(points)):
            length_m = math.hypot(bx - ax, by - ay)
            if length_m == 0.0:
                raise GeoJsonFault(f"{place}[{i + 1}]: is the point before once more")
            box = (
                *(0.5 * (ax + bx), 0.5 * (ay + by), math.atan2(by - ay, bx - ax)),
                *(length_m + width_m, width_m),
            )
            part = name if len(points) == 2 else f"{name}.{i}"
            self._keep(self.shapes.boxes, part, box, place)

    def _keep(self, into: dict[str, Any], name: str, shape: Any, place: str) -> None:
        taken = (self.shapes.polygons, self.shapes.discs, self.shapes.boxes)
        if any(name in each for each in taken):
            raise GeoJsonFault(f"{place}: the id {name} is there twice")
        into[name] = shape


def _check_metres(told: Any) -> None:
    """Some programs say what their positions are, as an older form of the standard had it."""
    said = json.dumps(told.get("crs")) if isinstance(told, Mapping) else ""
    if _DEGREES.search(said):
        raise GeoJsonFault("crs: the positions are degrees; metres of the site are needed")


def _member(told: Any, name: str, place: str) -> Any:
    if not isinstance(told, Mapping) or name not in told:
        raise GeoJsonFault(f"{place or 'the file'}: has no member {name!r}")
    return told[name]


def _list(told: Any, name: str, place: str) -> list[Any]:
    value = _member(told, name, place)
    if not isinstance(value, list):
        raise GeoJsonFault(f"{place or 'the file'}: {name} must be an array")
    return value


def _position(told: Any, place: str) -> Position:
    if not isinstance(told, list) or len(told) < 2:
        raise GeoJsonFault(f"{place}: a position is [x, y] in metres")
    x, y = told[:2]
    for value in (x, y):
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise GeoJsonFault(f"{place}: {value!r} is no number")
        if not abs(value) <= limits.coordinate_m_max:  # NaN too
            raise GeoJsonFault(f"{place}: {value} m is no place on a site")
    return float(x), float(y)


def _ring(told: Any, place: str) -> Ring:
    if not isinstance(told, list):
        raise GeoJsonFault(f"{place}: a ring is an array of positions")
    ring = [_position(each, f"{place}[{i}]") for i, each in enumerate(told)]
    # The standard closes rings by repeating the first position.
    if len(ring) < 4 or ring[0] != ring[-1]:
        raise GeoJsonFault(
            f"{place}: a ring has four positions or more, and the last repeats the first"
        )
    return list(_without_repeats(ring[:-1]))


def _without_repeats(ring: Ring) -> Iterator[Position]:
    """Drawing programs put the same corner there twice, which is no fault of the shape."""
    for i, position in enumerate(ring):
        if position != ring[i - 1] or len(ring) == 1:
            yield position


def _measure(properties: Mapping[str, Any], name: str, place: str) -> float:
    value = properties.get(name)
    is_number = isinstance(value, int | float) and not isinstance(value, bool)
    measure = float(value) if is_number else 0.0  # type: ignore[arg-type]
    if not 0.0 < measure < limits.coordinate_m_max:
        raise GeoJsonFault(f"{place}: needs a property {name}, in metres and above 0")
    return measure


def _as_name(told: Any, place: str) -> str:
    """Return an id that can travel; what it may not have becomes a hyphen."""
    name = _NOT_A_NAME.sub("-", str(told)).strip("-_.:/#")
    if not name:
        raise GeoJsonFault(f"{place}: the id {told!r} has no letter or digit in it")
    # Room for the number of a part.
    return name[: limits.name_chars_max - 8]
