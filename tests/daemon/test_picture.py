"""Drawings: what is where on the paper. Pixels are read back from the file."""

from pathlib import Path

import numpy as np
import pytest
from matplotlib.image import imread

from bywayd import picture

BOX_M = (0.0, 0.0, 40.0, 30.0)
TABLE = np.dtype([("x_m", "f8"), ("y_m", "f8"), ("gear", "i1")])
BOX_OUTLINE_M = [(-1.0, -1.0), (3.0, -1.0), (3.0, 1.0), (-1.0, 1.0)]


def rgb(colour: str) -> tuple[int, ...]:
    return tuple(int(colour[i : i + 2], 16) for i in (1, 3, 5))


class Drawn:
    """A saved drawing, asked by metres; the ground's frame is found from the axes themselves."""

    def __init__(self, plan: picture.Plan, file: Path) -> None:
        plan.save(file)
        self._pixels = np.round(imread(file)[:, :, :3] * 255).astype(int)
        self._to_display = plan._axes.transData

    def near(self, x_m: float, y_m: float, colour: str, reach: int = 3) -> bool:
        """Whether this colour is printed within so many pixels of a place."""
        column, up = self._to_display.transform((x_m, y_m))
        row = self._pixels.shape[0] - up
        r, c = round(row), round(column)
        part = self._pixels[r - reach : r + reach + 1, c - reach : c + reach + 1]
        return bool((abs(part - rgb(colour)).max(axis=-1) <= 6).any())


@pytest.fixture
def plan() -> picture.Plan:
    return picture.Plan("a test", BOX_M, ["one line"])


def test_cells_lie_with_their_lowest_row_at_the_lowest_y(
    plan: picture.Plan, tmp_path: Path
) -> None:
    cells = np.zeros((20, 40), np.uint8)
    cells[:5, :] = 1
    cells[15:, :] = 2
    plan.cells((10.0, 10.0), 0.5, cells)
    drawn = Drawn(plan, tmp_path / "x.png")
    assert drawn.near(20.0, 11.0, picture.INK, reach=0)
    assert drawn.near(20.0, 19.0, picture.UNKNOWN, reach=0)
    assert drawn.near(21.3, 14.0, picture.PAPER, reach=0)
    assert drawn.near(32.0, 11.0, picture.PAPER, reach=0)


def test_a_route_is_drawn_where_it_goes(plan: picture.Plan, tmp_path: Path) -> None:
    table = np.zeros(30, TABLE)
    table["x_m"] = np.linspace(5.0, 35.0, 30)
    table["y_m"] = 21.0
    table["gear"] = 1
    plan.route(table, picture.INKS[1])
    drawn = Drawn(plan, tmp_path / "x.png")
    assert all(drawn.near(x_m, 21.0, picture.INKS[1]) for x_m in (6.0, 17.0, 34.0))
    assert not drawn.near(37.0, 21.0, picture.INKS[1])
    assert list(plan._legend) == ["route, forward"]


def test_a_route_in_reverse_is_dashed_and_said_so(plan: picture.Plan, tmp_path: Path) -> None:
    table = np.zeros(300, TABLE)
    table["x_m"] = np.linspace(5.0, 35.0, 300)
    table["y_m"] = 21.0
    table["gear"] = -1
    plan.route(table, picture.INKS[0])
    drawn = Drawn(plan, tmp_path / "x.png")
    printed = [drawn.near(x_m, 21.0, picture.INKS[0], 0) for x_m in np.arange(6, 34, 0.05)]
    assert 0.3 < np.mean(printed) < 0.85
    assert list(plan._legend) == ["route, in reverse"]


def test_masses_vehicles_and_goals_are_drawn(plan: picture.Plan, tmp_path: Path) -> None:
    plan.limits(BOX_M)
    plan.polygons({"kiln": [(5, 5), (9, 5), (9, 9), (5, 9)]}, "building", named=True)
    plan.discs({"post": (20.0, 8.0, 1.0)})
    plan.vehicle(BOX_OUTLINE_M, (30.0, 20.0, 0.0), picture.INKS[2])
    plan.vehicle(BOX_OUTLINE_M, (30.0, 25.0, 0.0), picture.INKS[2], ghost=True)
    plan.goal(BOX_OUTLINE_M, (10.0, 20.0, 0.0), picture.INKS[3])
    plan.path([(1.0, 1.0), (1.0, 28.0)], picture.INKS[4], "tug-1")
    drawn = Drawn(plan, tmp_path / "x.png")
    assert drawn.near(5.0, 7.0, picture.INK)
    assert drawn.near(20.0, 9.0, picture.INK)
    assert drawn.near(31.0, 21.0, picture.INKS[2])
    assert drawn.near(10.0, 20.0, picture.INKS[3])
    assert drawn.near(0.0, 15.0, picture.INK)
    assert list(plan._legend) == ["tug-1"]


@pytest.mark.parametrize("suffix", ["svg", "pdf"])
def test_the_suffix_says_the_format(plan: picture.Plan, tmp_path: Path, suffix: str) -> None:
    plan.save(tmp_path / f"x.{suffix}")
    assert (tmp_path / f"x.{suffix}").read_bytes()[:5] in (b"<?xml", b"%PDF-")


def test_the_box_around_what_is_shown_stays_within_the_site() -> None:
    points = [(0.0, 0.0), (30.0, 10.0)]
    assert picture.box_around(points, 5.0) == (-5.0, -5.0, 35.0, 15.0)
    assert picture.box_around(points, 5.0, (-2.0, -9.0, 32.0, 99.0)) == (-2.0, -5.0, 32.0, 15.0)
