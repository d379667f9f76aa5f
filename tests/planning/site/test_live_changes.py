"""
Everything that can be sent, thousands of times in random order.

After each part the site is compared with one made afresh, its distances with those of scipy,
and what it says has changed with what has.
"""

import math

import numpy as np
import numpy.typing as npt
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.planning.site.site_twins import (
    blocked_of,
    box,
    copy_of,
    expected_field,
    field_of,
    read_all,
    star,
)

from byway_planning.site import (
    DiscShape,
    LayerSettings,
    Memory,
    PolygonShape,
    SiteModel,
    SiteSettings,
    Snapshot,
    Track,
    box_shape,
)
from byway_planning.site.raster import fill_disc_kernel, fill_polygon_kernel

SITE = SiteSettings((-2.0, 1.0, 7.6, 9.0), reach_m=1.2, tile_cells=16, sweep_s=1.5)
#: Shapes and cells together, so that a name says nothing about what is in a layer.
LAYERS = {
    "fixed": LayerSettings(),
    "lidar": LayerSettings(decay_s=2.0),
    "seen": LayerSettings(decay_s=5.0),
    "outlines": LayerSettings(outlines_only=True),
}
KINDS = ["star", "box", "disc", "yard", "patch", "scan", "track", "drop", "carry", "clear"]
PROBABLE = [0.14, 0.08, 0.08, 0.08, 0.15, 0.13, 0.15, 0.12, 0.06, 0.01]


class Traffic:
    """Random changes of every kind, and a clock."""

    def __init__(self, model: SiteModel, seed: int) -> None:
        self.model = model
        self.now_s = 1000.0
        self._rng = np.random.default_rng(seed)
        for name, settings_ in LAYERS.items():
            model.declare(name, settings_)

    def go_on(self) -> None:
        """Make one change, a little later."""
        rng = self._rng
        self.now_s += float(rng.uniform(0.0, 0.1))
        kind = str(rng.choice(KINDS, p=PROBABLE))
        if kind == "carry":
            self.model.carry(self.now_s)
        elif kind == "clear":
            self.model.clear(str(rng.choice([*LAYERS])))
        elif kind == "drop":
            self.model.drop(str(rng.choice([*LAYERS])), f"o{rng.integers(8)}")
        elif kind == "patch":
            self._patch()
        elif kind == "scan":
            self._scan()
        elif kind == "track":
            self._track()
        else:
            layer = str(rng.choice([*LAYERS]))
            self.model.put(layer, f"o{rng.integers(8)}", self._shape(kind))

    def _place(self) -> tuple[float, float]:
        x0, y0, x1, y1 = SITE.limits_m
        return float(self._rng.uniform(x0, x1)), float(self._rng.uniform(y0, y1))

    def _shape(self, kind: str) -> DiscShape | PolygonShape:
        rng, (x, y) = self._rng, self._place()
        size = float(rng.uniform(0.1, 1.5))
        if kind == "star":
            return star(int(rng.integers(1 << 30)), x, y, size)
        if kind == "disc":
            return DiscShape(x, y, size)
        if kind == "box":
            return box_shape(x, y, float(rng.uniform(-4.0, 4.0)), size, 0.3)
        outline = box(x - size, y - size, 2.0 * size, 2.0 * size).vertices_m
        hole = box(x - 0.7 * size, y - 0.6 * size, size, size).vertices_m
        return PolygonShape(outline, [hole])

    def _patch(self) -> None:
        rng = self._rng
        layer = str(rng.choice(["fixed", "lidar", "seen"]))
        cells = rng.choice(3, rng.integers(1, 25, 2), p=[0.7, 0.2, 0.1]).astype(np.uint8)
        heading_rad = float(rng.choice([0.0, math.pi / 2, float(rng.uniform(-4.0, 4.0))]))
        cell_m = float(rng.choice([0.04, 0.1, 0.1, 0.27]))
        self.model.patch(layer, self._place(), cell_m, cells, heading_rad)

    def _scan(self) -> None:
        rng = self._rng
        count = int(rng.integers(1, 60))
        ranges = rng.uniform(0.0, 6.0, count)
        ranges[rng.random(count) < 0.1] = np.inf
        self.model.scan(
            str(rng.choice(["fixed", "lidar", "seen"])),
            (*self._place(), float(rng.uniform(-4.0, 4.0))),
            rng.uniform(-math.pi, math.pi, count),
            ranges,
            5.0,
            range_m_min=0.1,
            at_s=self.now_s - float(rng.uniform(0.0, 0.5)),
        )

    def _track(self) -> None:
        rng = self._rng
        shape = DiscShape(0.1, 0.0, 0.3) if rng.random() < 0.5 else box(-0.4, -0.2, 0.8, 0.4)
        speed = rng.uniform(-1.5, 1.5, 2) * (rng.random() < 0.8)
        track = Track(
            shape,
            (*self._place(), float(rng.uniform(-4.0, 4.0))),
            (float(speed[0]), float(speed[1])),
            float(rng.choice([0.0, 0.3, -1.0])),
            float(rng.uniform(0.0, 0.2)),
            float(rng.choice([0.0, 0.2])),
            at_s=self.now_s,
        )
        self.model.track(str(rng.choice(["fixed", "lidar"])), f"o{rng.integers(8)}", track)


