"""Snapshots: they stay as they are while they are read, and then make room."""

import copy
import itertools
import json

import numpy as np
import pytest
from tests.planning.site.site_twins import SMALL, box, change, copy_of, declared, read_all, star

from byway_planning.site import (
    DiscShape,
    Memory,
    MemoryFull,
    SiteModel,
    SiteSettings,
    Snapshot,
)


def limited(size: int) -> Memory:
    return Memory.over(bytearray(size), lambda end: None)


def test_revisions_count_changes():
    model = declared(SiteModel(SMALL))
    assert model.publish().revision == 1
    assert model.publish() is model.publish()
    model.put("fixed", "a", star(1, 2.0, 4.0, 1.0))
    model.put("fixed", "b", star(2, 4.0, 4.0, 1.0))
    assert model.publish().revision == 2
    assert not model.drop("fixed", "c")
    assert model.publish().revision == 2


def test_an_old_snapshot_reads_the_same_until_it_is_released():
    """Twenty of them at a time, views fetched late."""
    rng = np.random.default_rng(1)
    model = declared(SiteModel(SMALL))
    held: list[tuple[Snapshot, dict]] = []
    for step in range(200):
        for _ in range(3):
            change(model, rng)
        snapshot = model.publish()
        if step % 5 == 0:
            # The handle alone, as another process gets it, read for the first time at the end.
            fresh = Snapshot.attach(model.memory, json.loads(json.dumps(snapshot.handle)))
            held.append((fresh, read_all(snapshot)))
        if len(held) > 20:
            old, content = held.pop(0)
            assert read_all(old) == content
            model.release_before(held[0][0].revision)
    for old, content in held:
        assert read_all(old) == content


def test_nothing_of_a_snapshot_can_be_written_to():
    model = declared(SiteModel(SMALL))
    model.put("outlines", "a", star(1, 2.0, 4.0, 1.0))
    model.patch("lidar", (2.0, 5.0), 0.1, np.ones((3, 3), np.uint8))
    snapshot = model.publish()
    parts = [*snapshot.scene(), *snapshot.solids(), *snapshot.solids(frozenset({"outlines"}))]
    arrays = [part for part in parts if isinstance(part, np.ndarray)]
    assert len(arrays) == 21
    arrays += [cells for _, cells in snapshot.cells("lidar")]
    arrays += [snapshot.table(name) for name in snapshot.handle["tables"]]
    assert not any(array.flags.writeable for array in arrays)
    assert all(array.flags.c_contiguous for array in arrays)


def test_memory_stays_flat_over_ten_thousand_changes():
    rng = np.random.default_rng(2)
    model = declared(SiteModel(SiteSettings((0.0, 0.0, 5.0, 5.0), reach_m=0.8, tile_cells=16)))
    tops, used = [], []
    for step in range(10_000):
        change(model, rng)
        if step % 4 == 0:
            model.release_before(model.publish().revision)
            tops.append(model.memory.top_bytes)
            used.append(model.memory.used_bytes)
    assert max(tops[500:]) <= 1.25 * max(tops[:500])
    assert max(tops) < 3 * max(used)


def test_everything_released_is_given_back():
    model = declared(SiteModel(SMALL))
    rng = np.random.default_rng(3)
    model.release_before(model.publish().revision)
    for _ in range(100):
        change(model, rng)
        model.publish()
    held = model.memory.used_bytes
    model.release_before(model.revision)
    alone = model.publish().blocks()
    assert model.memory.used_bytes < held
    spare_tables = 2 * sum(size for _, size in model.publish().table_blocks().values())
    assert model.memory.used_bytes < 1.3 * (sum(alone.values()) + spare_tables) + 64 * len(alone)


def filled_up(model: SiteModel) -> int:
    """Put things until there is no room; return how many."""
    for count in range(1000):
        model.put(
            "fixed", f"o{count}", star(count, -1.5 + count % 47 / 5.5, 1.5 + count % 31 / 4.5, 0.7)
        )
        try:
            model.publish()
        except MemoryFull:
            return count + 1
        model.release_before(model.revision)
    raise AssertionError("the memory was never full")


