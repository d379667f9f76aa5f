"""Settings of a site: what they mean in cells and tiles, and what is refused."""

import math

import pytest

from byway_planning.site import LayerSettings, SiteSettings

LIMITS = (0.0, 0.0, 100.0, 60.0)


def test_tiles_cover_the_limits():
    settings = SiteSettings(LIMITS)
    assert settings.tiles == (10, 16)  # of 6.4 m
    assert settings.tile_m == pytest.approx(6.4)
    assert SiteSettings((0, 0, 6.4 * 3, 6.4)).tiles == (1, 3)
    assert SiteSettings((0, 0, 0.01, 0.01)).tiles == (1, 1)
    assert settings.corner_m((2, 3)) == pytest.approx((19.2, 12.8))


def test_derived_lengths_are_whole_cells():
    for cell_m in (0.01, 0.05, 0.1, 0.25, 0.5, 2.0):
        for tile_cells in (16, 32, 64, 128):
            settings = SiteSettings((0.0, 0.0, 50.0, 50.0), cell_m, tile_cells=tile_cells)
            assert 4 <= settings.reach_cells <= tile_cells
            assert settings.reach_cells * cell_m <= settings.reach_m + cell_m
            assert tile_cells % (4 * settings.room_cells) == 0
            assert 1 <= settings.bucket_side <= 32


def test_a_reach_that_is_not_told_is_eight_cells_at_least():
    assert SiteSettings(LIMITS, 0.1).reach_m == 3.2
    assert SiteSettings(LIMITS, 1.0).reach_m == 8.0


def test_whole_numbers_are_metres_too():
    settings = SiteSettings((0, 0, 100, 60), 1, (5, 6), 8)
    values = [*settings.limits_m, settings.cell_m, *settings.origin_m, settings.reach_m]
    assert all(type(value) is float for value in values)


@pytest.mark.parametrize(
    ("named", "changes"),
    [
        ("limits_m", {"limits_m": (0.0, 0.0, math.nan, 1.0)}),
        ("limits_m", {"limits_m": (0.0, 0.0, math.inf, 1.0)}),
        ("limits_m", {"limits_m": (0.0, 0.0, 0.0, 1.0)}),
        ("limits_m", {"limits_m": (5.0, 0.0, 1.0, 1.0)}),
        ("origin_m", {"limits_m": (500000.0, 5000000.0, 500100.0, 5000100.0)}),
        ("origin_m", {"origin_m": (math.nan, 0.0)}),
        ("cell_m", {"cell_m": 0.0}),
        ("cell_m", {"cell_m": -0.1}),
        ("cell_m", {"cell_m": math.nan}),
        ("cell_m", {"cell_m": 3.0}),
        ("reach_m", {"reach_m": 0.3}),
        ("reach_m", {"reach_m": math.nan}),
        ("reach_m", {"reach_m": math.inf}),
        ("tile_cells", {"tile_cells": 48}),
        ("larger cell_m", {"limits_m": (0.0, 0.0, 90000.0, 90000.0)}),
    ],
)
def test_nonsense_is_refused_by_name(named, changes):
    with pytest.raises(ValueError, match=named):
        SiteSettings(**({"limits_m": LIMITS} | changes))


def test_a_layer_of_outlines_has_no_unknown_cells():
    with pytest.raises(ValueError, match="outlines only"):
        LayerSettings(unknown_blocks=True, outlines_only=True)
