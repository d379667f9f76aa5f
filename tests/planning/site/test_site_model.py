"""Changes to a site: what they do, and that a refused one does nothing."""

import numpy as np
import pytest
from tests.planning.site.site_twins import (
    SMALL,
    blocked_of,
    box,
    buckets_of,
    change,
    declared,
    expected_field,
    field_of,
    polygon_of,
    read_all,
    star,
)

from byway_planning.site import (
    DiscShape,
    LayerSettings,
    PolygonShape,
    SiteError,
    SiteModel,
    SiteSettings,
)
from byway_planning.site.patches import PATCH_CELLS_MAX
from byway_planning.site.scene import OPEN, SOLID
from byway_planning.site.shapes import ID_BYTES_MAX

ONES = np.ones((3, 3), np.uint8)


def obstacles(model: SiteModel) -> dict[tuple[str, str], object]:
    return {(layer, name): shape for layer, name, shape in model.publish().obstacles()}


def test_the_field_is_scipys_distance_transform():
    """Shapes with edges between cell borders, so that cells are filled without doubt."""
    model = declared(SiteModel(SMALL))
    rng = np.random.default_rng(5)
    x0, y0 = SMALL.limits_m[:2]
    rows, columns = (n * SMALL.tile_cells for n in SMALL.tiles)
    filled = np.zeros((rows, columns), bool)
    for i in range(10):
        row, column = (int(rng.integers(0, n - 6)) for n in (75, 90))
        height, width = rng.integers(1, 6, 2)
        x, y = x0 + column * 0.1 + 0.03, y0 + row * 0.1 + 0.03
        model.put("fixed", f"{i}", box(x, y, width * 0.1 - 0.06, height * 0.1 - 0.06))
        filled[row : row + height, column : column + width] = True
    cells = (rng.random((20, 30)) < 0.03).astype(np.uint8)
    model.patch("lidar", (x0 + 4.0, y0 + 5.0), 0.1, cells)
    filled[50:70, 40:70] |= cells == 1
    field = field_of(model.publish().scene())
    wanted = expected_field(filled, 0.1, SMALL.reach_cells)
    assert field == pytest.approx(wanted, abs=1e-6)
    assert (field < 1.19).any()
    assert (field > 1.19).any()


def test_rooms_hold_the_largest_distance_in_them():
    model = declared(SiteModel(SiteSettings((0.0, 0.0, 6.4, 6.4))))
    model.put("fixed", "a", star(1, 2.0, 3.0, 1.0))
    scene = model.publish().scene()
    field = field_of(scene)
    at, room = int(scene.field_of[0, 0]) + 65 * 65, scene.room_cells
    for size in (room, 4 * room):
        for row in range(0, 64, size):
            for column in range(0, 64, size):
                wanted = field[row : row + size + 1, column : column + size + 1].max()
                assert scene.floats[at] == wanted
                at += 1


def test_far_clearance_is_never_overstated_and_reaches_far():
    """Told for a coarse cell, it holds at every point of it."""
    model = SiteModel(SiteSettings((0.0, 0.0, 120.0, 80.0), 0.25))
    model.declare("a", LayerSettings())
    shapes = [star(i, x, y, 2.0) for i, (x, y) in enumerate([(10.0, 10.0), (90.0, 70.0)])]
    for i, shape in enumerate(shapes):
        model.put("a", f"{i}", shape)
    scene = model.publish().scene()
    coarse_m = 16.0 / 4
    rng = np.random.default_rng(1)
    largest = 0.0
    import shapely

    area = shapely.union_all([polygon_of(shape) for shape in shapes])
    for x, y in rng.uniform((0.0, 0.0), (120.0, 80.0), (3000, 2)).tolist():
        told = float(scene.far_m[int(y / coarse_m), int(x / coarse_m)])
        true = shapely.distance(shapely.Point(x, y), area)
        assert told <= true
        # Between two coarse cells, seen from their far ends, and the raster's cells.
        assert told >= min(true, 24 * coarse_m * 0.999) - 3 * coarse_m * 1.4143
        largest = max(largest, told)
    assert largest > 50.0


