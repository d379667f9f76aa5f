"""When obstacles expire, and what may come between."""

from __future__ import annotations

import pytest
from tests.daemon.core.frontdesk import START, ms

from bywayd.core.expiries import Expiries
from bywayd.core.instants import Instant


@pytest.fixture
def expiries() -> Expiries:
    expiries = Expiries(10)
    assert not expiries.is_timed("stacks")
    expiries.begin("stacks")
    return expiries


def put(
    expiries: Expiries,
    *ids: str,
    until: Instant | None = None,
    replaces: bool = False,
) -> None:
    """A put or replacement comes in, and is on its way."""
    expiries.coming("stacks", ids, replaces=replaces, expires=until is not None)
    expiries.check()


def decide(
    expiries: Expiries,
    *ids: str,
    until: Instant | None = None,
    replaces: bool = False,
    applied: bool = True,
) -> None:
    expiries.decided("stacks", ids, replaces=replaces, expires_at=until, applied=applied)
    expiries.check()


def visible(expiries: Expiries, *ids: str, until: Instant | None = None) -> None:
    put(expiries, *ids, until=until)
    decide(expiries, *ids, until=until)


T1, T2, T3 = START + ms(100), START + ms(200), START + ms(300)


def test_what_has_expired_is_told_once(expiries: Expiries) -> None:
    visible(expiries, "a", "b", until=T1)
    visible(expiries, "c", until=T2)
    assert expiries.next_alarm() == T1
    assert expiries.pop_due(START) == {}
    assert expiries.pop_due(T1) == {"stacks": ["a", "b"]}
    assert expiries.pop_due(T3) == {"stacks": ["c"]}
    assert expiries.pop_due(T3) == {}
    assert len(expiries) == 0


def test_an_obstacle_that_is_put_again_has_the_new_expiry(expiries: Expiries) -> None:
    visible(expiries, "a", until=T1)
    visible(expiries, "a", until=T2)
    assert expiries.pop_due(T1) == {}
    assert expiries.pop_due(T2) == {"stacks": ["a"]}


def test_an_obstacle_that_is_put_again_without_expiry_stays(expiries: Expiries) -> None:
    visible(expiries, "a", until=T1)
    visible(expiries, "a")
    assert expiries.pop_due(T3) == {}


def test_an_obstacle_does_not_expire_while_it_is_being_put_again(expiries: Expiries) -> None:
    visible(expiries, "a", until=T1)
    put(expiries, "a", until=T3)
    assert expiries.pop_due(T2) == {}
    decide(expiries, "a", until=T3)
    assert expiries.pop_due(T2) == {}
    assert expiries.pop_due(T3) == {"stacks": ["a"]}


def test_an_obstacle_whose_second_put_is_refused_expires_after_all(expiries: Expiries) -> None:
    visible(expiries, "a", until=T1)
    put(expiries, "a", until=T3)
    put(expiries, "a")
    assert expiries.pop_due(T2) == {}
    decide(expiries, "a", until=T3, applied=False)
    assert expiries.pop_due(T2) == {}  # another is still on its way
    decide(expiries, "a", applied=False)
    assert expiries.pop_due(T2) == {"stacks": ["a"]}


def test_a_replacement_takes_all_expiries_of_the_layer_with_it(expiries: Expiries) -> None:
    visible(expiries, "a", "b", until=T1)
    put(expiries, "b", until=T3, replaces=True)
    assert expiries.pop_due(T2) == {}
    decide(expiries, "b", until=T3, replaces=True)
    assert expiries.pop_due(T3) == {"stacks": ["b"]}


def test_a_replacement_that_is_refused_leaves_expiries_as_they_were(expiries: Expiries) -> None:
    visible(expiries, "a", until=T1)
    put(expiries, replaces=True)
    put(expiries, replaces=True)
    assert expiries.pop_due(T2) == {}
    decide(expiries, replaces=True, applied=False)
    decide(expiries, replaces=True, applied=False)
    assert expiries.pop_due(T2) == {"stacks": ["a"]}


def test_what_is_dropped_does_not_expire(expiries: Expiries) -> None:
    visible(expiries, "a", "b", until=T1)
    expiries.dropped("stacks", ["a", "never seen"])
    expiries.dropped("elsewhere", ["a"])
    expiries.check()
    assert expiries.pop_due(T1) == {"stacks": ["b"]}


def test_room_counts_what_is_on_its_way(expiries: Expiries) -> None:
    visible(expiries, "a", "b", until=T1)
    put(expiries, "c", until=T1)
    assert len(expiries) == 3
    assert expiries.room_left == 7
    decide(expiries, "c", until=T1, applied=False)
    assert expiries.room_left == 8
