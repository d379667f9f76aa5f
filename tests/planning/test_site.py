"""The site against general-purpose libraries, and against itself made afresh."""

import numpy as np
import pytest
import shapely
from scipy import ndimage

from byway_planning import (
    DiscShape,
    LayerSettings,
    Memory,
    PolygonShape,
    Site,
    SiteError,
    SiteModel,
    SiteSettings,
    Snapshot,
)
from byway_planning.site import MemoryFull
from byway_planning.site.scene import OPEN

LIMITS = (0.0, 0.0, 30.0, 20.0)
CELL_M = 0.1
FIXED = "fixed"


def new_model(memory: Memory | None = None) -> SiteModel:
    model = SiteModel(SiteSettings(LIMITS), memory)
    model.declare(FIXED, LayerSettings())
    model.declare("lidar", LayerSettings())
    model.declare("units", LayerSettings(outlines_only=True))
    return model


def field_of(snapshot: Snapshot) -> np.ndarray:
    """The whole distance field on the corners of the cells, tile by tile put together."""
    scene = snapshot.scene()
    side = scene.tile_cells
    rows, columns = scene.field_of.shape
    whole = np.full((rows * side + 1, columns * side + 1), scene.reach_m)
    for r in range(rows):
        for c in range(columns):
            offset = scene.field_of[r, c]
            if offset != OPEN:
                block = scene.floats[offset : offset + (side + 1) ** 2].reshape(side + 1, side + 1)
                part = whole[r * side : (r + 1) * side + 1, c * side : (c + 1) * side + 1]
                part[:] = np.minimum(part, block)
    return whole


def corners_of(cells: np.ndarray) -> np.ndarray:
    """Corners of cells that touch an occupied one."""
    grown = np.pad(cells, 1).astype(bool)
    return grown[:-1, :-1] | grown[1:, :-1] | grown[:-1, 1:] | grown[1:, 1:]


def outside_distances(cells: np.ndarray, cell_m: float, reach_m: float) -> np.ndarray:
    """scipy.ndimage's exact Euclidean distance transform, cut off."""
    return np.minimum(ndimage.distance_transform_edt(~corners_of(cells)) * cell_m, reach_m)


def random_shape(rng: np.random.Generator) -> PolygonShape | DiscShape:
    x, y = rng.uniform(1.0, 29.0), rng.uniform(1.0, 19.0)
    if rng.random() < 0.3:
        return DiscShape(x, y, rng.uniform(0.1, 1.5))
    points = rng.normal((x, y), rng.uniform(0.2, 2.0), (6, 2))
    return PolygonShape(np.array(shapely.convex_hull(shapely.multipoints(points)).exterior.coords))


def random_change(model: SiteModel, rng: np.random.Generator) -> None:
    kind = rng.integers(4)
    name = f"o{rng.integers(25)}"
    if kind == 0:
        model.drop(FIXED, name)
    elif kind == 1:
        cells = (rng.random((rng.integers(1, 40), rng.integers(1, 40))) < 0.1).astype(np.uint8)
        corner = (CELL_M * rng.integers(0, 290), CELL_M * rng.integers(0, 190))
        model.patch("lidar", corner, CELL_M, cells)
    else:
        model.put(FIXED, name, random_shape(rng))


def copy_of(model: SiteModel, snapshot: Snapshot) -> SiteModel:
    """The same content put into a new model at once."""
    fresh = new_model()
    for layer, name, shape in snapshot.obstacles():
        fresh.put(layer, name, shape)
    for corner, cells in snapshot.cells("lidar"):
        fresh.patch("lidar", corner, CELL_M, cells)
    return fresh


def items_of(snapshot: Snapshot) -> set[tuple[float, ...]]:
    scene = snapshot.scene()
    found = set()
    for tile in np.argwhere(scene.edges_of >= 0):
        offset = scene.edges_of[tuple(tile)]
        buckets = scene.bucket_side**2
        count = int(scene.wholes[offset + buckets])
        first = offset + 2 * buckets + 1
        rows = scene.numbers[first : first + 5 * count].reshape(-1, 5)
        found |= {(*tile.tolist(), *np.round(row, 9).tolist()) for row in rows}
    return found


def test_the_field_of_a_grid_is_scipys_distance_transform():
    rng = np.random.default_rng(1)
    cells = (rng.random((200, 300)) < 0.002).astype(np.uint8)
    snapshot = Site.from_grid(cells, cell_m=CELL_M).snapshot
    found = field_of(snapshot)[:201, :301]
    wanted = outside_distances(cells, CELL_M, snapshot.scene().reach_m)
    assert found == pytest.approx(wanted, abs=1e-5)


