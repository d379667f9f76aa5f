"""
Routes on published grid maps against published optimal lengths.

N. Sturtevant, Benchmarks for Grid-Based Pathfinding, IEEE Transactions on Computational
Intelligence and AI in Games, 2012: synthetic maps, and shortest lengths from cell to cell in eight
directions without cutting corners. A disc that is a little narrower than a cell can follow such a
path, so the shortest route of the disc is no longer; and what is proven to be a lower bound for
the disc must not be above the published length.
"""

import functools
import os
from pathlib import Path

import numpy as np
import pytest

from byway_planning import Disc, Site, plan

OPEN_DATA = os.environ.get("BYWAY_OPEN_DATA", "")
pytestmark = pytest.mark.skipif(not OPEN_DATA, reason="BYWAY_OPEN_DATA names no folder")

#: A cell of a map is a metre, and six by six of the site's own.
CELL_M = 1.0 / 6.0
DISC = Disc(radius_m=0.45, clearance_m=0.0)
MAPS = ("maze512-32-9", "random512-20-0")


@functools.cache
def cells_of(name: str) -> np.ndarray:
    """Cells, row 0 at the top of the file; "." is free, everything else is not."""
    lines = Path(OPEN_DATA, f"{name}.map").read_text().splitlines()
    rows = lines[lines.index("map") + 1 :]
    return np.array([[character != "." for character in row] for row in rows], np.uint8)


@functools.cache
def site_of(name: str, window: tuple[int, int, int, int]) -> Site:
    first_row, last_row, first_column, last_column = window
    cells = cells_of(name)[first_row:last_row, first_column:last_column]
    fine = np.kron(cells, np.ones((6, 6), np.uint8))
    return Site.from_grid(fine, cell_m=CELL_M, corner_m=(first_column, first_row))


def questions(name: str) -> list[tuple[tuple[int, int], tuple[int, int], float]]:
    """Start and goal (column, row), and the published length."""
    lines = Path(OPEN_DATA, f"{name}.map.scen").read_text().splitlines()[1:]
    told = [line.split() for line in lines]
    return [
        ((int(f[4]), int(f[5])), (int(f[6]), int(f[7])), float(f[8])) for f in told if len(f) == 9
    ]


def within(name: str, side: int, count: int) -> list[tuple[tuple[int, int, int, int], tuple]]:
    """
    Questions that are about a part of the map, and that part.

    Every path of the published length stays within half of it from both ends' middle, so nothing
    is cut off that could make a difference.
    """
    found = []
    for start, goal, length in questions(name):
        middle = ((start[0] + goal[0]) / 2, (start[1] + goal[1]) / 2)
        reach = int(length / 2) + 2
        window = (
            *(max(int(middle[1]) - reach, 0), min(int(middle[1]) + reach, 512)),
            *(max(int(middle[0]) - reach, 0), min(int(middle[0]) + reach, 512)),
        )
        if length > 10 and window[1] - window[0] <= side and window[3] - window[2] <= side:
            found.append((window, (start, goal, length)))
    step = max(1, len(found) // count)
    return found[::step][:count]


@pytest.mark.parametrize("name", MAPS)
def test_routes_are_no_longer_than_published_and_bounds_not_above(name: str) -> None:
    asked = within(name, 120, 8)
    assert len(asked) >= 3
    for window, (start, goal, published_m) in asked:
        outcome = plan(
            site_of(name, window),
            DISC,
            (start[0] + 0.5, start[1] + 0.5, 0.0),
            (goal[0] + 0.5, goal[1] + 0.5, 0.0),
            time_left=lambda: 1.0,
            seed=1,
            work_max=100_000,
        )
        assert outcome.kind == "route", (name, start, goal)
        assert outcome.bound <= published_m + 1e-6
        assert outcome.bound <= outcome.cost
        assert outcome.cost <= published_m + 1e-6
