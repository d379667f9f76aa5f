"""The referee: touches are counted once, near misses are measured."""

import pytest

from bywayd.yard.referee import Referee
from bywayd.yard.shapes import Mass, Masses, rectangle

NO_PACKS = Masses([])
KILN = Masses([Mass("kiln", rectangle(20.0, 20.0, 4.0, 4.0))])


def test_the_nearest_approach_is_kept_with_its_moment() -> None:
    referee = Referee(KILN)
    for step, x_m in enumerate((16.0, 16.6, 16.2)):
        referee.look({"tug": rectangle(x_m, 20.0, 2.0, 1.0)}, NO_PACKS, float(step))
    assert referee.nearest.distance_m == pytest.approx(0.4)
    assert (referee.nearest.unit, referee.nearest.other) == ("tug", "kiln")
    assert referee.nearest.at_s == 1.0
    assert referee.collisions == []


def test_a_touch_counts_once_while_it_lasts_and_again_when_it_comes_back() -> None:
    referee = Referee(KILN)
    for step, x_m in enumerate((16.0, 17.5, 17.6, 16.0, 17.5)):
        referee.look({"tug": rectangle(x_m, 20.0, 2.0, 1.0)}, NO_PACKS, float(step))
    assert [near.at_s for near in referee.collisions] == [1.0, 4.0]


def test_units_packs_and_limits_count_too() -> None:
    referee = Referee(Masses([]))
    packs = Masses([Mass("pack-1", rectangle(50.0, 30.0, 2.0, 1.0))])
    rings = {
        "tug": rectangle(30.0, 30.0, 2.0, 1.0),
        "flatbed": rectangle(31.5, 30.0, 2.0, 1.0),
        "loader": rectangle(51.0, 30.5, 2.0, 1.0),
        "barrow": rectangle(0.9, 30.0, 2.0, 1.0),
    }
    referee.look(rings, packs, 0.0)
    touched = {(near.unit, near.other) for near in referee.collisions}
    assert touched == {("tug", "flatbed"), ("loader", "pack-1"), ("barrow", "limits")}
    assert referee.nearest_units.distance_m == 0.0
