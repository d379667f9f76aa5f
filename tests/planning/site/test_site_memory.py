"""Blocks of memory: never two in one place, never lost."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from byway_planning.site.memory import ALIGN_BYTES, Memory, MemoryFull, rounded_bytes


def limited(size: int) -> Memory:
    return Memory.over(bytearray(size), lambda end: None)


@given(st.integers(0, 1 << 24))
def test_blocks_are_rounded_by_an_eighth_at_most(size):
    rounded = rounded_bytes(size)
    assert rounded >= size
    assert rounded % ALIGN_BYTES == 0
    assert rounded <= max(size * 9 / 8, size + ALIGN_BYTES)
    assert rounded_bytes(rounded) == rounded


@settings(max_examples=60, deadline=None)
@given(st.lists(st.tuples(st.booleans(), st.integers(0, 5000)), max_size=60))
def test_blocks_do_not_overlap_and_what_is_given_back_joins_up(steps):
    memory = limited(1 << 20)
    held: dict[int, int] = {}
    for is_take, number in steps:
        if is_take or not held:
            offset = memory.take(number)
            assert offset % ALIGN_BYTES == 0
            assert offset >= ALIGN_BYTES  # 0 means "no block"
            for other, size in held.items():
                assert offset + number <= other or offset >= other + size
            held[offset] = rounded_bytes(number)
        else:
            offset = list(held)[number % len(held)]
            memory.give_back(offset)
            del held[offset]
        assert memory.used_bytes == sum(held.values())
        assert memory.top_bytes == max([ALIGN_BYTES, *(o + s for o, s in held.items())])
    for offset in held:
        memory.give_back(offset)
    assert memory.top_bytes == ALIGN_BYTES
    assert memory.used_bytes == 0


def test_the_smallest_stretch_that_fits_is_cut():
    memory = limited(1 << 20)
    a, wall, b, _ = (memory.take(size) for size in (4096, 64, 1024, 64))
    memory.give_back(a)
    memory.give_back(b)
    assert memory.take(1000) == b
    assert memory.take(2048) == a
    assert memory.take(2048) == a + 2048
    assert wall == a + 4096


def test_a_successor_knows_the_gaps_between_the_blocks_it_adopts():
    first = limited(1 << 16)
    blocks = {first.take(size): size for size in (100, 5000, 640, 3000, 64)}
    kept = dict(list(blocks.items())[1::2])
    second = limited(1 << 16)
    second.adopt(kept)
    assert second.used_bytes == sum(rounded_bytes(size) for size in kept.values())
    top = second.top_bytes
    taken = [second.take(128), second.take(640)]
    assert all(offset + 640 <= top for offset in taken)
    for offset in [*kept, *taken]:
        second.give_back(offset)
    assert second.top_bytes == ALIGN_BYTES


def test_a_full_memory_says_so_and_stays_as_it_was():
    memory = limited(10_000)
    block = memory.take(6000)
    before = memory.used_bytes, memory.top_bytes
    with pytest.raises(MemoryFull, match="needs more than"):
        memory.take(6000)
    assert (memory.used_bytes, memory.top_bytes) == before
    memory.give_back(block)
    assert memory.take(6000) == block


def test_pages_that_are_not_to_be_had_are_a_full_memory():
    asked = []

    def grow(end: int) -> None:
        asked.append(end)
        if end > 5000:
            raise OSError(28, "No space left on device")

    memory = Memory.over(bytearray(1 << 16), grow)
    memory.take(4000)
    with pytest.raises(MemoryFull, match="No space left"):
        memory.take(4000)
    assert asked == [ALIGN_BYTES + rounded_bytes(4000), ALIGN_BYTES + 2 * rounded_bytes(4000)]


def test_private_memory_holds_what_is_written():
    memory = Memory.private()
    rng = np.random.default_rng(1)
    arrays = [rng.random((n, 3)) for n in (1, 100, 50_000)]
    offsets = [memory.store(array) for array in arrays]
    for offset, array in zip(offsets, arrays, strict=True):
        found = memory.buffer[offset : offset + array.nbytes].view(float).reshape(-1, 3)
        assert (found == array).all()
