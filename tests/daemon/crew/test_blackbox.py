"""Deaths are counted by the place at which they happened, until the batch is done."""

import mmap

import pytest

from bywayd.crew.blackbox import BlackBox, size_bytes


@pytest.fixture
def page():
    mapped = mmap.mmap(-1, size_bytes)
    yield mapped
    mapped.close()


def _dies_at(page, place):
    BlackBox(page).note(place)


def test_a_fresh_memory_blames_nobody(page):
    assert BlackBox(page).deadly_place is None


@pytest.mark.parametrize("place", [0, 3])
def test_the_second_death_at_one_place_is_one_too_many(page, place):
    _dies_at(page, place)
    assert BlackBox(page).deadly_place is None  # and this one dies while idle
    _dies_at(page, place)
    assert BlackBox(page).deadly_place == place


def test_deaths_at_different_places_are_not_added_up(page):
    for place in (1, 2, 1, 2):
        _dies_at(page, place)
        assert BlackBox(page).deadly_place is None


def test_a_batch_that_came_through_clears_the_count(page):
    _dies_at(page, 1)
    box = BlackBox(page)
    box.note(1)
    box.batch_done()
    _dies_at(page, 1)
    assert BlackBox(page).deadly_place is None
