"""Range scans: cells by a plain twin, decay, and what is refused."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from byway_planning import LayerSettings, Memory, SiteModel, SiteSettings
from byway_planning.site import SiteError

LIMITS = (0.0, 0.0, 20.0, 16.0)
CELL_M = 0.1


def site(**layer) -> SiteModel:
    model = SiteModel(SiteSettings(LIMITS), Memory.private())
    model.declare("lidar", LayerSettings(**layer))
    return model


def cells_of(model: SiteModel, fill: int = 0) -> np.ndarray:
    """Cells of the whole site, rows from the lowest y."""
    out = np.full((160, 200), fill, np.uint8)
    for (x, y), cells in model.publish().cells("lidar"):
        r, c = round(y / CELL_M), round(x / CELL_M)
        h, w = min(64, 160 - r), min(64, 200 - c)
        out[r : r + h, c : c + w] = cells[:h, :w]
    return out


def twin(before: np.ndarray, x: float, y: float, beams, range_m_max: float) -> np.ndarray:
    """Cells along beams, by stepping in hundredths of a cell; ends last."""
    out = before.copy()
    ends = []
    for direction, length in beams:
        met = length < range_m_max
        reach = min(length, range_m_max)
        for s in np.append(np.arange(0.0, reach, CELL_M / 100.0), reach):
            r = math.floor((y + s * math.sin(direction)) / CELL_M)
            c = math.floor((x + s * math.cos(direction)) / CELL_M)
            if 0 <= r < 160 and 0 <= c < 200:
                out[r, c] = 0
        if met:
            r = math.floor((y + reach * math.sin(direction)) / CELL_M)
            c = math.floor((x + reach * math.cos(direction)) / CELL_M)
            ends.append((r, c))
    for r, c in ends:
        if 0 <= r < 160 and 0 <= c < 200:
            out[r, c] = 1
    return out


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 10**6))
def test_cells_are_those_along_the_beams_and_at_their_ends(seed: int) -> None:
    rng = np.random.default_rng(seed)
    model = site()
    before = rng.choice(3, (160, 200), p=[0.7, 0.2, 0.1]).astype(np.uint8)
    model.patch("lidar", (0.0, 0.0), CELL_M, before)
    x, y, heading = rng.uniform((1.0, 1.0, -3.0), (19.0, 15.0, 3.0))
    bearings = rng.uniform(-math.pi, math.pi, 24)
    ranges = np.where(rng.uniform(size=24) < 0.2, np.inf, rng.uniform(0.2, 14.0, 24))
    model.scan("lidar", (x, y, heading), bearings, ranges, 9.0)
    wanted = twin(before, x, y, zip(heading + bearings, ranges, strict=True), 9.0)
    found = cells_of(model)
    # Stepping misses what a beam only grazes at a corner: free cells that it did not see.
    differs = found != wanted
    assert (found[differs] == 0).all()
    assert differs.sum() <= 0.02 * (wanted != before).sum() + 3


def test_the_rays_of_one_scan_do_not_clear_what_others_met() -> None:
    model = site()
    # Two beams in the same direction: the longer goes through the cell where the shorter ends.
    model.scan("lidar", (2.05, 8.05, 0.0), [0.0, 0.0], [3.0, 6.0], 10.0)
    row = cells_of(model)[80]
    assert list(np.flatnonzero(row == 1)) == [50, 80]
    assert (row[20:50] == 0).all()


def test_short_ranges_say_nothing_and_long_ones_free_the_way() -> None:
    model = site(unknown_blocks=True)
    model.scan("lidar", (2.05, 8.05, 0.0), [0.0, 0.3], [5.0, 0.1], 5.0, range_m_min=0.2)
    cells = cells_of(model, 2)
    assert (cells[80, 20:71] == 0).all()
    assert (cells == 1).sum() == 0
    assert (cells == 0).sum() == 51


def test_what_was_scanned_is_forgotten_after_a_while() -> None:
    model = site(decay_s=5.0)
    model.scan("lidar", (2.05, 8.05, 0.0), [0.0], [3.0], 10.0, at_s=100.0)
    assert model.next_carry_s(100.5) == pytest.approx(105.0)
    model.carry(104.9)
    assert cells_of(model)[80, 50] == 1
    model.scan("lidar", (2.05, 8.05, 0.0), [0.1], [3.0], 10.0, at_s=103.0)
    model.carry(105.1)
    cells = cells_of(model)
    assert cells[80, 50] == 2  # unknown again
    assert (cells == 1).sum() == 1  # the second scan's
    model.carry(108.1)
    assert (cells_of(model) == 1).sum() == 0
    assert model.next_carry_s(108.1) is None


def test_what_a_patch_says_is_not_forgotten() -> None:
    model = site(decay_s=5.0)
    model.scan("lidar", (2.05, 8.05, 0.0), [0.0], [3.0], 10.0, at_s=100.0)
    model.patch("lidar", (4.8, 7.8), CELL_M, np.ones((5, 5), np.uint8))
    model.carry(200.0)
    cells = cells_of(model)
    assert (cells[78:83, 48:53] == 1).all()
    assert (cells[80, 20:48] == 2).all()


def test_only_tiles_that_beams_cross_are_touched() -> None:
    model = SiteModel(SiteSettings((0.0, 0.0, 1000.0, 1000.0)), Memory.private())
    model.declare("lidar", LayerSettings())
    model.publish()
    model.scan("lidar", (500.0, 500.0, 0.0), [0.0, 1.0], [400.0, 300.0], 1000.0)
    model.publish()
    assert len(model.changed_m) == 2  # the cells at the two ends; free ground stays as it was
    assert len(list(model.publish().cells("lidar"))) == 2


def test_what_a_sensor_at_the_border_sees_beyond_it_costs_nothing() -> None:
    model = site(unknown_blocks=True)
    bearings = np.linspace(-math.pi, math.pi, 65_536)
    model.scan("lidar", (20.0, 16.0, 0.0), bearings, np.full(65_536, 900.0), 1000.0)
    cells = cells_of(model, 2)
    assert (cells == 0).all()
    model.scan("lidar", (0.0, 0.0, 0.0), [0.0, math.pi / 2, -math.pi / 2], [5.05, 6.05, 7.0], 9.0)
    assert set(zip(*np.nonzero(cells_of(model, 2) == 1), strict=True)) == {(0, 50), (60, 0)}


def test_scans_that_would_take_long_are_refused() -> None:
    model = SiteModel(SiteSettings((0.0, 0.0, 1000.0, 1000.0)), Memory.private())
    model.declare("lidar", LayerSettings())
    bearings = np.linspace(-math.pi, math.pi, 65_536)
    with pytest.raises(SiteError, match="fewer") as refused:
        model.scan("lidar", (500.0, 500.0, 0.0), bearings, np.full(65_536, np.inf), 1000.0)
    assert refused.value.code == "too_large"


@pytest.mark.parametrize(
    ("more", "code"),
    [
        ({"ranges_m": [1.0, math.nan]}, "bad_scan"),
        ({"ranges_m": [1.0, -1.0]}, "bad_scan"),
        ({"ranges_m": [1.0, -math.inf]}, "bad_scan"),
        ({"bearings_rad": [math.inf, 0.0]}, "bad_scan"),
        ({"ranges_m": [1.0]}, "bad_scan"),
        ({"ranges_m": "near"}, "bad_scan"),
        ({"range_m_max": 0.0}, "bad_scan"),
        ({"range_m_max": 2000.0}, "bad_scan"),
        ({"range_m_min": 9.0}, "bad_scan"),
        ({"range_m_max": math.nan}, "not_finite"),
        ({"origin": (math.nan, 0.0, 0.0)}, "not_finite"),
        ({"origin": (-5.0, 5.0, 0.0)}, "outside_limits"),
        ({"origin": (1e7, 5.0, 0.0)}, "too_large"),
        ({"layer": "outlines"}, "outlines_only"),
        ({"layer": "nowhere"}, "unknown_layer"),
        ({"ranges_m": np.ones(70_000), "bearings_rad": np.ones(70_000)}, "too_large"),
    ],
)
def test_bad_scans_are_refused_and_leave_the_site_as_it_was(more, code: str) -> None:
    model = site(decay_s=5.0)
    model.declare("outlines", LayerSettings(outlines_only=True))
    model.scan("lidar", (5.0, 5.0, 0.0), [0.3, 0.4], [2.0, 3.0], 8.0)
    before = cells_of(model)
    revision = model.revision
    told = {
        "layer": "lidar", "origin": (5.0, 5.0, 0.0), "bearings_rad": [0.0, 0.1],
        "ranges_m": [1.0, 2.0], "range_m_max": 8.0,
    } | more  # fmt: skip
    with pytest.raises(SiteError) as refused:
        model.scan(**told)
    assert refused.value.code == code
    assert (cells_of(model) == before).all()
    assert model.revision == revision


def test_a_successor_forgets_a_while_after_it_began() -> None:
    """When its cells were scanned is not known to it; they count as scanned when it took over."""
    memory = Memory.private()
    model = SiteModel(SiteSettings(LIMITS), memory)
    model.declare("lidar", LayerSettings(decay_s=5.0))
    model.scan("lidar", (2.05, 8.05, 0.0), [0.0], [3.0], 10.0, at_s=100.0)
    handle = model.publish().handle
    again = SiteModel.recover(memory, handle, [handle])
    assert again.next_carry_s(103.0) == 103.0
    again.carry(103.0)
    assert cells_of(again)[80, 50] == 1
    again.carry(107.9)
    assert cells_of(again)[80, 50] == 1
    again.carry(108.1)
    assert cells_of(again)[80, 50] == 2


# -- turned patches -----------------------------------------------------------------------------


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10**6))
def test_turned_patches_are_exact_to_a_cell_by_shapely(seed: int) -> None:
    import shapely

    rng = np.random.default_rng(seed)
    model = site()
    x, y, heading = rng.uniform((4.0, 4.0, -4.0), (14.0, 10.0, 4.0))
    cell = float(rng.choice([0.05, 0.1, 0.23, 0.4]))
    rows, columns = (int(v) for v in rng.integers(2, 14, 2))
    before = rng.choice(2, (160, 200), p=[0.8, 0.2]).astype(np.uint8)
    model.patch("lidar", (0.0, 0.0), CELL_M, before)
    patch = rng.choice(3, (rows, columns), p=[0.6, 0.3, 0.1]).astype(np.uint8)
    model.patch("lidar", (x, y), cell, patch, heading)
    found = cells_of(model)

    def placed(shape):
        turned = shapely.affinity.rotate(shape, heading, origin=(0, 0), use_radians=True)
        return shapely.affinity.translate(turned, x, y)

    whole = placed(shapely.box(0, 0, columns * cell, rows * cell))
    taken = {
        value: shapely.union_all(
            [placed(shapely.box(c * cell, r * cell, (c + 1) * cell, (r + 1) * cell))
             for r, c in zip(*np.nonzero(patch == value), strict=True)]
        )
        for value in (1, 2)
    }  # fmt: skip
    for r in range(160):
        for c in range(200):
            square = shapely.box(c * CELL_M, r * CELL_M, (c + 1) * CELL_M, (r + 1) * CELL_M)
            if not whole.intersects(square):
                assert found[r, c] == before[r, c]
                continue
            middle = shapely.Point((c + 0.5) * CELL_M, (r + 0.5) * CELL_M)
            areas = {v: taken[v].intersection(square).area for v in (1, 2)}
            # A hair of overlap may count or not, and a middle on the border may be either.
            hair = any(0.0 < area < 1e-6 for area in areas.values())
            if hair or whole.boundary.distance(middle) < 1e-6:
                continue
            over = {v: areas[v] > 0.0 for v in (1, 2)}
            if whole.contains(middle):
                assert found[r, c] == (1 if over[1] else 2 if over[2] else 0)
            else:
                assert found[r, c] == (1 if over[1] else before[r, c])


def test_a_patch_that_rolls_along_leaves_nothing_behind() -> None:
    """A sensor that always sees the same post from another place, turning."""
    model = site()
    for i in range(60):
        heading = 0.11 * i
        cells = np.zeros((80, 80), np.uint8)
        corner = (8.0 + 0.037 * i, 7.0 + 0.021 * i)
        c, s = math.cos(heading), math.sin(heading)
        corner = (corner[0] - 4.0 * (c - s), corner[1] - 4.0 * (s + c))
        # The post at (9, 8), in the frame of the patch.
        dx, dy = 9.0 - corner[0], 8.0 - corner[1]
        cells[int((c * dy - s * dx) / 0.1), int((c * dx + s * dy) / 0.1)] = 1
        model.patch("lidar", corner, 0.1, cells, heading)
    rows, columns = np.nonzero(cells_of(model) == 1)
    assert 1 <= len(rows) <= 9
    assert np.hypot((columns + 0.5) * 0.1 - 9.0, (rows + 0.5) * 0.1 - 8.0).max() < 0.3
