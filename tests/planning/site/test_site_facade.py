"""Sites for scripts, made from grids and shapes in the caller's own coordinates."""

import numpy as np
import pytest
import shapely
from tests.planning.site.site_twins import (
    blocked_of,
    expected_field,
    field_of,
    polygon_of,
    read_all,
)

from byway_planning.site import Site, SiteError
from byway_planning.site.patches import PATCH_CELLS_MAX
from byway_planning.site.scene import OPEN, SOLID

KILN = [(10.0, 5.0), (18.0, 5.0), (18.0, 9.0), (10.0, 9.0)]
GRID = np.zeros((40, 60), np.uint8)
GRID[10:14, 20:30] = 1
GRID[30:33, 5:9] = 2


def test_the_field_of_a_grid_is_scipys_distance_transform():
    """The example of everyone's first hour: a grid, nothing else."""
    rng = np.random.default_rng(1)
    cells = (rng.random((130, 190)) < 0.002).astype(np.uint8)
    site = Site.from_grid(cells, cell_m=0.1)
    field = field_of(site.snapshot.scene())[:131, :191]
    assert field == pytest.approx(expected_field(cells == 1, 0.1, 32), abs=1e-6)
    assert site.snapshot.settings.limits_m == pytest.approx((0.0, 0.0, 19.0, 13.0))


def test_grid_polygons_and_discs_come_together():
    site = Site.from_grid(
        GRID, cell_m=0.5, corner_m=(-2.0, 1.0), polygons={"kiln": KILN}, discs={"tank": (4, 8, 2)}
    )
    solids = site.snapshot.solids()
    assert solids.vertices_m.tolist() == [list(corner) for corner in KILN]
    assert solids.discs_m.tolist() == [[4.0, 8.0, 2.0]]
    assert (blocked_of(site.snapshot)[:40, :60] == (GRID == 1)).all()
    assert (solids.corner_x_m, solids.corner_y_m) == (-2.0, 1.0)


def test_unknown_cells_and_what_is_outside_the_grid_block_when_told_to():
    free = Site.from_grid(GRID, cell_m=0.1, limits_m=(-3.2, -3.2, 9.6, 9.6))
    blocked = Site.from_grid(GRID, cell_m=0.1, limits_m=(-3.2, -3.2, 9.6, 9.6), unknown="blocked")
    known = np.pad(GRID, ((32, 128 - 72), (32, 128 - 92)), constant_values=2)
    assert (blocked_of(free.snapshot) == (known == 1)).all()
    assert (blocked_of(blocked.snapshot) == (known != 0)).all()


def test_a_grid_that_does_not_fit_the_limits_is_never_taken_too_lightly():
    """Cells of the site that the grid covers in part are no better than what is outside."""
    site = Site.from_grid(GRID, cell_m=0.1, corner_m=(0.03, 0.04), limits_m=(-1.0, -1.0, 8.0, 6.0))
    rows, columns = np.nonzero(GRID == 1)
    x, y = 0.03 + columns * 0.1, 0.04 + rows * 0.1
    true = shapely.union_all(shapely.box(x, y, x + 0.1, y + 0.1))
    rows, columns = np.nonzero(blocked_of(site.snapshot))
    x, y = -1.0 + columns * 0.1, -1.0 + rows * 0.1
    taken = shapely.union_all(shapely.box(x, y, x + 0.1, y + 0.1))
    assert shapely.difference(true, taken).area < 1e-12
    assert taken.hausdorff_distance(true) < 0.1 * 1.4143


@pytest.mark.parametrize("unknown", ["free", "blocked"])
def test_a_grid_larger_than_the_largest_patch_has_no_seam(unknown):
    """In parts, off the site's own cells by half a cell, free but for one column."""
    cells = np.zeros((3, PATCH_CELLS_MAX + 5), np.uint8)
    cells[:, 7] = 1
    site = Site.from_grid(
        cells, cell_m=0.1, corner_m=(0.05, 0.05), limits_m=(0.0, 0.0, 410.3, 0.4), unknown=unknown
    )
    blocked = blocked_of(site.snapshot)[1:3]
    wanted = np.zeros((2, 4103), np.uint8)
    wanted[:, 7:9] = 1  # the column lies over two of the site's
    if unknown == "blocked":
        wanted[:, 0] = wanted[:, PATCH_CELLS_MAX + 5 :] = 1
    assert (blocked[:, : wanted.shape[1]] == wanted).all()


def test_survey_coordinates_give_the_same_site():
    shift = (500_000.0, 5_000_000.0)
    near = Site.from_grid(GRID, cell_m=0.5, polygons={"kiln": KILN}, discs={"tank": (4, 8, 2)})
    far = Site.from_grid(
        GRID,
        cell_m=0.5,
        corner_m=shift,
        polygons={"kiln": [(x + shift[0], y + shift[1]) for x, y in KILN]},
        discs={"tank": (4 + shift[0], 8 + shift[1], 2)},
        origin_m=shift,
    )
    assert far.origin_m == shift
    assert near.origin_m == (0.0, 0.0)
    assert read_all(near.snapshot) == read_all(far.snapshot)


def test_shapes_alone_need_limits():
    site = Site.from_shapes(
        {"kiln": KILN}, {"tank": (4, 8, 2)}, limits_m=(0, 0, 30, 20), cell_m=0.2
    )
    scene = site.snapshot.scene()
    assert (scene.x_m_max, scene.y_m_max, scene.cell_m) == (30.0, 20.0, 0.2)
    assert [name for _, name, _ in site.snapshot.obstacles()] == ["kiln", "tank"]
    kiln = next(shape for _, name, shape in site.snapshot.obstacles() if name == "kiln")
    assert polygon_of(kiln).area == 32.0
    empty = Site.from_shapes(limits_m=(0, 0, 30, 20)).snapshot.scene()
    assert (empty.field_of == OPEN).all()
    assert not (empty.field_of == SOLID).any()


CROSSED = {"a": [(0, 0), (2, 2), (2, 0), (0, 2)]}
NO_ROWS = np.zeros((0, 5), np.uint8)
#: What is wrong, its code, the grid and the rest.
BAD_SITES = {
    "flat": ("bad_cells", np.zeros(5, np.uint8), {}),
    "empty": ("bad_cells", NO_ROWS, {"limits_m": (0, 0, 1, 1)}),
    "type": ("bad_cells", np.zeros((5, 5)), {}),
    "value": ("bad_cells", np.full((5, 5), 3, np.uint8), {}),
    "outside": ("outside_limits", GRID, {"limits_m": (50, 50, 60, 60)}),
    "crossing": ("crossing_polygon", GRID, {"polygons": CROSSED}),
    "disc": ("bad_radius", GRID, {"discs": {"a": (1, 1, -1)}}),
}


@pytest.mark.parametrize("what", BAD_SITES)
def test_a_bad_site_is_refused_with_its_code(what):
    code, cells, more = BAD_SITES[what]
    with pytest.raises(SiteError) as refused:
        Site.from_grid(cells, cell_m=0.1, **more)
    assert refused.value.code == code


@pytest.mark.parametrize("cell_m", [0.0, -1.0, float("nan"), float("inf")])
def test_a_bad_cell_is_a_value_error(cell_m):
    with pytest.raises(ValueError, match=r"cell_m|limits_m"):
        Site.from_grid(GRID, cell_m=cell_m)
