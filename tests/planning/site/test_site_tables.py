"""Tables that are published at the cost of what changed in them."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from byway_planning.site.memory import Memory, MemoryFull
from byway_planning.site.tables import SPARES_MAX, Table

STEPS = st.lists(
    st.tuples(
        st.sampled_from(
            ["append", "write", "set", "window", "empty", "publish", "fail", "release"]
        ),
        st.integers(0, 2**32 - 1),
    ),
    max_size=80,
)


@settings(max_examples=80, deadline=None)
@given(STEPS)
def test_every_edition_reads_as_the_table_was(steps):
    """Whatever is published, withdrawn and given back in between."""
    memory = Memory.over(bytearray(1 << 22), lambda end: None)
    table = Table(np.int64, 2)
    rows = np.zeros((0, 2), np.int64)
    editions: list[tuple[int, bytes]] = []  # offset and content of all that are being read
    replaced: list = []
    for what, seed in steps:
        rng = np.random.default_rng(seed)
        if what == "append":
            block = rng.integers(0, 99, (rng.integers(0, 900), 2))
            assert table.append(block) == len(rows)
            rows = np.concatenate([rows, block])
        elif what == "write" and len(rows):
            first = int(rng.integers(len(rows)))
            block = rng.integers(0, 99, (rng.integers(0, len(rows) - first + 1), 2))
            table.write(first, block)
            rows[first : first + len(block)] = block
        elif what == "set" and len(rows):
            row = int(rng.integers(len(rows)))
            table[row] = rows[row] = rng.integers(0, 99, 2)
        elif what == "empty":
            table.empty()
            rows = rows[:0]
        elif what in ("publish", "fail"):
            offset = table.prepare(memory)
            if what == "fail":
                table.withdraw(memory)
                continue
            old = table.commit()
            if old is not None:
                replaced.append(old)
            if offset not in [place for place, _ in editions]:
                editions.append((offset, rows.tobytes()))
        elif what == "release" and replaced:
            edition = replaced.pop(0)
            assert editions.pop(0)[0] == edition.offset
            table.give_back(edition, memory)
        assert (table.view == rows).all()
        for offset, content in editions:
            assert memory.buffer[offset : offset + len(content)].tobytes() == content


def published(table: Table, memory: Memory) -> int:
    offset = table.prepare(memory)
    old = table.commit()
    if old is not None:
        table.give_back(old, memory)
    return offset


def test_an_unchanged_table_keeps_its_block():
    memory, table = Memory.private(), Table(np.float64)
    table.append(np.arange(5000.0))
    first = published(table, memory)
    assert published(table, memory) == first
    table[4] = 1.0
    assert published(table, memory) != first


def test_only_pages_that_changed_are_copied():
    memory, table = Memory.private(), Table(np.int64)
    table.append(np.arange(100_000))
    blocks = [published(table, memory)]
    for row in range(3):
        table[row] = -1
        blocks.append(published(table, memory))
    spare = blocks[-2]
    # A mark in a page of an old edition that has not changed since: it must not be copied over.
    mark = memory.buffer[spare : spare + 800_000].view(np.int64)
    mark[70_000] = -7
    table[5] = -1
    assert published(table, memory) == spare
    assert mark[70_000] == -7
    assert mark[5] == -1


def test_memory_stays_flat_however_often_a_table_changes():
    memory, table = Memory.private(), Table(np.int64, 3)
    table.append(np.zeros((4000, 3), np.int64))
    tops = []
    for step in range(200):
        table[step] = (step, 0, 0)
        published(table, memory)
        tops.append(memory.top_bytes)
    assert len(set(tops[SPARES_MAX + 1 :])) == 1


def test_rectangles_are_written_into_lines():
    table = Table(np.float32)
    table.append(np.zeros(60, np.float32))
    table.write_window(10, 2, 3, np.arange(1.0, 9.0, dtype=np.float32).reshape(2, 4))
    lines = table.view.reshape(6, 10)
    assert lines[2, 3:7].tolist() == [1.0, 2.0, 3.0, 4.0]
    assert lines[3, 3:7].tolist() == [5.0, 6.0, 7.0, 8.0]
    assert lines.sum() == 36.0


def test_a_table_that_finds_no_room_is_published_later():
    memory, table = Memory.over(bytearray(4096), lambda end: None), Table(np.uint8)
    table.append(np.ones(5000, np.uint8))
    with pytest.raises(MemoryFull):
        table.prepare(memory)
    table.withdraw(memory)
    table.empty()
    table.append(np.full(100, 3, np.uint8))
    offset = published(table, memory)
    assert (memory.buffer[offset : offset + 100] == 3).all()
