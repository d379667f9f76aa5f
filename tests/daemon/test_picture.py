"""Drawings: what is where on the paper. Pixels are read back from the file."""

import itertools
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest
from matplotlib.image import imread
from matplotlib.text import Annotation

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

    def near(self, x_m: float, y_m: float, colour: str, reach: int = 3, off_max: int = 6) -> bool:
        """Whether this colour is printed within so many pixels of a place."""
        column, up = self._to_display.transform((x_m, y_m))
        row = self._pixels.shape[0] - up
        r, c = round(row), round(column)
        part = self._pixels[r - reach : r + reach + 1, c - reach : c + reach + 1]
        return bool((abs(part - rgb(colour)).max(axis=-1) <= off_max).any())


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


#: How dichromats see linear RGB: G. M. Machado, M. M. Oliveira, L. A. F. Fernandes, "A
#: physiologically-based model for simulation of color vision deficiency", 2009, severity 1.0.
EYES: dict[str, npt.ArrayLike] = {
    "all cones": np.eye(3),
    "without long": [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216],
                     [-0.003882, -0.048116, 1.051998]],
    "without middle": [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413],
                       [-0.011820, 0.042940, 0.968881]],
    "without short": [[1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602],
                      [0.004733, 0.691367, 0.303900]],
}  # fmt: skip
#: sRGB to CIE XYZ, D65, and its white.
XYZ = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]])
WHITE = np.array([0.9505, 1.0, 1.089])


def seen(colour: str, eye: npt.ArrayLike) -> npt.NDArray[np.float64]:
    """What an eye sees of a colour, in CIE L*a*b*."""
    share = np.array(rgb(colour)) / 255
    linear = np.where(share <= 0.04045, share / 12.92, ((share + 0.055) / 1.055) ** 2.4)
    ratio = XYZ @ np.clip(np.asarray(eye) @ linear, 0.0, 1.0) / WHITE
    root = np.where(ratio > 0.008856, np.cbrt(ratio), 7.787 * ratio + 16 / 116)
    return np.array([116 * root[1] - 16, 500 * (root[0] - root[1]), 200 * (root[1] - root[2])])


@pytest.mark.parametrize("eye", EYES)
def test_inks_are_told_apart_by_every_eye(eye: str) -> None:
    """Colours that differ by 20 in L*a*b* are plainly different as lines; 2 is just visible."""
    inks = [*picture.INKS, picture.ALARM, picture.INK]
    colours = [seen(ink, EYES[eye]) for ink in inks]
    apart = {
        (a, b): np.linalg.norm(colours[a] - colours[b])
        for a, b in itertools.combinations(range(len(inks)), 2)
    }
    assert min(apart.values()) > 20.0, apart


def test_pieces_of_a_sweep_have_one_outline(plan: picture.Plan, tmp_path: Path) -> None:
    plan.sweep([(10, 10), (20, 10), (20, 20), (10, 20)])
    plan.sweep([(15, 10), (25, 10), (25, 20), (15, 20)])
    drawn = Drawn(plan, tmp_path / "x.png")
    assert drawn.near(15.0, 15.0, picture.SWEEP, reach=0)
    # Half of the edge lies below the face, and its dots are a pixel wide.
    assert drawn.near(10.0, 15.0, picture.ALARM, reach=4, off_max=90)
    assert not drawn.near(15.0, 15.0, picture.ALARM, reach=4, off_max=90)


class Blocked:
    x_m, y_m, distance_m = 30.0, 15.0, 8.0
    kind, layer, id = "polygon", "packs", "pack-7"


def test_a_guarded_route_is_strong_ahead_of_its_unit_and_crossed_where_it_is_blocked(
    plan: picture.Plan, tmp_path: Path
) -> None:
    poses = np.column_stack([np.linspace(5, 35, 61), np.full(61, 15.0), np.zeros(61)])
    plan.guarded("tug-3", poses, 17.3, Blocked(), picture.INKS[2])
    drawn = Drawn(plan, tmp_path / "x.png")
    # Two pixels beside the middle of the line only the strong part is printed.
    assert drawn.near(27.9, 15.06, picture.INKS[2], reach=1)
    assert drawn.near(10.0, 15.0, picture.INKS[2], reach=2)
    assert drawn.near(22.3, 15.0, picture.INKS[2])
    assert drawn.near(30.0, 15.0, picture.ALARM)
    texts = [text.get_text() for text in plan._axes.texts]
    assert {"tug-3", "pack-7 in 8.0 m"} <= set(texts)


def test_names_stand_in_masses_that_have_room_and_above_others(plan: picture.Plan) -> None:
    plan.polygons(
        {
            "shed": [(5, 5), (15, 5), (15, 11), (5, 11)],
            "a-long-name-for-a-post": [(20, 5), (20.4, 5), (20.4, 5.4), (20, 5.4)],
        },
        "building",
        named=True,
    )
    inside, above = (text for text in plan._axes.texts if isinstance(text, Annotation))
    assert inside.xy == pytest.approx((10.0, 8.0), abs=0.5)
    assert above.xy == pytest.approx((20.2, 5.4))
    assert above.get_verticalalignment() == "bottom"


def test_the_strip_grows_with_the_legend_and_the_ground_keeps_its_scale(tmp_path: Path) -> None:
    heights, scales = [], []
    for count in (0, 3, 14):
        plan = picture.Plan("a test", BOX_M, ["one line"])
        for k in range(count):
            plan.key(f"layer-{k}", "stack")
        plan.save(tmp_path / "x.png")
        heights.append(imread(tmp_path / "x.png").shape[0])
        (a, _), (b, _) = plan._axes.transData.transform([(0.0, 0.0), (10.0, 0.0)])
        scales.append(b - a)
    assert heights[0] < heights[1] < heights[2]
    assert scales == pytest.approx([scales[0]] * 3, rel=0.01)
