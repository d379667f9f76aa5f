"""The surveyor through the front: successors, nonsense, memory given back, the site described."""

from __future__ import annotations

import pytest
from tests.daemon.core.frontdesk import START, Desk, handle, ms, put, settings

from byway import messages
from bywayd.core import effects, events


@pytest.fixture
def desk() -> Desk:
    return Desk().open()


def told(desk: Desk) -> list[tuple[str, int]]:
    """What sources were told by the last event: kind and number."""
    return [(message.kind, getattr(message, "number", -1)) for _, message in desk.replies()]


def test_a_successor_takes_up_the_last_snapshot_and_gets_the_batch_again(desk: Desk) -> None:
    desk.change(*put("stacks", "a"))
    desk.publish(1)
    desk.change(*put("stacks", "b"))
    out = desk.one(effects.ApplyChanges)
    desk.hand_in(events.SurveyorLost(1, "killed"))
    spawn = desk.one(effects.SpawnSurveyor)
    assert (spawn.surveyor, spawn.revision, spawn.handle) == (2, 2, handle(2))
    assert spawn.in_use == (handle(2),)
    desk.change(*put("stacks", "c"))
    assert desk.all_of(effects.ApplyChanges) == []
    desk.hand_in(events.SurveyorReady(2, 2, handle(2)))
    again = desk.one(effects.ApplyChanges)
    assert again.surveyor == 2
    assert again.batch != out.batch
    assert again.changes == out.changes
    desk.publish(again.batch, surveyor=2)
    assert told(desk) == [("acknowledged", 2)]


def test_planning_goes_on_without_a_surveyor(desk: Desk) -> None:
    desk.hand_in(events.SurveyorLost(1, "killed"))
    desk.ask("a")
    assert desk.one(effects.StartJob).job.revision == 1


def test_a_successor_keeps_what_is_being_read(desk: Desk) -> None:
    desk.ask("a")
    desk.change(*put("stacks", "a"))
    desk.publish(1)
    desk.change(*put("stacks", "b"))
    desk.publish(2)
    desk.hand_in(events.SurveyorLost(1, "killed"))
    assert desk.one(effects.SpawnSurveyor).in_use == (handle(1), handle(3))


def test_memory_is_given_back_when_the_last_reader_is_done(desk: Desk) -> None:
    desk.ask("a")
    desk.change(*put("stacks", "a"))
    desk.publish(1)
    assert desk.all_of(effects.ReleaseBefore) == []
    desk.hand_in(events.WorkerFailed(1, 1, "bad_value", "senseless", {}))
    assert desk.one(effects.ReleaseBefore) == effects.ReleaseBefore(1, 2)


def test_a_surveyor_that_dies_before_it_was_ready_is_replaced_by_one_with_an_empty_site() -> None:
    desk = Desk()
    desk.hand_in(events.Started(0.0))
    desk.hand_in(events.SurveyorLost(1, "stillborn"))
    assert desk.one(effects.SpawnSurveyor) == effects.SpawnSurveyor(2, None, None, ())


@pytest.mark.parametrize(
    "event",
    [
        events.SnapshotReady(1, 99, 5, handle(5)),
        events.SnapshotReady(1, 1, 0, handle(0)),
        events.SiteDescribed(1, 99, messages.SiteIs(revision=1, layers=[], columns={})),
        events.SurveyorReady(1, 1, handle(1)),
    ],
)
def test_a_surveyor_that_talks_nonsense_is_replaced(desk: Desk, event: events.Event) -> None:
    desk.change(*put("stacks", "a"))
    desk.hand_in(event)
    assert desk.one(effects.KillSurveyor).surveyor == 1
    assert desk.replies() == []
    desk.hand_in(event)  # it repeats itself: nobody listens any more
    assert desk.all_of(effects.KillSurveyor) == []
    desk.hand_in(events.SurveyorLost(1, "killed"))
    desk.hand_in(events.SurveyorReady(2, 1, handle(1)))
    assert desk.one(effects.ApplyChanges).surveyor == 2


def test_a_successor_that_took_up_another_snapshot_is_not_believed(desk: Desk) -> None:
    desk.hand_in(events.SurveyorLost(1, "died"))
    desk.hand_in(events.SurveyorReady(2, 0, handle(0)))
    assert desk.one(effects.KillSurveyor).surveyor == 2


def test_what_a_killed_surveyor_still_publishes_does_not_count(desk: Desk) -> None:
    desk.change(*put("stacks", "a"))
    desk.tick(5001)
    assert desk.one(effects.KillSurveyor).why == "silent at work"
    desk.publish(1)
    assert desk.replies() == []
    desk.hand_in(events.SurveyorLost(1, "killed"))
    desk.hand_in(events.SurveyorReady(2, 1, handle(1)))
    desk.revision = 1
    desk.publish(desk.one(effects.ApplyChanges).batch, surveyor=2)
    assert told(desk) == [("acknowledged", 1)]