def test_a_second_obstacle_of_an_id_replaces_the_first():
    model = declared(SiteModel(SMALL))
    model.put("fixed", "a", box(1.0, 2.0, 1.0, 1.0))
    model.put("fixed", "a", DiscShape(3.0, 5.0, 0.5))
    model.put("outlines", "a", box(5.0, 5.0, 1.0, 1.0))
    assert list(obstacles(model)) == [("outlines", "a"), ("fixed", "a")]
    alone = declared(SiteModel(SMALL))
    alone.put("fixed", "a", DiscShape(3.0, 5.0, 0.5))
    alone.put("outlines", "a", box(5.0, 5.0, 1.0, 1.0))
    assert read_all(model.publish()) == read_all(alone.publish())


def test_what_is_dropped_or_cleared_leaves_nothing():
    empty = declared(SiteModel(SMALL)).publish()
    model = declared(SiteModel(SMALL))
    rng = np.random.default_rng(2)
    for _ in range(50):
        change(model, rng)
    model.publish()
    for layer, name in obstacles(model):
        assert model.drop(layer, name)
        assert not model.drop(layer, name)
    model.clear("lidar")
    model.clear("fog")
    assert read_all(model.publish()) == read_all(empty)


def test_clearing_a_layer_leaves_the_others():
    model = declared(SiteModel(SMALL))
    model.put("fixed", "a", box(1.0, 2.0, 1.0, 1.0))
    model.patch("lidar", (2.0, 5.0), 0.1, ONES)
    before = read_all(model.publish())
    model.put("lidar", "b", box(3.0, 3.0, 1.0, 1.0))
    model.patch("fog", (2.0, 5.1), 0.1, ONES)
    model.publish()
    model.clear("fog")
    model.drop("lidar", "b")
    assert read_all(model.publish()) == before
    model.clear("lidar")
    assert list(obstacles(model)) == [("fixed", "a")]
    assert not blocked_of(model.publish()).any()


def test_a_patch_overwrites_what_the_layer_had_there():
    model = declared(SiteModel(SMALL))
    x0, y0 = SMALL.limits_m[:2]
    model.patch("lidar", (x0 + 1.0, y0 + 1.0), 0.1, np.ones((30, 30), np.uint8))
    model.patch("lidar", (x0 + 2.0, y0 + 2.0), 0.1, np.zeros((10, 10), np.uint8))
    model.patch("fog", (x0 + 2.5, y0 + 2.5), 0.1, np.full((2, 2), 2, np.uint8))  # unknown is free
    wanted = np.zeros_like(blocked_of(model.publish()))
    wanted[10:40, 10:40] = 1
    wanted[20:30, 20:30] = 0
    assert (blocked_of(model.publish()) == wanted).all()
    # Layers do not overwrite each other.
    model.patch("fog", (x0 + 2.5, y0 + 2.5), 0.1, np.ones((2, 2), np.uint8))
    model.patch("lidar", (x0 + 2.0, y0 + 2.0), 0.1, np.zeros((10, 10), np.uint8))
    wanted[25:27, 25:27] = 1
    assert (blocked_of(model.publish()) == wanted).all()


def test_a_patch_is_cut_off_at_the_limits():
    model = declared(SiteModel(SMALL))
    x0, y0, x1, y1 = SMALL.limits_m
    model.patch("lidar", (x0 - 1.0, y0 - 1.0), 0.1, np.ones((15, 15), np.uint8))
    blocked = blocked_of(model.publish())
    assert blocked[:5, :5].all()
    assert blocked.sum() == 25
    model.patch("lidar", (x1 - 0.3, y1 - 0.3), 0.1, np.ones((90, 90), np.uint8))
    # Cells beyond the limits, to the end of the last tiles, are blocked by the limits anyway.
    assert blocked_of(model.publish())[77:80, 93:96].all()


def test_unknown_cells_and_ground_that_nobody_spoke_of_count_by_layer():
    model = SiteModel(SMALL)
    model.declare("lidar", LayerSettings())
    model.declare("seen", LayerSettings(unknown_blocks=True))
    assert (model.publish().scene().field_of == SOLID).all()
    assert blocked_of(model.publish()).all()
    x0, y0 = SMALL.limits_m[:2]
    cells = np.zeros((20, 20), np.uint8)
    cells[5:8, 5:8] = 2
    model.patch("seen", (x0 + 3.0, y0 + 3.0), 0.1, cells)
    wanted = np.ones_like(blocked_of(model.publish()))
    wanted[30:50, 30:50] = 0
    wanted[35:38, 35:38] = 1
    assert (blocked_of(model.publish()) == wanted).all()
    free = SiteModel(SMALL)
    free.declare("lidar", LayerSettings())
    free.patch("lidar", (x0 + 3.0, y0 + 3.0), 0.1, cells)
    assert (free.publish().scene().field_of == OPEN).all()