def filled_of(snapshot: Snapshot) -> npt.NDArray[np.bool_]:
    """Which cells are filled, drawn in one go over the whole site."""
    x0, y0 = SITE.limits_m[:2]
    blocked = blocked_of(snapshot)
    side = max(blocked.shape)
    filled = np.zeros((side, side), np.uint8)
    for layer, _, shape in snapshot.obstacles():
        if LAYERS[layer].outlines_only:
            continue
        if isinstance(shape, PolygonShape):
            fill_polygon_kernel(shape.vertices_m, x0, y0, SITE.cell_m, filled)
        else:
            fill_disc_kernel(shape.x_m, shape.y_m, shape.radius_m, x0, y0, SITE.cell_m, filled)
    both: npt.NDArray[np.bool_] = (blocked | filled[: blocked.shape[0], : blocked.shape[1]]) != 0
    return both


def check_field(snapshot: Snapshot, filled: npt.NDArray[np.bool_]) -> None:
    """Bit for bit: distances in cells are rounded to float32, and so are they in metres."""
    cells = expected_field(filled, 1.0, SITE.reach_cells).astype(np.float32)
    wanted = (cells * np.float64(SITE.cell_m)).astype(np.float32)
    assert (field_of(snapshot.scene()) == wanted).all()


def check_changed(
    model: SiteModel, before: npt.NDArray[np.bool_], after: npt.NDArray[np.bool_]
) -> None:
    rows, columns = np.nonzero(before != after)
    x = SITE.limits_m[0] + (columns + 0.5) * SITE.cell_m
    y = SITE.limits_m[1] + (rows + 0.5) * SITE.cell_m
    low_x, low_y, high_x, high_y = model.changed_m.T[:, :, None]
    # A shape fills every cell that it overlaps: its box may hold a part of the cell alone.
    near = SITE.cell_m
    inside = (low_x - near < x) & (x < high_x + near) & (low_y - near < y) & (y < high_y + near)
    assert inside.any(axis=0).all()


@settings(max_examples=6, deadline=None)
@given(st.integers(0, 2**32 - 1))
def test_after_thousands_of_changes_all_is_as_if_made_afresh(seed: int) -> None:
    model = SiteModel(SITE, Memory.private())
    traffic = Traffic(model, seed)
    snapshot = model.publish()
    filled = filled_of(snapshot)
    for step in range(400):
        traffic.go_on()
        if step % 4 == 0:
            now = model.publish()
            now_filled = filled_of(now)
            if now is not snapshot:
                check_changed(model, filled, now_filled)
            snapshot, filled = now, now_filled
            model.release_before(model.revision)
        if step % 80 == 79:
            snapshot = model.publish()
            filled = filled_of(snapshot)
            check_field(snapshot, filled)
            assert read_all(snapshot) == read_all(copy_of(model, snapshot).publish())


@pytest.mark.parametrize("seed", range(3))
def test_a_successor_goes_on_with_all_of_it(seed: int) -> None:
    memory = Memory.private()
    model = SiteModel(SITE, memory)
    traffic = Traffic(model, seed)
    for _ in range(120):
        traffic.go_on()
    # Stamps of single cells are not handed on, so both begin with none.
    traffic.now_s += 10.0
    model.carry(traffic.now_s)
    snapshot = model.publish()
    again = SiteModel.recover(memory, snapshot.handle, [])
    assert read_all(again.publish()) == read_all(snapshot)
    assert {n: t.pose for _, n, t in again.tracks()} == {n: t.pose for _, n, t in model.tracks()}
    traffic.model = again
    for _ in range(120):
        traffic.go_on()
    last = again.publish()
    check_field(last, filled_of(last))
    assert read_all(last) == read_all(copy_of(again, last).publish())


def test_what_changed_is_told_in_boxes() -> None:
    model = SiteModel(SITE, Memory.private())
    model.declare("fixed", LayerSettings())
    model.declare("outlines", LayerSettings(outlines_only=True))
    model.publish()
    model.put("fixed", "a", box(0.0, 2.0, 1.0, 1.0))
    model.publish()
    assert model.changed_m.tolist() == [[0.0, 2.0, 1.0, 3.0]]
    model.publish()  # nothing new: it still tells of the last two that differ
    assert model.changed_m.tolist() == [[0.0, 2.0, 1.0, 3.0]]
    model.put("fixed", "a", box(3.0, 2.0, 1.0, 1.0))
    model.put("outlines", "b", DiscShape(5.0, 5.0, 0.5))
    model.publish()
    assert sorted(model.changed_m.tolist()) == [
        [0.0, 2.0, 1.0, 3.0],
        [3.0, 2.0, 4.0, 3.0],
        [4.5, 4.5, 5.5, 5.5],
    ]
    model.patch("fixed", (1.3, 5.0), 0.1, np.eye(3, dtype=np.uint8))
    model.publish()
    ((x0, y0, x1, y1),) = model.changed_m.tolist()
    assert (x0, y0, x1, y1) == pytest.approx((1.3, 5.0, 1.6, 5.3))
    model.patch("fixed", (1.3, 5.0), 0.1, np.eye(3, dtype=np.uint8))
    revision = model.revision
    assert model.publish().revision == revision  # the same again is no change
