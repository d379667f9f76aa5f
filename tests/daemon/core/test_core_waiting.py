"""Who is next for a worker, and who has to make room."""

from __future__ import annotations

import pytest
from tests.daemon.core.frontdesk import START, ms, route

from byway import messages
from byway.frames import Header
from bywayd.core.docket import Docket, times_of
from bywayd.core.events import Peer
from bywayd.core.instants import Instant
from bywayd.core.invariant import Defect
from bywayd.core.pressure import improving, pressure
from bywayd.core.waiting import WaitingRoom


def docket(id: str, unit: str = "", arrived: Instant = START, budget_s: float = 0.1) -> Docket:
    ask = messages.Replan(
        vehicle="tug",
        unit=unit or f"unit-{id}",
        start=(0.0, 0.0, 0.0),
        goal=(1.0, 0.0, 0.0),
        budget_s=budget_s,
    )
    return Docket(
        header=Header("replan", id),
        ask=ask,
        body=b"",
        times=times_of(arrived, ms(budget_s * 1000), ms(2), 0.2, ms(1.5)),
        seed=1,
        attempts_max=3,
        retry_left_min=ms(3),
        peer=Peer("requests", b"c"),
    )


def at_work(*dockets: Docket, found_ms: float | None = None) -> dict[str, Docket]:
    """Have these planned, each by a worker of its own, perhaps with a route."""
    for number, one in enumerate(dockets):
        one.begin(number, number, START)
        if found_ms is not None:
            one.hold(route(5.0), 1, START + ms(found_ms))
    return {one.ask.unit: one for one in dockets}


@pytest.fixture
def room() -> WaitingRoom:
    return WaitingRoom(workers=2, places=4, patience_ratio=0.25)


def test_a_short_line_is_served_in_order(room: WaitingRoom) -> None:
    first, second = docket("a"), docket("b")
    room.enter(first)
    room.enter(second)
    assert room.next({}) is first
    room.check()


def test_a_long_line_is_served_newest_first(room: WaitingRoom) -> None:
    for id in "abc":
        room.enter(docket(id))
    served = room.next({})
    assert served is not None
    assert served.id == "c"


def test_units_that_have_one_at_work_wait(room: WaitingRoom) -> None:
    room.enter(docket("a", unit="busy"))
    assert room.next({"busy"}) is None
    room.enter(docket("b"))
    served = room.next({"busy"})
    assert served is not None
    assert served.id == "b"


def test_who_has_lost_its_worker_goes_first(room: WaitingRoom) -> None:
    room.enter(docket("a"))
    back = docket("b")
    room.return_to(back)
    assert room.next({"unit-b"}) is back
    assert next(iter(room)) is back
    assert room.holds(back)
    room.leave(back)
    assert not room.holds(back)
    assert len(room) == 1


def test_one_of_each_unit_waits(room: WaitingRoom) -> None:
    one = docket("a", unit="u")
    room.enter(one)
    assert room.of_unit("u") is one
    with pytest.raises(Defect, match="one replan of a unit waits"):
        room.enter(docket("b", unit="u"))
    room.leave(one)
    assert room.of_unit("u") is None


def test_the_room_is_full_when_its_places_are_taken(room: WaitingRoom) -> None:
    for id in "abcd":
        assert not room.is_full
        room.enter(docket(id))
    assert room.is_full


def test_patience_is_a_share_of_the_budget_and_none_in_a_full_room(room: WaitingRoom) -> None:
    first = docket("a")
    room.enter(first)
    assert room.patience_ends(first, ms(100)) == START + ms(100 * 0.25 * 0.75)
    for id in "bcd":
        room.enter(docket(id))
    assert room.patience_ends(first, ms(100)) == START


def test_nobody_is_hastened_before_patience_ends(room: WaitingRoom) -> None:
    room.enter(docket("w"))
    found = pressure(room, at_work(docket("a"), found_ms=1), 0, START + ms(18))
    assert found.hasten == []
    assert found.look_again_at == START + ms(18.75)


def test_the_one_that_has_improved_for_longest_gives_its_worker_up(room: WaitingRoom) -> None:
    room.enter(docket("w"))
    old, young = docket("old"), docket("young")
    working = at_work(old, found_ms=1) | at_work(young, found_ms=2)
    found = pressure(room, working, 0, START + ms(18.75))
    assert found.hasten == [(old, "shorten")]
    assert improving(working) == [old, young]


def test_who_has_no_route_yet_is_left_alone(room: WaitingRoom) -> None:
    room.enter(docket("w"))
    assert pressure(room, at_work(docket("a")), 0, START + ms(50)).hasten == []


def test_workers_that_will_be_free_anyway_are_waited_for(room: WaitingRoom) -> None:
    room.enter(docket("w"))
    working = at_work(docket("a"), found_ms=1)
    assert pressure(room, working, 1, START + ms(50)).hasten == []


def test_only_as_many_are_hastened_as_wait(room: WaitingRoom) -> None:
    room.enter(docket("w"))
    room.enter(docket("x"))
    working = at_work(docket("a"), docket("b"), docket("c"), found_ms=1)
    assert len(pressure(room, working, 0, START + ms(50)).hasten) == 2


def test_who_has_lost_its_worker_has_no_patience(room: WaitingRoom) -> None:
    back, other = docket("back"), docket("other")
    room.return_to(back)
    working = {back.ask.unit: back} | at_work(other, found_ms=0)
    assert pressure(room, working, 0, START).hasten == [(other, "shorten")]


def test_a_unit_that_asks_again_gets_its_older_replan_ended_as_soon_as_it_has_a_route(
    room: WaitingRoom,
) -> None:
    older, newer = docket("old", "u"), docket("new", "u", START + ms(10), 0.04)
    room.enter(newer)
    working = at_work(older, found_ms=5)
    assert pressure(room, working, 0, START + ms(10)).hasten == [(older, "newer")]


def test_a_unit_that_asks_again_waits_half_its_budget_for_a_first_route(room: WaitingRoom) -> None:
    older, newer = docket("old", "u"), docket("new", "u", START + ms(10), 0.04)
    room.enter(newer)
    working = at_work(older)
    waits = pressure(room, working, 0, START + ms(10))
    assert waits.hasten == []
    assert waits.look_again_at == START + ms(30)
    assert pressure(room, working, 0, START + ms(30)).hasten == [(older, "newer")]
    older.move("finish", START + ms(30))
    assert pressure(room, working, 0, START + ms(31)).hasten == []


def test_an_older_replan_that_makes_way_for_its_unit_counts_for_others_too(
    room: WaitingRoom,
) -> None:
    older, newer, other = docket("old", "u"), docket("new", "u"), docket("other")
    room.enter(newer)
    room.enter(other)
    third = docket("third")
    working = at_work(older, third, found_ms=1)
    found = pressure(room, working, 0, START + ms(50)).hasten
    assert found == [(older, "newer")]
    room.enter(docket("another"))
    found = pressure(room, working, 0, START + ms(50)).hasten
    assert found == [(older, "newer"), (third, "shorten")]


def test_it_looks_again_when_the_first_runs_out_of_patience(room: WaitingRoom) -> None:
    room.enter(docket("slow", budget_s=1.0))
    room.enter(docket("quick", budget_s=0.01))
    room.enter(docket("later", budget_s=1.0))
    found = pressure(room, at_work(docket("a"), found_ms=1), 0, START)
    assert found.look_again_at == START + ms(10 * 0.25 * 0.25)
