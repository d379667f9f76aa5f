"""Changes of the site through the front: numbers, refusals, leases, expiry, successors."""

from __future__ import annotations

import pytest
from tests.daemon.core.frontdesk import START, Desk, handle, ms, put, replace, settings

from byway import limits, messages
from byway.errors import BadMessage
from byway.frames import Header
from bywayd.core import effects, events
from bywayd.core.effects import LayerFlags


@pytest.fixture
def desk() -> Desk:
    return Desk().open()


CLAIM = messages.Claim(layer="stacks")


def told(desk: Desk) -> list[tuple[str, int]]:
    """What sources were told by the last event: kind and number."""
    found = []
    for _, message in desk.replies():
        number = getattr(message, "number", getattr(message, "have", -1))
        found.append((message.kind, number))
    return found


# -- numbers and acknowledgements ------------------------------------------------------------------


def test_a_change_is_acknowledged_when_it_is_visible_and_not_before(desk: Desk) -> None:
    desk.change(*put("stacks", "a"))
    assert desk.replies() == []
    apply = desk.one(effects.ApplyChanges)
    (change,) = apply.changes
    assert (change.what, change.layer, change.settings) == ("put", "stacks", LayerFlags())
    desk.publish(apply.batch)
    assert desk.reply() == messages.Acknowledged(source="s", number=1, revision=2)
    assert desk.one(effects.Reply).peer == desk.source


def test_changes_that_come_while_a_batch_is_out_make_the_next_one(desk: Desk) -> None:
    desk.change(CLAIM)
    first = desk.one(effects.ApplyChanges)
    for id in "abc":
        desk.change(*put("stacks", id))
        assert desk.all_of(effects.ApplyChanges) == []
    desk.change(CLAIM, source="other")
    desk.publish(first.batch)
    second = desk.one(effects.ApplyChanges)
    assert [change.what for change in second.changes] == ["put", "put", "put", "claim"]
    desk.publish(second.batch)
    assert desk.replies() == [
        ("", messages.Acknowledged(source="s", number=4, revision=3)),
        ("", messages.Acknowledged(source="other", number=1, revision=3)),
    ]


def test_a_repeat_of_what_is_decided_is_acknowledged_again(desk: Desk) -> None:
    desk.change(CLAIM)
    desk.publish(1)
    desk.change(CLAIM, number=1)
    assert told(desk) == [("acknowledged", 1)]
    assert desk.all_of(effects.ApplyChanges) == []


def test_a_repeat_of_what_is_under_way_says_nothing_yet(desk: Desk) -> None:
    desk.change(CLAIM)
    desk.change(CLAIM, number=1)
    assert desk.out == []
    desk.publish(1)
    assert told(desk) == [("acknowledged", 1)]


def test_a_gap_is_told_once_for_all_that_lies_beyond_it(desk: Desk) -> None:
    desk.change(CLAIM)
    desk.publish(1)
    desk.change(CLAIM, number=3)
    resend = desk.reply()
    assert isinstance(resend, messages.Resend)
    assert (resend.reason, resend.have) == ("gap", 1)
    desk.change(CLAIM, number=4)
    assert desk.replies() == []
    desk.change(CLAIM, number=3, after_ms=60)
    assert told(desk) == [("resend", 1)]
    desk.change(CLAIM, number=2)
    assert desk.one(effects.ApplyChanges).changes[0].what == "claim"


def test_a_source_from_an_earlier_life_is_asked_to_begin_anew(desk: Desk) -> None:
    desk.change(CLAIM, number=57, epoch="before")
    resend = desk.reply()
    assert isinstance(resend, messages.Resend)
    assert (resend.reason, resend.have) == ("epoch", 0)
    assert desk.one(effects.Reply).header.epoch == "now"


def test_a_source_that_names_no_epoch_is_taken_at_its_number(desk: Desk) -> None:
    desk.change(CLAIM, epoch="")
    assert desk.all_of(effects.ApplyChanges)


