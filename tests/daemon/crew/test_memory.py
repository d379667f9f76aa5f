"""The shared memory grows cleanly, is seen by all, and is never written by readers."""

import mmap
import os

import pytest

from bywayd.crew.memory import SiteMemory, extent_bytes


@pytest.fixture
def memory():
    made = SiteMemory.create(4 * extent_bytes + 1)
    yield made
    made.close()


def test_nothing_exists_before_it_is_asked_for(memory):
    assert memory.taken_bytes == 0
    assert memory.bytes_max % mmap.PAGESIZE == 0
    assert memory.bytes_max > 4 * extent_bytes


def test_growth_comes_in_extents_and_stops_at_the_end(memory):
    memory.grow(1)
    assert memory.taken_bytes == extent_bytes
    memory.grow(extent_bytes)
    assert memory.taken_bytes == extent_bytes
    memory.grow(memory.bytes_max)
    assert memory.taken_bytes == memory.bytes_max
    with pytest.raises(OSError, match=str(memory.bytes_max)):
        memory.grow(memory.bytes_max + 1)


def test_a_reader_sees_what_the_writer_wrote_and_cannot_write(memory):
    memory.grow(100)
    writer, reader = memory.map_writable(), memory.map_readable()
    writer[10:14] = b"kiln"
    assert reader[10:14] == b"kiln"
    with pytest.raises(TypeError):
        reader[10:14] = b"oven"
    writer.close()
    reader.close()


def test_the_file_cannot_be_cut_short_under_its_readers(memory):
    with pytest.raises(PermissionError):
        os.ftruncate(memory.descriptor, 10)


def test_a_successor_goes_on_where_the_memory_ends(memory):
    memory.grow(extent_bytes + 1)
    successor = SiteMemory(os.dup(memory.descriptor))
    assert successor.bytes_max == memory.bytes_max
    successor.grow(2 * extent_bytes)
    assert successor.taken_bytes == 2 * extent_bytes
    successor.grow(2 * extent_bytes + 1)
    assert memory.taken_bytes == 3 * extent_bytes
    successor.close()


def test_a_size_of_nothing_is_refused():
    with pytest.raises(ValueError, match="> 0"):
        SiteMemory.create(0)


def test_the_black_box_is_no_part_of_the_site(memory):
    memory.grow(memory.bytes_max)
    site, box = memory.map_writable(), memory.map_blackbox()
    assert len(site) == memory.bytes_max
    box[:4] = b"last"
    assert site[-4:] == bytes(4)
    assert memory.map_blackbox()[:4] == b"last"
    site.close()
    box.close()
