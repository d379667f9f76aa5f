"""The heap against heapq."""

import heapq

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from byway_planning.search.heap import pop, push

ROOM = 128
KEYS = st.one_of(st.integers(-3, 3).map(float), st.floats(allow_nan=False))


def run(steps):
    """Carry out pushes (a key) and pops (None) beside heapq; return how full it became."""
    keys, values = np.empty(ROOM), np.empty(ROOM, np.int32)
    size, twin, key_of = 0, [], {}
    for number, key in enumerate(steps):
        if key is not None and size < ROOM:
            size = push.py_func(keys, values, size, key, number)
            heapq.heappush(twin, key)
            key_of[number] = key
        elif key is None and size > 0:
            assert keys[0] == heapq.heappop(twin)
            # What comes with a key is what was put in with it, and never comes twice.
            assert key_of.pop(int(values[0])) == keys[0]
            size = pop.py_func(keys, values, size)
        assert size == len(twin)
    while size > 0:
        assert keys[0] == heapq.heappop(twin)
        assert key_of.pop(int(values[0])) == keys[0]
        size = pop.py_func(keys, values, size)
    assert not key_of


@settings(max_examples=100, deadline=None)
@given(st.lists(st.one_of(KEYS, st.none()), max_size=300))
def test_the_heap_gives_what_heapq_gives(steps):
    """Ties, infinities and an empty heap included."""
    run(steps)


def test_a_full_heap_comes_out_in_order():
    rng = np.random.default_rng(6)
    run([*rng.normal(size=ROOM), *[None] * ROOM])
    run([*range(ROOM), *[None] * 60, *range(ROOM, 0, -2)])