def test_replies_go_to_where_a_source_was_heard_last(desk: Desk) -> None:
    desk.change(CLAIM)
    desk.source = events.Peer("updates", b"moved")
    desk.change(CLAIM)
    desk.publish(1)
    assert desk.one(effects.Reply).peer.identity == b"moved"


def test_a_window_that_is_full_is_told_with_a_time_to_wait(desk: Desk) -> None:
    for _ in range(limits.unacknowledged_max):
        desk.change(CLAIM)
    desk.change(CLAIM)
    resend = desk.reply()
    assert isinstance(resend, messages.Resend)
    assert (resend.reason, resend.have) == ("full", limits.unacknowledged_max)
    assert resend.retry_after_s is not None
    desk.publish(1)
    desk.publish(2)
    desk.change(CLAIM, number=limits.unacknowledged_max + 1, after_ms=60)
    assert desk.all_of(effects.ApplyChanges)


def test_what_waits_is_bounded_in_bytes_over_all_sources() -> None:
    desk = Desk(settings(pending_bytes_max=1000)).open()
    message, packed = put("stacks", "a")
    desk.change(message, packed)
    while not desk.replies():
        desk.change(message, packed, source="s2")
    assert told(desk)[0][0] == "resend"
    assert desk.front.ledger.statistics().pending_bytes <= 1000


def test_sources_are_bounded_and_the_silent_make_room() -> None:
    desk = Desk(settings(sources_max=2)).open()
    desk.change(CLAIM, source="A")
    desk.publish(1)
    desk.change(CLAIM, source="B")
    desk.publish(2)
    desk.change(messages.Claim(layer="c"), source="C", after_ms=1)
    assert desk.all_of(effects.ApplyChanges)
    desk.change(messages.Claim(layer="d"), source="D")
    desk.change(messages.Claim(layer="e"), source="E")
    assert desk.error("") == "overloaded"
    # A was forgotten: it is asked for everything.
    desk.publish(3)
    desk.change(CLAIM, source="A", number=2)
    resend = desk.replies()[-1][1]
    assert isinstance(resend, messages.Resend)
    assert resend.have == 0


# -- refusals --------------------------------------------------------------------------------------


def refusal(index: int) -> events.Refusal:
    return events.Refusal(index, "bad_geometry", f"number {index} crosses itself", {"id": "a"})


def test_what_the_surveyor_refuses_is_told_one_by_one_before_the_acknowledgement(
    desk: Desk,
) -> None:
    desk.change(CLAIM)
    for id in "abc":
        desk.change(*put("stacks", id))
    desk.publish(1)
    desk.publish(2, refusal(0), refusal(2))
    assert told(desk) == [("refused", 2), ("refused", 4), ("acknowledged", 4)]
    refused = desk.replies()[0][1]
    assert isinstance(refused, messages.Refused)
    assert (refused.code, refused.facts) == ("bad_geometry", {"id": "a"})


def test_a_repeat_of_what_was_refused_is_refused_again_in_the_same_words(desk: Desk) -> None:
    message = put("stacks", "a")
    desk.change(*message)
    desk.publish(1, refusal(0))
    refused = desk.replies()[0][1]
    desk.change(*message, number=1)
    assert [told for _, told in desk.replies()] == [
        refused,
        messages.Acknowledged(source="s", number=1, revision=2),
    ]


def test_old_refusals_are_forgotten(desk: Desk) -> None:
    for number in range(limits.refusals_kept + 1):
        desk.change(*put("stacks", "a"))
        desk.publish(number + 1, refusal(0))
    desk.change(*put("stacks", "a"), number=1)
    assert told(desk) == [("acknowledged", limits.refusals_kept + 1)]


def test_a_change_of_somebody_elses_layer_is_refused_in_its_turn(desk: Desk) -> None:
    desk.change(messages.Claim(layer="mine", lease_s=5.0), source="A")
    desk.change(*put("mine", "a"), source="B")
    assert desk.replies() == []
    desk.publish(1)
    assert told(desk) == [("acknowledged", 1), ("refused", 1), ("acknowledged", 1)]
    refused = desk.replies()[1][1]
    assert isinstance(refused, messages.Refused)
    assert refused.code == "not_owner"
    assert desk.all_of(effects.ApplyChanges) == []  # nothing for the surveyor to do


