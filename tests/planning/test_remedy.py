"""What would have to move: with it gone the disc gets through, by shapely; no more than needed."""

import math

import numpy as np
import pytest
import shapely

from byway_planning import LayerSettings, Memory, PolygonShape, Site, SiteModel, SiteSettings
from byway_planning.remedy import CELLS, Remedy, remedy

RADIUS_M = 0.9


def box(x: float, y: float, width: float, height: float) -> list[tuple[float, float]]:
    return [(x, y), (x + width, y), (x + width, y + height), (x, y + height)]


def ring(x: float, y: float, side: float, name: str) -> dict[str, list[tuple[float, float]]]:
    """Four walls around a square."""
    return {
        f"{name}-south": box(x, y, side, 0.4),
        f"{name}-north": box(x, y + side - 0.4, side, 0.4),
        f"{name}-west": box(x, y, 0.4, side),
        f"{name}-east": box(x + side - 0.4, y, 0.4, side),
    }


def asked(polygons, start, goal, limits_m=(0.0, 0.0, 60.0, 40.0), discs=None) -> Remedy | None:
    site = Site.from_shapes(polygons, discs=discs or {}, limits_m=limits_m)
    return remedy(site.snapshot, frozenset(), start, goal, RADIUS_M)


def check_way(found: Remedy, polygons, start, goal) -> None:
    """The disc drives its way without touching what stays."""
    gone = {each.obstacle for each in found.movables}
    stays = shapely.union_all([shapely.Polygon(p) for n, p in polygons.items() if n not in gone])
    assert tuple(found.way_m[0]) == start
    assert tuple(found.way_m[-1]) == goal
    way = shapely.LineString(found.way_m)
    # At the ends the disc stands between squares: the first and last piece may cut a corner.
    middle = shapely.LineString(found.way_m[1:-1]) if len(found.way_m) > 3 else way
    assert middle.distance(stays) > RADIUS_M - 1e-9
    assert way.distance(stays) > RADIUS_M - 0.45


def test_one_wall_of_a_sealed_room_would_have_to_move() -> None:
    polygons = ring(30.0, 10.0, 10.0, "room")
    found = asked(polygons, (5.0, 5.0), (35.0, 15.0))
    assert found is not None
    (only,) = found.movables
    assert only.obstacle in ("room-south", "room-west")
    assert found.disc_radius_m == RADIUS_M
    check_way(found, polygons, (5.0, 5.0), (35.0, 15.0))


def test_two_rooms_one_inside_the_other() -> None:
    polygons = ring(25.0, 5.0, 24.0, "outer") | ring(32.0, 12.0, 10.0, "inner")
    found = asked(polygons, (5.0, 5.0), (37.0, 17.0))
    assert found is not None
    assert sorted(each.obstacle.split("-")[0] for each in found.movables) == ["inner", "outer"]
    check_way(found, polygons, (5.0, 5.0), (37.0, 17.0))


def test_where_there_is_a_way_nothing_has_to_move() -> None:
    polygons = ring(30.0, 10.0, 10.0, "room")
    del polygons["room-east"]
    found = asked(polygons, (5.0, 5.0), (35.0, 15.0))
    assert found is not None
    assert found.movables == ()
    check_way(found, polygons, (5.0, 5.0), (35.0, 15.0))


def test_a_gate_that_is_too_narrow_by_a_hair_needs_a_post_moved() -> None:
    gap = 2.0 * RADIUS_M - 0.01
    polygons = {"low": box(30.0, 0.0, 1.0, 20.0), "high": box(30.0, 20.0 + gap, 1.0, 20.0 - gap)}
    found = asked(polygons, (5.0, 20.0), (50.0, 20.0))
    assert found is not None
    assert len(found.movables) == 1
    check_way(found, polygons, (5.0, 20.0), (50.0, 20.0))


def test_discs_and_where_things_are_said() -> None:
    polygons = {"low": box(30.0, 0.0, 1.0, 18.0), "high": box(30.0, 23.0, 1.0, 17.0)}
    found = asked(polygons, (5.0, 20.0), (50.0, 20.0), discs={"silo": (30.5, 20.5, 1.2)})
    assert found is not None
    (only,) = found.movables
    assert only.obstacle == "silo"
    assert math.hypot(only.x_m - 30.5, only.y_m - 20.5) < 1.2 + RADIUS_M + 0.3


def test_heaps_of_cells_are_named_by_their_layer_and_place() -> None:
    model = SiteModel(SiteSettings((0.0, 0.0, 40.0, 30.0)), Memory.private())
    model.declare("lidar", LayerSettings())
    model.declare("stacks", LayerSettings())
    cells = np.zeros((300, 10), np.uint8)
    cells[:180] = 1  # up to y = 18, and then a second heap
    cells[200:] = 1
    model.patch("lidar", (20.0, 0.0), 0.1, cells)
    model.put("stacks", "plug", PolygonShape(box(19.5, 17.0, 2.0, 4.0)))
    found = remedy(model.publish(), frozenset(), (5.0, 15.0), (35.0, 15.0), RADIUS_M)
    assert found is not None
    named = {(each.layer, each.obstacle) for each in found.movables}
    # One gap of 2 m is behind the plug, wide enough for the disc.
    assert named == {("stacks", "plug")} or named == {("lidar", CELLS)}
    for each in found.movables:
        if each.obstacle == CELLS:
            assert 18.5 <= each.x_m <= 22.5


def test_limits_cannot_be_moved() -> None:
    """A wall as a passage along the limits: the disc does not fit between them at all."""
    site = Site.from_shapes({}, limits_m=(0.0, 0.0, 40.0, 1.5))
    assert remedy(site.snapshot, frozenset(), (5.0, 0.75), (35.0, 0.75), RADIUS_M) is None


def test_survey_like_corners_and_ends_at_walls() -> None:
    """A start that just keeps the clearance from a wall is not held by that wall."""
    polygons = ring(30.0, 10.0, 10.0, "room") | {"dock": box(2.0, 0.0, 10.0, 3.0)}
    start = (5.0, 3.0 + RADIUS_M)
    found = asked(polygons, start, (35.0, 15.0))
    assert found is not None
    assert len(found.movables) == 1
    assert found.movables[0].obstacle.startswith("room")


@pytest.mark.parametrize("seed", range(8))
def test_among_random_boxes_the_way_is_free_of_what_stays(seed: int) -> None:
    rng = np.random.default_rng(seed)
    polygons = {}
    for i in range(60):
        x, y = rng.uniform((6.0, 0.0), (52.0, 36.0))
        polygons[f"b{i}"] = box(x, y, *rng.uniform(0.5, 6.0, 2))
    start, goal = (3.0, 20.0), (57.5, 20.0)
    found = asked(polygons, start, goal)
    assert found is not None
    check_way(found, polygons, start, goal)
    # Each one that moves is on the way: put back alone, it is hit.
    way = shapely.LineString(found.way_m)
    for each in found.movables:
        assert way.distance(shapely.Polygon(polygons[each.obstacle])) < RADIUS_M + 0.2 * math.sqrt(
            2
        )
