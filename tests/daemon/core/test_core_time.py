"""Instants, durations, alarms and the rules that stop the process."""

from __future__ import annotations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bywayd.core.alarms import Alarms
from bywayd.core.instants import NO_TIME, Duration, Instant
from bywayd.core.invariant import Defect, invariant, known


def test_a_duration_is_never_negative() -> None:
    with pytest.raises(Defect, match="not negative"):
        Duration(-1)


def test_seconds_become_whole_nanoseconds_and_come_back() -> None:
    assert Duration.of_s(0.0025) == Duration(2_500_000)
    assert Duration(1_500_000_000).s == 1.5
    assert Duration(10).times(0.25) == Duration(2)


def test_instants_are_moved_by_durations_and_measured_against_each_other() -> None:
    early, late = Instant(10), Instant(25)
    assert early + Duration(15) == late
    assert late - Duration(15) == early
    assert late.since(early) == Duration(15)
    assert early.until(late) == Duration(15)
    assert late.until(early) == NO_TIME
    with pytest.raises(Defect):
        early.since(late)


def test_a_broken_rule_cannot_be_swallowed_and_tells_its_story() -> None:
    invariant(True, "this holds")
    with pytest.raises(Defect) as caught:
        invariant(False, "water runs downhill", ["first this", "then that"])
    assert not isinstance(caught.value, Exception)
    assert str(caught.value) == "water runs downhill\n  first this\n  then that"
    assert known(3, "there is one") == 3
    with pytest.raises(Defect, match="there is one"):
        known(None, "there is one")


def test_alarms_come_in_order_each_once() -> None:
    alarms: Alarms[str] = Alarms()
    alarms.set("b", Instant(20))
    alarms.set("a", Instant(10))
    alarms.set("c", Instant(20))
    assert alarms.next() == Instant(10)
    assert alarms.pop_due(Instant(9)) is None
    due = [alarms.pop_due(Instant(20)) for _ in range(4)]
    assert due == ["a", "b", "c", None]
    assert alarms.next() is None


def test_an_alarm_that_is_moved_comes_at_its_last_instant_only() -> None:
    alarms: Alarms[str] = Alarms()
    alarms.set("a", Instant(10))
    alarms.set("a", Instant(30))
    alarms.set("a", Instant(30))
    alarms.set("b", Instant(5))
    alarms.clear("b")
    alarms.clear("nobody")
    assert alarms.at("a") == Instant(30)
    assert alarms.at("b") is None
    assert alarms.pop_due(Instant(29)) is None
    assert alarms.pop_due(Instant(30)) == "a"


@settings(max_examples=60, deadline=None)
@given(
    st.lists(
        st.tuples(st.sampled_from(["set", "clear", "pop"]), st.integers(0, 5), st.integers(0, 50)),
        max_size=300,
    )
)
def test_alarms_agree_with_a_plain_dictionary(steps: list[tuple[str, int, int]]) -> None:
    """Whatever is set, moved, cleared and taken out: the same keys come, and memory is bounded."""
    alarms: Alarms[int] = Alarms()
    plain: dict[int, int] = {}
    for what, key, at in steps:
        if what == "set":
            alarms.set(key, Instant(at))
            plain[key] = at
        elif what == "clear":
            alarms.clear(key)
            plain.pop(key, None)
        else:
            found = alarms.pop_due(Instant(at))
            due = [known_at for known_at in plain.values() if known_at <= at]
            assert (found is None) == (not due)
            if found is not None:
                assert plain.pop(found) == min(due)
        alarms.check()
        first = alarms.next()
        assert (None if first is None else first.ns) == min(plain.values(), default=None)


def test_stale_alarms_do_not_pile_up() -> None:
    alarms: Alarms[str] = Alarms()
    for at in range(10_000):
        alarms.set("moved all the time", Instant(at))
        alarms.check()
