"""The yard's layout: stations leave room, and nothing stands in anything."""

import itertools
import math
from pathlib import Path

import pytest
import shapely

from bywayd.geojson import read_shapes
from bywayd.outlines import outline_of, placed
from bywayd.settings import load
from bywayd.yard import scene
from bywayd.yard.scene import ASIDE, BUILDINGS, LIMITS_M, ROUNDS, STACKS, Station
from bywayd.yard.shapes import Mass, distance_m

VEHICLES = {name: vehicle.arguments() for name, vehicle in load().vehicles.items()}
OUTLINES = {round_.unit: outline_of(VEHICLES[round_.vehicle]) for round_ in ROUNDS}
BEGINS = {round_.unit: Station("begin", round_.begins) for round_ in ROUNDS}
PLACES = [(r.unit, s) for r in ROUNDS for s in (BEGINS[r.unit], *r.stations, *ASIDE)]


def solid(mass: Mass) -> shapely.Geometry:
    ring = shapely.Polygon(mass.ring_m) if len(mass.ring_m) > 1 else shapely.Point(mass.ring_m[0])
    return ring.buffer(mass.radius_m) if mass.radius_m else ring


@pytest.mark.parametrize(("unit", "station"), PLACES, ids=lambda p: getattr(p, "name", p))
def test_a_vehicle_that_stands_at_its_place_has_room(unit: str, station: Station) -> None:
    ring = shapely.Polygon(placed(OUTLINES[unit], station.pose))
    assert shapely.box(*LIMITS_M).buffer(-0.5).contains(ring)
    assert min(ring.distance(solid(mass)) for mass in (*BUILDINGS, *STACKS)) > 0.45


def test_stations_of_different_units_do_not_meet() -> None:
    """No unit that stands at a station of its round keeps another from a station of its own."""
    rings = [(r.unit, placed(OUTLINES[r.unit], s.pose)) for r in ROUNDS for s in r.stations]
    for (a, ring_a), (b, ring_b) in itertools.combinations(rings, 2):
        assert a == b or distance_m(ring_a, ring_b) > 1.0


def test_units_begin_apart() -> None:
    rings = [placed(OUTLINES[unit], begin.pose) for unit, begin in BEGINS.items()]
    for a, b in itertools.combinations(rings, 2):
        assert distance_m(a, b) > 1.0


def test_nothing_stands_in_anything() -> None:
    for a, b in itertools.combinations((*BUILDINGS, *STACKS), 2):
        assert solid(a).distance(solid(b)) > 0.5, (a.name, b.name)


def test_names_are_not_used_twice() -> None:
    names = [mass.name for mass in (*BUILDINGS, *STACKS)]
    assert len(set(names)) == len(names)
    units = [round_.unit for round_ in ROUNDS]
    assert len(set(units)) == len(units) == len({round_.rank for round_ in ROUNDS})


def test_three_vehicles_of_different_size() -> None:
    areas = [shapely.Polygon(OUTLINES[round_.unit]).area for round_ in ROUNDS]
    assert len(areas) == 3
    assert all(a > 1.5 * b for a, b in itertools.pairwise(sorted(areas, reverse=True)))
    assert all(math.isfinite(area) for area in areas)


def test_the_drawing_of_the_yard_is_the_yard() -> None:
    """The example for `byway put` has what the demo has, and a hole and a wall besides."""
    drawn = read_shapes(Path(scene.__file__).with_name("yard.geojson"))
    for mass in (*scene.BUILDINGS, *scene.STACKS):
        ring = [tuple(corner) for corner in mass.ring_m.tolist()]
        if len(ring) == 1:
            assert drawn.discs[mass.name] == (*ring[0], mass.radius_m)
        else:
            assert drawn.polygons[mass.name] == (ring, [])
    assert len(drawn.polygons["drying-court"][1]) == 1
    assert len([name for name in drawn.boxes if name.startswith("fence.")]) == 3