def test_the_numbers_of_changes_that_the_door_refused_are_used_up(desk: Desk) -> None:
    desk.change(CLAIM)
    fault = BadMessage("it has no layer", {"field": "layer"})
    fault.header = Header("put", source="s", number=2, epoch="now")
    desk.hand_in(events.Unreadable(desk.source, fault))
    desk.publish(1)
    assert told(desk) == [("acknowledged", 1), ("refused", 2), ("acknowledged", 2)]
    desk.hand_in(events.Unreadable(desk.source, fault))
    assert told(desk) == [("refused", 2), ("acknowledged", 2)]
    fault.header = Header("put", source="s", number=9, epoch="now")
    desk.hand_in(events.Unreadable(desk.source, fault))
    assert told(desk) == [("resend", 2)]


def test_garbage_in_a_full_window_has_to_wait_like_anything_else(desk: Desk) -> None:
    for _ in range(limits.unacknowledged_max):
        desk.change(CLAIM)
    fault = BadMessage("garbage")
    fault.header = Header("put", source="s", number=limits.unacknowledged_max + 1, epoch="now")
    desk.hand_in(events.Unreadable(desk.source, fault))
    assert told(desk) == [("resend", limits.unacknowledged_max)]


def test_garbage_without_an_owner_is_answered_as_such(desk: Desk) -> None:
    for header in (None, Header("put", source="s"), Header("put", number=1)):
        fault = BadMessage("garbage")
        fault.header = header
        desk.hand_in(events.Unreadable(desk.source, fault))
        assert desk.error("") == "bad_message"
    assert desk.count("unreadable_total") == 3


def test_what_is_no_change_is_not_taken_for_one(desk: Desk) -> None:
    desk.change(messages.Vehicles())
    assert desk.error("") == "unknown_kind"


def patch(layer: str) -> messages.Patch:
    return messages.Patch(layer=layer, corner_m=(1.0, 2.0), cell_m=0.1, columns={})


@pytest.mark.parametrize(
    ("message", "code"),
    [
        (put("outlines", "a", "a"), None),
        (put("outlines", "a", "a", expires_in_s=1.0), "bad_value"),
        (put("outlines", *(f"o{i}" for i in range(20)), expires_in_s=1.0), "too_large"),
        (
            (messages.Patch(layer="outlines", corner_m=(0.0, 0.0), cell_m=0.1, columns={}), b""),
            "conflict",
        ),
        ((messages.Claim(layer="outlines", outlines_only=False), b""), "conflict"),
    ],
)
def test_what_the_front_can_see_to_be_wrong_never_reaches_the_surveyor(
    message: tuple[messages.Change, bytes], code: str | None
) -> None:
    """Ids are looked at only where they matter: where obstacles expire."""
    desk = Desk(settings(expiries_max=10)).open()
    desk.change(*message)
    if code is None:
        assert desk.all_of(effects.ApplyChanges)
    else:
        assert told(desk) == [("refused", 1), ("acknowledged", 1)]
        refused = desk.replies()[0][1]
        assert isinstance(refused, messages.Refused)
        assert refused.code == code


def test_bad_ids_are_refused_here_once_a_layer_has_expiries(desk: Desk) -> None:
    desk.change(*put("stacks", "a", expires_in_s=9.0))
    desk.publish(1)
    desk.change(*replace("stacks", "b", "b"))
    assert told(desk) == [("refused", 2), ("acknowledged", 2)]


# -- what each kind of change becomes --------------------------------------------------------------


