"""Searches under which the site changes: they end while there is time for another."""

from __future__ import annotations

import pytest
from tests.daemon.core.frontdesk import START, Desk, ms, nothing, put, route

from byway import frames, messages
from bywayd.core import effects, events

# Of a budget of 100 ms the worker has 98. What is kept for a second search is four times what the
# first route took and 3 ms, at most 40 % of what was left then.


@pytest.fixture
def desk() -> Desk:
    return Desk().open()


def change_site(desk: Desk, batch: int, after_ms: float = 0.0) -> None:
    desk.change(*put("fixed", f"o{batch}"))
    desk.publish(batch, after_ms=after_ms)


def wakes_at(desk: Desk) -> list[object]:
    return [wake.at for wake in desk.all_of(effects.Wake)]


def test_a_search_whose_site_changed_ends_when_another_would_just_have_time(desk: Desk) -> None:
    desk.ask("a")
    desk.better(9.0, after_ms=2.0)
    change_site(desk, 1, after_ms=1.0)
    assert desk.all_of(effects.SteerJob) == []
    desk.tick(83.0)
    assert desk.all_of(effects.SteerJob) == []
    desk.tick(1.0)  # 98 - (4 * 2 + 3)
    assert desk.one(effects.SteerJob) == effects.SteerJob(1, 1, "finish")
    desk.done(route(5.0))
    assert desk.one(effects.Recheck).outcome == route(5.0)
    desk.hand_in(events.WorkerChecked(1, 2, True))
    assert desk.outcome() == (route(5.0).body, 2)
    assert desk.count("changed_under_way_total") == 1


def test_its_route_is_looked_for_again_if_it_is_blocked(desk: Desk) -> None:
    desk.ask("a")
    desk.better(9.0, after_ms=2.0)
    change_site(desk, 1)
    desk.tick(85.0)
    desk.done(route(5.0))
    desk.hand_in(events.WorkerChecked(1, 2, False))
    job = desk.one(effects.StartJob).job
    assert (job.job, job.revision, job.deadline) == (3, 2, START + ms(98))
    desk.done(route(6.0), job=3, after_ms=3.0)
    assert desk.outcome() == (route(6.0).body, 2)


def test_a_change_in_the_time_kept_for_a_second_search_ends_the_first_at_once(desk: Desk) -> None:
    desk.ask("a")
    desk.better(9.0, after_ms=2.0)
    desk.tick(88.0)
    assert desk.all_of(effects.SteerJob) == []
    change_site(desk, 1)
    assert desk.one(effects.SteerJob).how == "finish"


def test_a_first_route_that_took_long_leaves_more_for_a_second_search_but_no_half(
    desk: Desk,
) -> None:
    desk.ask("a")
    desk.better(9.0, after_ms=18.0)
    change_site(desk, 1)
    desk.tick(47.9)
    assert desk.all_of(effects.SteerJob) == []
    desk.tick(0.1)  # 98 - 0.4 * (98 - 18) = 66
    assert desk.one(effects.SteerJob).how == "finish"


def test_a_search_whose_site_stays_as_it_is_goes_on_to_its_end(desk: Desk) -> None:
    desk.ask("a")
    desk.better(9.0, after_ms=2.0)
    assert wakes_at(desk) == [START + ms(87)]
    desk.tick(85.0)
    assert wakes_at(desk) == [START + ms(99)]
    desk.better(8.0, after_ms=5.0)
    assert desk.all_of(effects.SteerJob) == []
    desk.done(route(7.0), after_ms=5.0)
    assert desk.outcome() == (route(7.0).body, 1)


def test_a_search_that_has_found_nothing_yet_goes_on_when_the_site_changes(desk: Desk) -> None:
    desk.ask("a")
    change_site(desk, 1)
    desk.tick(95.0)
    assert desk.all_of(effects.SteerJob) == []
    desk.done(nothing("not_found"))
    assert desk.outcome() == (nothing("not_found").body, 1)


def test_a_search_is_not_ended_when_there_is_no_time_for_another(desk: Desk) -> None:
    desk.ask("a")
    desk.better(9.0, after_ms=2.0)
    desk.tick(95.0)
    change_site(desk, 1)
    assert desk.all_of(effects.SteerJob) == []


def test_the_tries_are_bounded_however_often_the_site_changes(desk: Desk) -> None:
    desk.ask("a")
    job = 1
    for batch in range(1, 4):
        desk.better(9.0, job=job)
        desk.tick(20.0)
        change_site(desk, batch)
        desk.tick(3.0)
        desk.done(route(5.0), job=job, after_ms=0.5)
        desk.hand_in(events.WorkerChecked(1, job + 1, False))
        job += 2
    message = desk.answer("a")
    assert isinstance(message, messages.AnswerMessage)
    assert message.attempts == 3
    assert frames.decode_outcome(message.outcome, b"").kind == "not_found"
