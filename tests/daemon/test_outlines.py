"""Outlines at poses."""

import math

import numpy as np
import pytest

from bywayd import outlines

BOX_M = [(-1.0, -1.0), (3.0, -1.0), (3.0, 1.0), (-1.0, 1.0)]


def test_an_outline_is_turned_and_moved() -> None:
    ring = outlines.placed(BOX_M, (10.0, 5.0, math.pi / 2))
    assert ring == pytest.approx(np.array([(11, 4), (11, 8), (9, 8), (9, 4)]))


def test_a_disc_is_drawn_with_its_radius() -> None:
    ring = outlines.disc_outline(2.5)
    assert np.hypot(*ring.T) == pytest.approx(np.full(len(ring), 2.5))


def test_a_vehicle_is_a_footprint_or_a_disc() -> None:
    assert outlines.outline_of({"footprint_m": BOX_M}).tolist() == [list(p) for p in BOX_M]
    assert np.hypot(*outlines.outline_of({"radius_m": 0.5}).T) == pytest.approx(np.full(48, 0.5))