def test_layers_of_outlines_are_in_no_raster():
    model = declared(SiteModel(SMALL))
    ring = box(1.0, 2.0, 2.0, 1.0)
    model.put("outlines", "tug", ring)
    model.put("outlines", "post", DiscShape(5.0, 5.0, 0.3))
    snapshot = model.publish()
    scene = snapshot.scene()
    assert (scene.field_of == OPEN).all()
    assert buckets_of(scene) == {}
    assert scene.outline_starts.tolist() == [0, 4, 5]
    assert (scene.outline_items[:4, :2] == ring.vertices_m).all()
    assert scene.outline_discs[0] == pytest.approx((2.0, 2.5, np.hypot(1.0, 0.5)))
    assert scene.outline_discs[1].tolist() == [5.0, 5.0, 0.3]


def test_what_a_replan_leaves_out_is_gone_from_scene_and_solids():
    model = declared(SiteModel(SMALL))
    model.declare("own", LayerSettings(outlines_only=True))
    model.put("own", "me", box(1.0, 2.0, 1.0, 1.0))
    model.put("own", "my post", DiscShape(4.0, 5.0, 0.3))
    model.put("outlines", "you", box(4.0, 2.0, 1.0, 1.0))
    model.put("fixed", "kiln", box(2.0, 6.0, 1.0, 1.0))
    snapshot = model.publish()
    without = frozenset({"own", "never heard of"})
    assert snapshot.scene(without).outline_starts.tolist() == [0, 4]
    solids, all_solids = snapshot.solids(without), snapshot.solids()
    kept = np.isfinite(solids.boxes_m).all(axis=1)
    assert [snapshot.name_of("polygon", row) for row in np.flatnonzero(kept).tolist()] == [
        ("outlines", "you"),
        ("fixed", "kiln"),
    ]
    assert (solids.discs_m[:, 2] == 0.0).all()
    assert np.isfinite(all_solids.boxes_m).all()
    assert all_solids.discs_m[:, 2].tolist() == [0.3]
    assert snapshot.scene(without) is snapshot.scene(without)
    for ask in (snapshot.scene, snapshot.solids):
        with pytest.raises(ValueError, match="'fixed' is part of the raster"):
            ask(frozenset({"fixed"}))


def many_dropped(model: SiteModel) -> None:
    for i in range(1200):
        model.put("fixed", "a", star(i, 2.0, 5.0, 0.4, 4))


def test_slots_are_closed_up_when_most_are_gone():
    model = declared(SiteModel(SMALL))
    for i in range(20):
        model.put("fixed", f"kept {i}", DiscShape(1.0 + i / 5, 3.0, 0.1))
    many_dropped(model)
    snapshot = model.publish()
    assert len(snapshot.table("vertices")) < 4 * 1200 / 2
    assert len(list(snapshot.obstacles())) == 21
    wanted = star(1199, 2.0, 5.0, 0.4, 4).vertices_m
    assert (obstacles(model)["fixed", "a"].vertices_m == wanted).all()


@pytest.mark.parametrize("name", ["a", "ä ü 木材", "x" * ID_BYTES_MAX, "a\nb"])
def test_ids_are_kept_as_they_are(name):
    model = declared(SiteModel(SMALL))
    model.put("fixed", name, box(1.0, 2.0, 1.0, 1.0))
    assert list(obstacles(model)) == [("fixed", name)]
    assert model.drop("fixed", name)