def test_every_kind_of_change_reaches_the_surveyor_as_what_it_is(desk: Desk) -> None:
    desk.change(messages.Claim(layer="l", unknown_blocks=True))
    desk.change(*put("l", "a"))
    desk.change(*replace("l", "b"))
    desk.change(messages.Drop(layer="l", ids=["b"]))
    desk.change(patch("l"), b"cells")
    desk.publish(1)
    changes = desk.one(effects.ApplyChanges).changes
    assert [change.what for change in changes] == ["put", "replace", "drop", "patch"]
    assert changes[0].message == put("l", "a")[0]
    assert changes[1].packed == replace("l", "b")[1]
    assert changes[2].ids == ("b",)
    assert (changes[3].message, changes[3].packed) == (patch("l"), b"cells")
    assert {change.settings for change in changes} == {LayerFlags(unknown_blocks=True)}


def test_batches_are_bounded_in_number_and_bytes() -> None:
    desk = Desk(settings(batch_changes_max=3)).open()
    for _ in range(6):
        desk.change(CLAIM)
    desk.publish(1)
    assert len(desk.one(effects.ApplyChanges).changes) == 3
    desk = Desk(settings(batch_bytes_max=100)).open()
    for _ in range(4):
        desk.change(put("stacks", "a")[0], b"x" * 40)
    desk.change(put("stacks", "a")[0], b"x" * 1000)
    desk.publish(1)
    assert len(desk.one(effects.ApplyChanges).changes) == 2
    desk.publish(2)
    assert len(desk.one(effects.ApplyChanges).changes) == 1
    desk.publish(3)  # one that is larger than a batch goes alone
    assert len(desk.one(effects.ApplyChanges).changes) == 1


# -- leases and expiry -----------------------------------------------------------------------------


def test_an_owner_that_is_silent_past_its_lease_loses_its_layer(desk: Desk) -> None:
    desk.change(messages.Claim(layer="l", lease_s=1.0), source="A")
    desk.publish(1)
    desk.tick(1001)
    assert desk.count("leases_ended_total") == 1
    desk.change(messages.Claim(layer="l"), source="B")
    desk.publish(2)
    assert told(desk) == [("acknowledged", 1)]


def test_an_obstacle_that_has_expired_is_dropped(desk: Desk) -> None:
    desk.change(*put("stacks", "a", "b", expires_in_s=0.5))
    desk.publish(1, after_ms=10)
    desk.tick(489.9)
    assert desk.all_of(effects.ApplyChanges) == []
    desk.tick(0.1)
    (change,) = desk.one(effects.ApplyChanges).changes
    assert (change.what, change.layer, change.ids) == ("drop", "stacks", ("a", "b"))
    desk.publish(2)
    assert desk.replies() == []  # nobody sent it
    assert desk.count("obstacles_expired_total") == 2


def test_many_obstacles_that_expire_together_are_dropped_in_pieces(desk: Desk) -> None:
    desk.change(*put("stacks", *(f"o{i}" for i in range(1500)), expires_in_s=0.1))
    desk.publish(1)
    desk.tick(200)
    changes = desk.one(effects.ApplyChanges).changes
    assert [len(change.ids) for change in changes] == [1000, 500]


def test_an_obstacle_that_the_surveyor_did_not_drop_still_expires(desk: Desk) -> None:
    desk.change(*put("stacks", "a", expires_in_s=0.5))
    desk.publish(1)
    desk.change(messages.Drop(layer="stacks", ids=["a"]))
    desk.publish(2, refusal(0))
    desk.tick(600)
    assert desk.one(effects.ApplyChanges).changes[0].ids == ("a",)


def test_an_obstacle_that_is_put_again_without_expiry_stays_when_its_time_has_come(
    desk: Desk,
) -> None:
    desk.change(*put("stacks", "a", "b", expires_in_s=0.5))
    desk.publish(1)
    desk.change(*put("stacks", "a"))
    desk.publish(2)
    desk.tick(600)
    assert desk.one(effects.ApplyChanges).changes[0].ids == ("b",)


def test_expiry_is_measured_from_the_arrival_of_the_change(desk: Desk) -> None:
    desk.change(*put("stacks", "a", expires_in_s=0.05))
    desk.publish(1, after_ms=80)
    assert desk.one(effects.ApplyChanges).changes[0].what == "drop"


# -- the surveyor ----------------------------------------------------------------------------------


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
