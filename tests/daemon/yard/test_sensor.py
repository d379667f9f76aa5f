"""The simulated range sensor, beside shapely: what it measures, leaves out, and gets wrong."""

import math

import numpy as np
import pytest
import shapely

from bywayd.yard import sensor as sensor_module
from bywayd.yard.sensor import BEAMS, NOISE_M, RANGE_M_MAX, Scan, Sensor
from bywayd.yard.shapes import Mass, as_points, rectangle

NOSE_M = 2.0
POSE = (10.0, 10.0, 0.5)
NEWS = [
    Mass("pallet-1", rectangle(18.0, 12.0, 1.2, 1.0, 0.4)),
    Mass("drum", as_points([(14.0, 15.0)]), 0.4),
]
WALL = Mass("wall", as_points([(22, 0), (23, 0), (23, 30), (22, 30)]))
OTHER = Mass("loader", rectangle(15.0, 11.5, 1.0, 1.0))


@pytest.fixture
def without_noise(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sensor_module, "NOISE_M", 0.0)
    monkeypatch.setattr(sensor_module, "DROPOUT_RATIO", 0.0)


def solid(mass: Mass) -> shapely.Geometry:
    if len(mass.ring_m) > 1:
        return shapely.Polygon(mass.ring_m)
    # The corners of a circle of many lie inside of it by less than a millimetre.
    return shapely.Point(mass.ring_m[0]).buffer(mass.radius_m, quad_segs=64)


def beams_of(scan: Scan) -> list[tuple[float, float, shapely.LineString]]:
    x, y, heading = scan.origin
    found = []
    for bearing, range_m in zip(scan.bearings_rad.tolist(), scan.ranges_m.tolist(), strict=True):
        towards = heading + bearing
        end = (x + RANGE_M_MAX * math.cos(towards), y + RANGE_M_MAX * math.sin(towards))
        found.append((bearing, range_m, shapely.LineString([(x, y), end])))
    return found


@pytest.mark.usefixtures("without_noise")
def test_what_is_measured_is_what_is_in_sight() -> None:
    scan = Sensor([WALL], NOSE_M, seed=1).sweep(POSE, NEWS, [OTHER])
    eye = shapely.Point(scan.origin[:2])
    news = shapely.union_all([solid(mass) for mass in NEWS])
    others = shapely.union_all([solid(WALL), solid(OTHER)])
    told = {}
    for bearing, range_m, beam in beams_of(scan):
        told[round(bearing, 5)] = range_m
        to_news, to_others = (
            eye.distance(part) if not (part := beam.intersection(what)).is_empty else math.inf
            for what in (news, others)
        )
        # What stands in front of something new hides it, and is itself left out.
        assert to_news <= to_others
        assert range_m == pytest.approx(to_news, abs=1e-3)
    assert sum(range_m < RANGE_M_MAX for range_m in told.values()) > 10
    assert any(math.isinf(range_m) for range_m in told.values())
    assert len(told) < BEAMS
    assert scan.origin[0] == pytest.approx(10.0 + (NOSE_M + 0.05) * math.cos(0.5))


def test_ranges_are_noisy_and_some_beams_fail() -> None:
    wide = [Mass("front", as_points([(30, -100), (31, -100), (31, 100), (30, 100)]))]
    ranges, bearings = [], []
    sensor = Sensor([], NOSE_M, seed=2)
    for _ in range(30):
        scan = sensor.sweep((20.0, 0.0, 0.0), wide, [])
        near = np.isfinite(scan.ranges_m)
        ranges.append(scan.ranges_m[near] * np.cos(scan.bearings_rad[near]))
        bearings.append(len(scan.bearings_rad) / BEAMS)
    away = np.concatenate(ranges) - (10.0 - NOSE_M - 0.05)
    assert 0.5 * NOISE_M < away.std() < 1.5 * NOISE_M
    assert abs(away.mean()) < 0.2 * NOISE_M
    assert np.mean(bearings) == pytest.approx(1.0 - sensor_module.DROPOUT_RATIO, abs=0.01)


def test_the_same_seed_measures_the_same() -> None:
    one, other = (Sensor([WALL], NOSE_M, seed=5).sweep(POSE, NEWS, []) for _ in range(2))
    assert np.array_equal(one.ranges_m, other.ranges_m)
    assert one.ranges_m.dtype == np.float32
