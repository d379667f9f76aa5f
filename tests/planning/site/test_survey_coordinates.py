"""A site far from the origin of its coordinates: the same site, the same answers."""

import math

import numpy as np
import pytest
from tests.planning.site.site_twins import box, read_all

from byway_planning import Car, Disc, ForwardCar, Outcome, plan
from byway_planning.site import (
    DiscShape,
    LayerSettings,
    PolygonShape,
    SiteModel,
    SiteSettings,
    Snapshot,
    Track,
    box_shape,
)

ORIGIN_M = (500_000.0, 5_000_000.0)
#: Doubles near five million metres are a nanometre apart.
ROUNDING_M = 1e-9
FOOTPRINT_M = [(-1.0, -1.0), (4.0, -1.0), (4.0, 1.0), (-1.0, 1.0)]
VEHICLES = {
    "car": Car(footprint_m=FOOTPRINT_M, turn_radius_m_min=5.0),
    "forward car": ForwardCar(footprint_m=FOOTPRINT_M, turn_radius_m_min=5.0),
    "disc": Disc(radius_m=1.0),
}


def snapshot_at(origin_m: tuple[float, float]) -> Snapshot:
    """Everything that can be sent, in coordinates from which the origin is taken off."""

    def here(x: float, y: float) -> tuple[float, float]:
        return (x + origin_m[0]) - origin_m[0], (y + origin_m[1]) - origin_m[1]

    model = SiteModel(SiteSettings((0.0, 0.0, 60.0, 45.0), origin_m=origin_m))
    model.declare("fixed", LayerSettings())
    model.declare("lidar", LayerSettings())
    hole = box(*here(23.0, 12.0), 5.0, 4.0).vertices_m
    yard = PolygonShape(box(*here(20.0, 10.0), 12.0, 10.0).vertices_m, [hole])
    model.put("fixed", "yard", yard)
    model.put("fixed", "tank", DiscShape(*here(42.5, 28.25), 2.5))
    model.put("fixed", "trailer", box_shape(*here(12.5, 30.0), 0.4, 12.0, 2.5))
    cells = np.zeros((40, 60), np.uint8)
    cells[18:22, 5:50] = 1
    model.patch("lidar", here(30.25, 30.5), 0.1, cells, 0.3)
    bearings = np.linspace(-math.pi, math.pi, 180, endpoint=False)
    ranges = 4.0 + np.sin(bearings * 5.0)
    model.scan("lidar", (*here(10.5, 5.25), 0.2), bearings, ranges, 4.5)
    pose = (*here(36.5, 20.0), 0.0)
    walker = Track(DiscShape(0.0, 0.0, 0.4), pose, (0.8, 0.3), 0.2, 0.1, 0.1)
    model.track("fixed", "walker", walker)
    return model.publish()


def answer(origin_m: tuple[float, float], name: str) -> Outcome:
    ox, oy = origin_m
    return plan(
        snapshot_at(origin_m),
        VEHICLES[name],
        (3.5 + ox, 12.25 + oy, 0.25),
        (52.5 + ox, 35.0 + oy, 1.5),
        time_left=lambda: 1.0,
        seed=5,
        work_max=300,
    )


def test_the_site_is_the_same() -> None:
    assert read_all(snapshot_at((0.0, 0.0))) == read_all(snapshot_at(ORIGIN_M))


@pytest.mark.parametrize("name", VEHICLES)
def test_answers_are_the_same(name: str) -> None:
    near, far = answer((0.0, 0.0), name), answer(ORIGIN_M, name)
    assert near.kind == far.kind == "route"
    # Bit for bit where no place is told: the search and the check knew nothing of the shift.
    assert (near.cost, near.bound, near.gap) == (far.cost, far.bound, far.gap)
    one, other = near.route.table, far.route.table
    for column in ("t_s", "heading_rad", "curvature_per_m", "speed_mps", "gear"):
        assert one[column].tobytes() == other[column].tobytes()
    assert np.abs(other["x_m"] - ORIGIN_M[0] - one["x_m"]).max() <= ROUNDING_M
    assert np.abs(other["y_m"] - ORIGIN_M[1] - one["y_m"]).max() <= ROUNDING_M