def test_a_full_site_keeps_its_last_revision_and_can_be_made_smaller():
    model = declared(SiteModel(SMALL, limited(600_000)))
    first = model.publish()
    count = filled_up(model)
    assert count > 3
    last = model.revision
    used = model.memory.used_bytes
    for _ in range(3):  # trying again takes nothing
        with pytest.raises(MemoryFull):
            model.publish()
        assert model.memory.used_bytes == used
        assert model.revision == last
    # What cannot be published yet goes, and more; every change is written beside the old.
    model.drop("fixed", f"o{count - 1}")
    for i in range(count // 2, count - 1):
        model.drop("fixed", f"o{i}")
        model.publish()
        model.release_before(model.revision)
    model.patch("lidar", (2.0, 5.0), 0.1, np.ones((3, 3), np.uint8))
    snapshot = model.publish()
    assert snapshot.revision > last + 3
    assert read_all(snapshot) == read_all(copy_of(model, snapshot).publish())
    assert first.revision == 1


@pytest.mark.parametrize("room", range(3_000, 60_000, 1_700))
def test_wherever_memory_runs_out_nothing_is_lost(room):
    """Memory ends at another place of the draft each time."""
    limit = [1 << 22]

    def grow(end: int) -> None:
        if end > limit[0]:
            raise OSError(28, "No space left on device")

    model = declared(SiteModel(SMALL, Memory.over(bytearray(1 << 22), grow)))
    rng = np.random.default_rng(room)
    for _ in range(15):
        change(model, rng)
    before = model.publish()
    content = read_all(before)
    limit[0] = model.memory.top_bytes + room
    for _ in range(15):
        change(model, rng)
    try:
        model.publish()
    except MemoryFull:
        assert read_all(before) == content
        limit[0] = 1 << 22
        for _ in range(3):
            change(model, rng)
    snapshot = model.publish()
    assert read_all(before) == content
    assert read_all(snapshot) == read_all(copy_of(model, snapshot).publish())


# -- a successor ----------------------------------------------------------------------------


def died(seed: int, size: int = 1 << 22) -> tuple[bytearray, SiteModel, list[Snapshot]]:
    """A site whose owner changed it, published, and died in the middle of more."""
    buffer = bytearray(size)
    model = declared(SiteModel(SMALL, Memory.over(buffer, lambda end: None)))
    rng = np.random.default_rng(seed)
    snapshots = []
    for _ in range(12):
        for _ in range(6):
            change(model, rng)
        snapshots.append(model.publish())
        model.release_before(model.revision - 3)
    for _ in range(6):
        change(model, rng)
    return buffer, model, snapshots


@pytest.mark.parametrize("seed", range(4))
def test_a_successor_goes_on_from_the_last_snapshot(seed):
    buffer, _, snapshots = died(seed)
    last = snapshots[-1]
    content = read_all(last)
    memory = Memory.over(buffer, lambda end: None)
    successor = SiteModel.recover(memory, last.handle, [])
    assert successor.revision == last.revision
    assert successor.publish().handle == last.handle
    assert read_all(successor.publish()) == content
    # It goes on as the dead one would have, and as one that never died.
    rng = np.random.default_rng(seed)
    for _ in range(60):
        change(successor, rng)
        successor.publish()
        successor.release_before(successor.revision - 1)
    snapshot = successor.publish()
    assert snapshot.revision > last.revision
    assert read_all(snapshot) == read_all(copy_of(successor, snapshot).publish())


def test_a_successor_leaves_alone_what_others_still_read():
    buffer, _, snapshots = died(7)
    readers = [(each, read_all(each)) for each in snapshots[-4:]]
    memory = Memory.over(buffer, lambda end: None)
    handles = [copy.deepcopy(each.handle) for each, _ in readers[:-1]]
    successor = SiteModel.recover(memory, snapshots[-1].handle, handles)
    rng = np.random.default_rng(8)
    for _ in range(40):
        change(successor, rng)
        successor.publish()
    for each, content in readers:
        assert read_all(each) == content
    held = memory.used_bytes
    successor.release_before(successor.revision)
    assert memory.used_bytes < held


def test_successors_of_successors_do_not_use_up_the_memory():
    buffer, model, snapshots = died(9)
    handle = snapshots[-1].handle
    tops = []
    for generation in range(30):
        memory = Memory.over(buffer, lambda end: None)
        successor = SiteModel.recover(memory, handle, [])
        rng = np.random.default_rng(generation)
        for _ in range(5):
            change(successor, rng)
        handle = successor.publish().handle
        tops.append(memory.top_bytes)
    assert max(tops[10:]) <= 1.6 * max(tops[:10])
    assert read_all(successor.publish()) == read_all(copy_of(model, successor.publish()).publish())


def test_a_successor_needs_no_more_memory_than_its_predecessor():
    """A site that fills its memory by more than half must not be lost with its owner."""
    memory = limited(600_000)
    model = declared(SiteModel(SMALL, memory))
    filled_up(model)
    last = model._snapshot
    assert last is not None
    content = read_all(last)
    again = Memory.over(memory.buffer.data, lambda end: None)
    successor = SiteModel.recover(again, last.handle, [])
    assert read_all(successor.publish()) == content
    for i in range(6):
        successor.drop("fixed", f"o{i}")
        successor.publish()
        successor.release_before(successor.revision)
    snapshot = successor.publish()
    assert read_all(snapshot) == read_all(copy_of(successor, snapshot).publish())


def test_every_block_is_told_once_and_none_overlaps_another():
    _, model, snapshots = died(10)
    blocks = sorted(snapshots[-1].blocks().items())
    assert len(blocks) > 20
    for (offset, size), (after, _) in itertools.pairwise(blocks):
        assert offset + size <= after
    for offset, size in blocks:
        assert 0 < size <= model.memory._sizes[offset]


def test_cells_and_obstacles_are_told_as_they_were_put():
    model = declared(SiteModel(SMALL))
    ring = box(1.0, 2.0, 1.0, 1.0)
    model.put("fixed", "a", ring)
    model.put("fixed", "b", DiscShape(4.0, 5.0, 0.25))
    cells = np.random.default_rng(1).integers(0, 3, (16, 16)).astype(np.uint8)
    x0, y0 = SMALL.limits_m[:2]
    model.patch("lidar", (x0 + 1.6, y0 + 3.2), 0.1, cells)
    snapshot = model.publish()
    found = {name: shape for _, name, shape in snapshot.obstacles()}
    assert (found["a"].vertices_m == ring.vertices_m).all()
    assert found["b"] == DiscShape(4.0, 5.0, 0.25)
    ((corner, tile),) = snapshot.cells("lidar")
    assert corner == pytest.approx((x0 + 1.6, y0 + 3.2))
    assert (tile == cells).all()
    assert list(snapshot.cells("fixed")) == []
    assert snapshot.name_of("disc", 0) == ("fixed", "b")