def test_after_hundreds_of_changes_a_site_is_what_it_would_be_made_afresh():
    """Only what a change touches is recomputed; the result must not show it."""
    rng = np.random.default_rng(2)
    model = new_model()
    for round_number in range(300):
        random_change(model, rng)
        if round_number % 3 == 0:
            model.release_before(model.publish().revision)
    snapshot = model.publish()
    fresh = copy_of(model, snapshot).publish()
    assert field_of(snapshot).tobytes() == field_of(fresh).tobytes()
    assert items_of(snapshot) == items_of(fresh)
    assert snapshot.scene().far_m.tobytes() == fresh.scene().far_m.tobytes()
    ours, theirs = snapshot.solids(), fresh.solids()
    side = ours.tile_cells**2
    for one, two in zip(ours.cells_of.ravel(), theirs.cells_of.ravel(), strict=True):
        assert (one < 0) == (two < 0)
        if one >= 0:
            assert (
                ours.cells[one : one + side].tobytes() == theirs.cells[two : two + side].tobytes()
            )


def test_memory_stays_flat_while_the_site_changes():
    rng = np.random.default_rng(3)
    model = new_model()
    used = []
    for _ in range(600):
        random_change(model, rng)
        model.release_before(model.publish().revision)
        used.append(model.memory.used_bytes)
    assert max(used[300:]) < 1.5 * max(used[100:300])
    assert model.memory.top_bytes < 2 * max(used)


def test_an_old_snapshot_reads_the_same_until_it_is_released():
    rng = np.random.default_rng(4)
    model = new_model()
    for _ in range(20):
        random_change(model, rng)
    old = model.publish()
    before, items = field_of(old).tobytes(), items_of(old)
    for _ in range(40):
        random_change(model, rng)
        model.publish()
    assert field_of(old).tobytes() == before
    assert items_of(old) == items


@pytest.mark.parametrize("seed", range(3))
def test_the_far_clearance_is_never_overstated(seed):
    rng = np.random.default_rng(seed)
    model = new_model()
    for i in range(4):
        model.put(FIXED, f"o{i}", random_shape(rng))
    scene = model.publish().scene()
    coarse = scene.tile_cells * scene.cell_m / 4
    shapes = shapely.union_all([_outside(shape) for _, _, shape in model.publish().obstacles()])
    points = rng.uniform((0.0, 0.0), (30.0, 20.0), (400, 2))
    told = scene.far_m[(points[:, 1] / coarse).astype(int), (points[:, 0] / coarse).astype(int)]
    assert (told <= shapely.distance(shapely.points(points), shapes) + 1e-6).all()


def _outside(shape: PolygonShape | DiscShape) -> shapely.Geometry:
    if isinstance(shape, PolygonShape):
        return shapely.Polygon(shape.vertices_m)
    return shapely.Point(shape.x_m, shape.y_m).buffer(shape.radius_m, 64)


@pytest.mark.parametrize("seed", range(4))
def test_no_cell_that_a_shape_overlaps_is_missed_by_the_field(seed):
    """The field may be a cell too careful, never more, and never careless."""
    rng = np.random.default_rng(seed)
    model = new_model()
    shape = random_shape(rng)
    model.put(FIXED, "one", shape)
    field = field_of(model.publish())[:201, :301]
    y, x = np.mgrid[0:201, 0:301] * CELL_M
    true_m = shapely.distance(shapely.points(x, y), _outside(shape))
    assert (field <= true_m + 1e-5).all()
    reach = 3.2
    assert (field >= np.minimum(true_m, reach) - 1.4143 * CELL_M - 1e-5).all()


@pytest.mark.parametrize("cell_m", [0.05, 0.1, 0.13, 0.3])
def test_a_patch_of_other_cells_is_taken_on_the_safe_side(cell_m):
    rng = np.random.default_rng(5)
    patch = (rng.random((20, 24)) < 0.1).astype(np.uint8)
    corner = (5.03, 4.01)
    model = new_model()
    model.patch("lidar", corner, cell_m, patch)
    cells = np.zeros((256, 320), np.uint8)
    for (x, y), tile in model.publish().cells("lidar"):
        r, c = round(y / CELL_M), round(x / CELL_M)
        cells[r : r + 64, c : c + 64] = tile
    for row, column in np.argwhere(patch):
        x, y = corner[0] + (column + 0.5) * cell_m, corner[1] + (row + 0.5) * cell_m
        assert cells[int(y / CELL_M), int(x / CELL_M)] == 1


def test_unknown_cells_and_ground_nobody_told_of_block_where_the_layer_says_so():
    cells = np.full((40, 40), 2, np.uint8)
    cells[10:30, 10:30] = 0
    free = Site.from_grid(cells, cell_m=CELL_M, unknown="free")
    blocked = Site.from_grid(
        cells, cell_m=CELL_M, unknown="blocked", limits_m=(-10.0, -10.0, 14.0, 14.0)
    )
    assert (free.snapshot.scene().field_of == OPEN).all()
    scene = blocked.snapshot.scene()
    assert (scene.field_of != OPEN).all()
    offset = scene.field_of[int(12.0 / 6.4), int(12.0 / 6.4)]  # the tile with (2, 2)
    assert offset >= 0
    assert scene.floats[offset : offset + 65 * 65].max() == pytest.approx(1.0, abs=1e-6)


