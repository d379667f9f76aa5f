"""Shapes from GeoJSON: what is taken, how it is named, and where a fault is said to be."""

import json
import math
from pathlib import Path
from typing import Any

import pytest
import shapely

from bywayd.geojson import GeoJsonFault, Shapes, read_shapes

SQUARE = [[0, 0], [4, 0], [4, 4], [0, 4], [0, 0]]
HOLE = [[1, 1], [2, 1], [2, 2], [1, 2], [1, 1]]


def feature(geometry: Any, **more: Any) -> dict[str, Any]:
    return {"type": "Feature", "properties": {}, "geometry": geometry} | more


def read(tmp_path: Path, told: Any, **more: Any) -> Shapes:
    file = tmp_path / "yard.geojson"
    file.write_text(told if isinstance(told, str) else json.dumps(told))
    return read_shapes(file, **more)


def test_a_collection_of_all_that_is_taken(tmp_path: Path) -> None:
    polygon = {"type": "Polygon", "coordinates": [SQUARE, HOLE]}
    moved = [[[x + 10, y] for x, y in ring] for ring in (SQUARE, HOLE)]
    many = {"type": "MultiPolygon", "coordinates": [moved, [SQUARE]]}
    point = {"type": "Point", "coordinates": [3, 4, 0.5]}  # a height is passed over
    line = {"type": "LineString", "coordinates": [[0, 0], [3, 4], [3, 8]]}
    both = {"type": "GeometryCollection", "geometries": [polygon, polygon]}
    shapes = read(
        tmp_path,
        {
            "type": "FeatureCollection",
            "features": [
                feature(polygon, id="brick store"),
                feature(many, properties={"id": 7}),
                feature(point, properties={"radius_m": 1.5}),
                feature(line, id="fence", properties={"width_m": 0.2}),
                feature(both, id="pair"),
                feature(None),
            ],
        },
    )
    assert set(shapes.polygons) == {"brick-store", "7.0", "7.1", "pair.0", "pair.1"}
    outline, (hole,) = shapes.polygons["brick-store"]
    # As another reader of the standard has it.
    wanted = shapely.from_geojson(json.dumps(polygon))
    assert shapely.Polygon(outline, [hole]).equals(wanted)
    assert len(outline) == 4  # not closed by repeating the first
    assert shapes.discs == {"f2": (3.0, 4.0, 1.5)}
    assert set(shapes.boxes) == {"fence.0", "fence.1"}
    x, y, heading, length, width = shapes.boxes["fence.0"]
    assert (x, y, length, width) == pytest.approx((1.5, 2.0, 5.2, 0.2))
    assert heading == pytest.approx(math.atan2(4, 3))
    assert len(shapes) == 8


def test_a_bare_geometry_and_another_property_for_names(tmp_path: Path) -> None:
    assert set(read(tmp_path, {"type": "Polygon", "coordinates": [SQUARE]}).polygons) == {"g0"}
    one = feature({"type": "Polygon", "coordinates": [SQUARE]}, properties={"name": "Kiln 2"})
    assert set(read(tmp_path, one, id_property="name").polygons) == {"Kiln-2"}


def test_a_frame_of_the_site_itself_is_metres(tmp_path: Path) -> None:
    told = {"type": "Polygon", "coordinates": [SQUARE], "crs": {"properties": {"name": "yard"}}}
    assert len(read(tmp_path, told)) == 1


def test_many_shapes_come_in_parts_that_fit_into_one_change_each() -> None:
    triangle = [(0.0, 0.0), (1.0, 0.0), (0.0, 1.0)]
    shapes = Shapes({f"p{k}": (triangle, [triangle]) for k in range(5)}, {"d": (0.0, 0.0, 1.0)})
    parts = list(shapes.pieces(count_max=2))
    assert [len(part) for part in parts] == [2, 2, 2]
    assert {n for part in parts for n in part.polygons} == set(shapes.polygons)
    assert parts[2].discs == shapes.discs
    assert [len(part) for part in shapes.pieces(positions_max=12)] == [2, 2, 2]
    # One that is too large for any change is for the client to refuse.
    assert [len(part) for part in shapes.pieces(positions_max=3)] == [1] * 6
    assert [len(part) for part in Shapes().pieces()] == [0]


def test_corners_that_are_there_twice_are_left_out(tmp_path: Path) -> None:
    ring = [[0, 0], [4, 0], [4, 0], [4, 4], [0, 4], [0, 0]]
    outline, _ = read(tmp_path, {"type": "Polygon", "coordinates": [ring]}).polygons["g0"]
    assert outline == [(0.0, 0.0), (4.0, 0.0), (4.0, 4.0), (0.0, 4.0)]


@pytest.mark.parametrize(
    ("told", "said"),
    [
        ("{", r"yard.geojson:1:2: is no JSON"),
        ("[" * 100_000, "nested too deep"),
        ({}, "the file: has no member 'type'"),
        ([], "the file: has no member 'type'"),
        (
            {"type": "Polygon", "crs": {"properties": {"name": "urn:ogc:def:crs:OGC:1.3:CRS84"}}},
            "crs: the positions are degrees",
        ),
        ({"type": "FeatureCollection"}, "has no member 'features'"),
        ({"type": "FeatureCollection", "features": {}}, "features must be an array"),
        ({"type": "FeatureCollection", "features": [{"type": "Polygon"}]}, r"features\[0\]: is a"),
        ({"type": "Polygon", "coordinates": []}, "needs a ring"),
        ({"type": "Polygon", "coordinates": [SQUARE[:-1]]}, r"coordinates\[0\]: a ring has four"),
        ({"type": "Polygon", "coordinates": [[[0, 0], [1], [1, 1], [0, 0]]]}, r"\[0\]\[1\]: a pos"),
        ({"type": "Polygon", "coordinates": [[[0, "a"], [1, 0], [1, 1], [0, 0]]]}, "'a' is no num"),
        ({"type": "Polygon", "coordinates": [[[0, 1e9], [1, 0], [1, 1], [0, 1e9]]]}, "no place on"),
        ({"type": "Point", "coordinates": [1, 2]}, "needs a property radius_m"),
        (
            feature({"type": "Point", "coordinates": [1, 2]}, properties={"radius_m": True}),
            "needs a property radius_m",
        ),
        (
            feature({"type": "LineString", "coordinates": [[1, 2]]}, properties={"width_m": 1}),
            "two points",
        ),
        (
            feature(
                {"type": "LineString", "coordinates": [[1, 2], [1, 2]]}, properties={"width_m": 1}
            ),
            "once more",
        ),
        ({"type": "MultiPoint", "coordinates": []}, "'MultiPoint' is not taken; Polygon"),
        (feature({"type": "Polygon", "coordinates": [SQUARE]}, id="--"), "has no letter"),
        (feature({"type": "Polygon", "coordinates": [SQUARE]}, properties=[1]), "an object"),
        (
            {
                "type": "FeatureCollection",
                "features": [feature({"type": "Polygon", "coordinates": [SQUARE]}, id="a")] * 2,
            },
            "the id a is there twice",
        ),
    ],
)
def test_what_cannot_be_taken_is_said_with_its_place(tmp_path: Path, told: Any, said: str) -> None:
    with pytest.raises(GeoJsonFault, match=said):
        read(tmp_path, told)


def test_a_file_that_is_no_text(tmp_path: Path) -> None:
    file = tmp_path / "yard.geojson"
    file.write_bytes(b"\xff\xfe\x00")
    with pytest.raises(GeoJsonFault, match="UTF-8"):
        read_shapes(file)