CELLS = np.zeros((2, 2), np.uint8)
GOOD = box(1.0, 2.0, 1.0, 1.0)
#: What is wrong, its code, and the call.
BAD_CHANGES = {
    "put: layer": ("unknown_layer", lambda m: m.put("moon", "a", GOOD)),
    "drop: layer": ("unknown_layer", lambda m: m.drop("moon", "a")),
    "clear: layer": ("unknown_layer", lambda m: m.clear("moon")),
    "patch: layer": ("unknown_layer", lambda m: m.patch("moon", (0, 2), 0.1, CELLS)),
    "id: empty": ("too_large", lambda m: m.put("fixed", "", GOOD)),
    "id: long": ("too_large", lambda m: m.put("fixed", "ä" * 33, GOOD)),
    "id: zero byte": ("too_large", lambda m: m.put("fixed", "a\0", GOOD)),
    "id: no text": ("too_large", lambda m: m.put("fixed", "\ud800", GOOD)),
    "layer: long": ("too_large", lambda m: m.declare("x" * 65, LayerSettings())),
    "layer: other": (
        "layer_mismatch",
        lambda m: m.declare("fixed", LayerSettings(unknown_blocks=True)),
    ),
    "put: outside": ("outside_limits", lambda m: m.put("fixed", "kept", box(50.0, 2.0, 1.0, 1.0))),
    "disc: outside": ("outside_limits", lambda m: m.put("fixed", "kept", DiscShape(3, -9, 1))),
    "patch: outlines": ("outlines_only", lambda m: m.patch("outlines", (0, 2), 0.1, CELLS)),
    "patch: outside": ("outside_limits", lambda m: m.patch("lidar", (7.6, 2), 0.1, CELLS)),
    "patch: below": ("outside_limits", lambda m: m.patch("lidar", (0, 0.8), 0.1, CELLS)),
    "patch: nan": ("not_finite", lambda m: m.patch("lidar", (np.nan, 2), 0.1, CELLS)),
    "patch: inf": ("not_finite", lambda m: m.patch("lidar", (0, 2), np.inf, CELLS)),
    "patch: no size": ("bad_cells", lambda m: m.patch("lidar", (0, 2), 0.0, CELLS)),
    "patch: negative": ("bad_cells", lambda m: m.patch("lidar", (0, 2), -0.1, CELLS)),
    "patch: empty": ("bad_cells", lambda m: m.patch("lidar", (0, 2), 0.1, CELLS[:0])),
    "patch: flat": ("bad_cells", lambda m: m.patch("lidar", (0, 2), 0.1, CELLS[0])),
    "patch: ragged": ("bad_cells", lambda m: m.patch("lidar", (0, 2), 0.1, [[0], [0, 0]])),
    "patch: type": ("bad_cells", lambda m: m.patch("lidar", (0, 2), 0.1, CELLS.astype(int))),
    "patch: value": ("bad_cells", lambda m: m.patch("lidar", (0, 2), 0.1, CELLS + 3)),
    "patch: huge": (
        "too_large",
        lambda m: m.patch("lidar", (0, 2), 0.1, np.zeros((1, PATCH_CELLS_MAX + 1), np.uint8)),
    ),
}


@pytest.mark.parametrize("what", BAD_CHANGES)
def test_a_bad_change_is_refused_with_its_code_and_changes_nothing(what):
    code, call = BAD_CHANGES[what]
    model = declared(SiteModel(SMALL))
    model.put("fixed", "kept", GOOD)
    model.patch("lidar", (2.0, 5.0), 0.1, ONES)
    before = model.publish()
    content = read_all(before)
    with pytest.raises(SiteError) as refused:
        call(model)
    assert refused.value.code == code
    assert model.publish() is before
    # And what comes next is as if nothing had been asked.
    model.put("fixed", "next", GOOD)
    model.drop("fixed", "next")
    assert read_all(model.publish()) == content


def test_declaring_a_layer_again_does_nothing():
    model = declared(SiteModel(SMALL))
    before = model.publish()
    declared(model)
    assert model.publish() is before
    assert model.publish().layers()["outlines"] == LayerSettings(outlines_only=True)


def test_a_polygon_larger_than_the_site_is_cut_off_at_its_limits():
    model = declared(SiteModel(SMALL))
    ring = np.array([(-900.0, -900.0), (900.0, -900.0), (900.0, 900.0), (-900.0, 900.0)])
    model.put("fixed", "ground", PolygonShape(ring))
    assert (model.publish().scene().field_of == SOLID).all()
    assert model.drop("fixed", "ground")
    assert (model.publish().scene().field_of == OPEN).all()