def test_outlines_that_may_be_left_out_are_in_no_raster_and_in_no_scene_without_them():
    model = new_model()
    ring = np.array([(3.0, 3.0), (6.0, 3.0), (6.0, 5.0), (3.0, 5.0)])
    model.put("units", "tug", PolygonShape(ring))
    snapshot = model.publish()
    assert (snapshot.scene().field_of == OPEN).all()
    assert len(snapshot.scene().outline_discs) == 1
    without = frozenset({"units"})
    assert len(snapshot.scene(without).outline_discs) == 0
    assert not np.isfinite(snapshot.solids(without).boxes_m).any()
    with pytest.raises(ValueError, match="cannot be left out"):
        snapshot.scene(frozenset({FIXED}))


RING = [(1.0, 1.0), (4.0, 1.0), (4.0, 3.0)]


@pytest.mark.parametrize(
    ("code", "change"),
    [
        ("unknown_layer", lambda m: m.put("moon", "a", PolygonShape(np.array(RING)))),
        ("too_few_vertices", lambda m: m.put(FIXED, "a", PolygonShape(np.array(RING[:2])))),
        ("crossing_polygon", lambda m: m.put(FIXED, "a", PolygonShape(np.array([RING[0]] * 3)))),
        ("not_finite", lambda m: m.put(FIXED, "a", PolygonShape(np.array([*RING, (np.nan, 0)])))),
        (
            "crossing_polygon",
            lambda m: m.put(
                FIXED, "a", PolygonShape(np.array([(0, 0), (2, 2), (2, 0), (0, 2)], float))
            ),
        ),
        ("bad_radius", lambda m: m.put(FIXED, "a", DiscShape(1.0, 1.0, 0.0))),
        ("outside_limits", lambda m: m.put(FIXED, "a", DiscShape(99.0, 1.0, 0.5))),
        ("too_large", lambda m: m.put(FIXED, "x" * 65, DiscShape(1.0, 1.0, 0.5))),
        ("bad_cells", lambda m: m.patch("lidar", (1.0, 1.0), 0.1, np.full((2, 2), 7, np.uint8))),
        ("bad_cells", lambda m: m.patch("lidar", (1.0, 1.0), 0.1, np.zeros(4, np.uint8))),
        ("not_finite", lambda m: m.patch("lidar", (np.nan, 1.0), 0.1, np.zeros((2, 2), np.uint8))),
        ("outside_limits", lambda m: m.patch("lidar", (99.0, 1.0), 0.1, np.ones((2, 2), np.uint8))),
        ("outlines_only", lambda m: m.patch("units", (1.0, 1.0), 0.1, np.ones((2, 2), np.uint8))),
        ("layer_mismatch", lambda m: m.declare(FIXED, LayerSettings(unknown_blocks=True))),
    ],
)
def test_bad_changes_are_refused_with_their_code_and_change_nothing(code, change):
    model = new_model()
    model.put(FIXED, "kept", PolygonShape(np.array(RING)))
    before = model.publish()
    with pytest.raises(SiteError) as refused:
        change(model)
    assert refused.value.code == code
    assert model.publish() is before


def test_a_successor_goes_on_from_a_snapshot_and_spares_what_others_read():
    rng = np.random.default_rng(6)
    buffer = bytearray(1 << 23)
    model = new_model(Memory.over(buffer, lambda end: None))
    for _ in range(30):
        random_change(model, rng)
    older = model.publish()
    random_change(model, rng)
    newest = model.publish()
    content, read = field_of(newest).tobytes(), field_of(older).tobytes()
    memory = Memory.over(buffer, lambda end: None)
    successor = SiteModel.recover(memory, newest.handle, [older.handle])
    successor.put(FIXED, "new", DiscShape(15.0, 10.0, 0.4))
    after = successor.publish()
    assert after.revision == newest.revision + 1
    assert field_of(older).tobytes() == read
    assert field_of(newest).tobytes() == content
    successor.drop(FIXED, "new")
    assert field_of(successor.publish()).tobytes() == content


def test_a_site_too_large_for_its_memory_says_so_and_goes_on_when_there_is_less():
    def grow(end: int) -> None:
        if end > 150_000:
            raise OSError("no more")

    model = new_model(Memory.over(bytearray(1 << 20), grow))
    model.publish()
    for i in range(12):
        model.put(FIXED, f"o{i}", DiscShape(2.0 + 2.3 * i, 10.0, 0.5))
    with pytest.raises(MemoryFull):
        model.publish()
    for i in range(2, 12):
        model.drop(FIXED, f"o{i}")
    snapshot = model.publish()
    fresh = copy_of(model, snapshot).publish()
    assert field_of(snapshot).tobytes() == field_of(fresh).tobytes()
