"""The front's clock runs with the host's, from an origin of its own."""

import time

from bywayd.runtime.clock import SystemClock


def test_an_instant_can_be_told_to_other_processes():
    clock = SystemClock()
    before_ns = time.monotonic_ns()
    told_ns = clock.host_ns(clock.now())
    assert before_ns <= told_ns <= time.monotonic_ns()


def test_two_clocks_that_are_mixed_up_disagree_by_far():
    readings = [SystemClock().now().ns for _ in range(8)]
    # Eight draws out of four months: two within an hour once in ten runs of a century's tests.
    assert max(readings) - min(readings) > 3_600_000_000_000
