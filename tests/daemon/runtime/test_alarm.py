"""The alarm goes off at its instant and not before."""

import select
import time

import pytest

from bywayd.runtime.alarm import Alarm


@pytest.fixture
def alarm():
    made = Alarm()
    yield made
    made.close()


def _rings(alarm, within_s):
    return bool(select.select([alarm], [], [], within_s)[0])


def test_it_rings_at_its_instant_and_keeps_ringing(alarm):
    at_ns = time.monotonic_ns() + 3_000_000
    alarm.set(at_ns)
    assert not _rings(alarm, 0)
    assert _rings(alarm, 5)
    assert time.monotonic_ns() >= at_ns
    assert _rings(alarm, 0)


def test_an_instant_that_has_passed_rings_at_once(alarm):
    alarm.set(time.monotonic_ns() - 1)
    assert _rings(alarm, 0.01)
    alarm.set(0)
    assert _rings(alarm, 0.01)


def test_it_can_be_moved_and_cleared(alarm):
    alarm.set(time.monotonic_ns() - 1)
    alarm.set(time.monotonic_ns() + 10**10)
    assert not _rings(alarm, 0)
    alarm.set(1)
    assert _rings(alarm, 0.01)
    alarm.clear()
    assert not _rings(alarm, 0.005)
    alarm.clear()