def test_a_surveyor_killed_while_starting_is_not_ready_when_it_says_so() -> None:
    desk = Desk(settings(start_time_max_s=1.0))
    desk.hand_in(events.Started(0.0))
    desk.tick(1001)
    assert desk.one(effects.KillSurveyor).surveyor == 1
    desk.hand_in(events.SurveyorReady(1, 1, handle(1)))
    assert desk.front.snapshots.current is None


def test_an_idle_surveyor_is_pinged_and_one_that_works_long_says_that_it_lives(desk: Desk) -> None:
    desk.tick(1000)
    assert desk.one(effects.PingSurveyor).surveyor == 1
    desk.hand_in(events.SurveyorAlive(1), 1)
    desk.change(*put("stacks", "a"))
    desk.hand_in(events.SurveyorAlive(1), 4000)
    desk.tick(4000)
    assert desk.all_of(effects.KillSurveyor) == []


# -- describing the site ---------------------------------------------------------------------------

SITE = messages.SiteIs(revision=1, layers=[], columns={})


def test_the_site_is_described_by_the_surveyor(desk: Desk) -> None:
    desk.say(messages.Site(layers=["fixed"]), "q")
    describe = desk.one(effects.DescribeSite)
    assert describe.message == messages.Site(layers=["fixed"])
    desk.hand_in(events.SiteDescribed(1, describe.ticket, SITE, b"columns"))
    reply = desk.one(effects.Reply)
    assert (reply.header.id, reply.header.traceparent) == ("q", "trace-q")
    assert (reply.message, reply.packed) == (SITE, b"columns")


def test_a_question_is_put_to_the_successor_but_not_for_ever(desk: Desk) -> None:
    desk.say(messages.Site(), "q")
    desk.hand_in(events.SurveyorLost(1, "died"))
    desk.hand_in(events.SurveyorReady(2, 1, handle(1)))
    assert desk.one(effects.DescribeSite).surveyor == 2
    desk.hand_in(events.SurveyorLost(2, "died"))
    assert desk.error("q") == "internal"


def test_a_question_waits_for_a_surveyor_that_has_yet_to_start(desk: Desk) -> None:
    desk.hand_in(events.SurveyorLost(1, "died"))
    desk.say(messages.Site(), "q")
    assert desk.out == []
    desk.hand_in(events.SurveyorLost(2, "stillborn"))
    assert desk.replies() == []
    desk.tick(50)
    desk.hand_in(events.SurveyorReady(3, 1, handle(1)))
    assert desk.one(effects.DescribeSite).surveyor == 3


def test_a_description_that_comes_after_the_end_was_asked_for_goes_nowhere(desk: Desk) -> None:
    desk.ask("a")
    desk.say(messages.Site(), "q")
    ticket = desk.one(effects.DescribeSite).ticket
    desk.hand_in(events.StopAsked("SIGTERM"))
    assert desk.error("q") == "stopping"
    desk.hand_in(events.SiteDescribed(1, ticket, SITE))
    assert desk.out == []


def test_the_same_surveyor_is_asked_and_given_changes(desk: Desk) -> None:
    desk.say(messages.Site(), "q")
    ticket = desk.one(effects.DescribeSite).ticket
    desk.change(*put("stacks", "a"))
    batch = desk.one(effects.ApplyChanges).batch
    desk.publish(batch)
    desk.hand_in(events.SiteDescribed(1, ticket, SITE))
    assert desk.answer("q") == SITE


def test_the_end_of_a_question_is_not_the_end_of_a_batch(desk: Desk) -> None:
    desk.say(messages.Site(), "q")
    ticket = desk.one(effects.DescribeSite).ticket
    desk.publish(ticket)
    assert desk.one(effects.KillSurveyor).surveyor == 1
    desk = Desk().open()
    desk.change(*put("stacks", "a"))
    batch = desk.one(effects.ApplyChanges).batch
    desk.hand_in(events.SiteDescribed(1, batch, SITE))
    assert desk.one(effects.KillSurveyor).surveyor == 1


@pytest.mark.parametrize(
    ("opened", "message", "code"),
    [
        (True, messages.Site(layers=["nowhere"]), "unknown_layer"),
        (False, messages.Site(layers=["fixed"]), "warming"),
    ],
)
def test_questions_that_cannot_be_answered(opened: bool, message: messages.Site, code: str) -> None:
    desk = Desk()
    if opened:
        desk.open()
    desk.say(message, "q")
    assert desk.error("q") == code


def test_questions_are_bounded() -> None:
    desk = Desk(settings(descriptions_max=2)).open()
    for id in ("a", "b", "c"):
        desk.say(messages.Site(), id)
    assert desk.error("c") == "overloaded"


def test_nothing_takes_longer_than_the_clock_says(desk: Desk) -> None:
    desk.change(*put("stacks", "a"))
    desk.publish(1, after_ms=3)
    assert desk.front.health.statistics().observed["visible_s"] == 1
    assert desk.now == START + ms(3)
