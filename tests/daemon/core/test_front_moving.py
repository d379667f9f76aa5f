"""Scans and tracks through the front: when they were seen, when they go, carried forward."""

from __future__ import annotations

import pytest
from tests.daemon.core.frontdesk import Desk, ms, put, replace, settings
from tests.daemon.core.movingdesk import batch, carried, scan, told, track

from byway import messages
from bywayd.core import effects, events
from bywayd.core.invariant import Defect


@pytest.fixture
def desk() -> Desk:
    return Desk().open()


def change_of(desk: Desk) -> effects.Change:
    """The only change that the last event handed out."""
    (change,) = desk.one(effects.ApplyChanges).changes
    return change


def drops(desk: Desk) -> list[tuple[str, ...]]:
    """What the last event has had dropped."""
    return [
        change.ids
        for apply in desk.all_of(effects.ApplyChanges)
        for change in apply.changes
        if change.what == "drop"
    ]


# -- what was seen, and when -----------------------------------------------------------------------


@pytest.mark.parametrize("make", [scan, lambda layer, **more: track(layer, "cart", **more)])
def test_what_was_seen_reaches_the_surveyor_with_its_moment(desk: Desk, make) -> None:
    message, packed = make("lidar", age_s=0.25)
    desk.change(message, packed, after_ms=7)
    arrived = desk.now
    change = change_of(desk)
    assert change.what == message.kind
    assert (change.message, change.packed) == (message, packed)
    assert change.as_of == arrived - ms(250)


def test_the_moment_is_that_of_the_arrival_however_long_it_waits(desk: Desk) -> None:
    desk.change(messages.Claim(layer="lidar"))
    out = batch(desk)
    desk.change(*scan("lidar"))
    arrived = desk.now
    desk.publish(out, after_ms=80)
    assert change_of(desk).as_of == arrived


def test_what_stands_has_no_moment(desk: Desk) -> None:
    desk.change(*put("stacks", "a"))
    assert change_of(desk).as_of is None


def test_scans_and_tracks_are_acknowledged_like_everything_else(desk: Desk) -> None:
    desk.change(*scan("lidar"))
    assert told(desk) == []
    desk.publish(1)
    assert told(desk) == [("acknowledged", 1)]
    desk.change(*track("lidar", "cart"))
    desk.publish(2, events.Refusal(0, "bad_geometry", "it crosses itself", {}))
    assert told(desk) == [("refused", 2), ("acknowledged", 2)]


@pytest.mark.parametrize("make", [scan, lambda layer: track(layer, "cart")])
def test_a_layer_of_outlines_takes_nothing_that_is_seen(desk: Desk, make) -> None:
    desk.change(*make("outlines"))
    assert told(desk) == [("refused", 1), ("acknowledged", 1)]
    refused = desk.replies()[0][1]
    assert isinstance(refused, messages.Refused)
    assert (refused.code, refused.facts["field"]) == ("conflict", "outlines_only")
    assert not desk.all_of(effects.ApplyChanges)


# -- tracks go -------------------------------------------------------------------------------------


def test_a_track_that_does_not_say_when_it_expires_goes_after_the_time_of_the_settings() -> None:
    desk = Desk(settings(track_expires_s=0.3)).open()
    desk.change(*track("lidar", "cart", "dog"))
    desk.publish(1)
    desk.tick(298)
    assert drops(desk) == []
    desk.tick(1)
    assert drops(desk) == [("cart", "dog")]


def test_a_track_goes_when_its_source_said_so(desk: Desk) -> None:
    desk.change(*track("lidar", "cart", expires_in_s=0.1))
    desk.publish(1)
    desk.tick(99)
    assert drops(desk) == [("cart",)]


def test_a_track_that_is_sent_again_lives_on(desk: Desk) -> None:
    desk.change(*track("lidar", "cart", expires_in_s=0.1))
    desk.publish(1)
    desk.change(*track("lidar", "cart", expires_in_s=0.1), after_ms=60)
    desk.publish(batch(desk))
    desk.tick(60)
    assert drops(desk) == []
    desk.tick(40)
    assert drops(desk) == [("cart",)]


def test_a_track_that_comes_to_stand_stays(desk: Desk) -> None:
    desk.change(*track("lidar", "cart", "dog", expires_in_s=0.1))
    desk.publish(1)
    desk.change(*put("lidar", "cart"))
    desk.publish(batch(desk))
    desk.tick(200)
    assert drops(desk) == [("dog",)]


def test_what_stood_goes_when_it_has_begun_to_move(desk: Desk) -> None:
    desk.change(*put("lidar", "cart"))
    desk.publish(1)
    desk.change(*track("lidar", "cart", expires_in_s=0.1))
    desk.publish(batch(desk))
    desk.tick(200)
    assert drops(desk) == [("cart",)]


def test_tracks_of_a_layer_that_is_replaced_are_gone_already(desk: Desk) -> None:
    desk.change(*track("lidar", "cart", expires_in_s=0.1))
    desk.publish(1)
    desk.change(*replace("lidar", "a"))
    desk.publish(batch(desk))
    desk.tick(200)
    assert drops(desk) == []


def test_tracks_are_bounded_with_everything_that_expires() -> None:
    desk = Desk(settings(expiries_max=2)).open()
    desk.change(*track("lidar", "a", "b"))
    desk.publish(1)
    desk.change(*track("lidar", "c"))
    refused = desk.replies()[0][1]
    assert isinstance(refused, messages.Refused)
    assert refused.code == "too_large"


def test_a_track_twice_in_one_message_is_refused(desk: Desk) -> None:
    desk.change(*track("lidar", "cart", "cart"))
    assert told(desk) == [("refused", 1), ("acknowledged", 1)]


# -- carried forward -------------------------------------------------------------------------------


def test_an_empty_batch_goes_out_when_the_surveyor_wants_one(desk: Desk) -> None:
    desk.change(*track("lidar", "cart"))
    carried(desk, 1, next_in_s=0.1)
    desk.tick(99)
    assert not desk.all_of(effects.ApplyChanges)
    desk.tick(1)
    apply = desk.one(effects.ApplyChanges)
    assert (apply.changes, apply.at) == ((), desk.now)
    carried(desk, apply.batch, next_in_s=0.1)
    assert desk.replies() == []  # nobody sent it
    desk.tick(100)
    assert desk.one(effects.ApplyChanges).changes == ()


def test_a_site_on_which_nothing_has_moved_keeps_its_revision(desk: Desk) -> None:
    desk.change(*track("lidar", "cart"))
    carried(desk, 1, next_in_s=0.1)
    desk.tick(100)
    carried(desk, batch(desk), next_in_s=None, changes=False)
    assert desk.front.snapshots.revision == 2
    desk.change(*put("stacks", "a"))
    carried(desk, batch(desk), None, changes=False)
    assert desk.reply() == messages.Acknowledged(source="s", number=2, revision=2)


def test_a_repeat_is_acknowledged_with_the_revision_that_it_was_carried_to(desk: Desk) -> None:
    message = track("lidar", "cart")
    desk.change(*message)
    carried(desk, 1, next_in_s=0.1)
    desk.tick(100)
    carried(desk, batch(desk), next_in_s=None)
    desk.change(*message, number=1)
    assert desk.reply() == messages.Acknowledged(source="s", number=1, revision=3)


def test_changes_that_come_first_carry_forward_as_well(desk: Desk) -> None:
    desk.change(*track("lidar", "cart"))
    carried(desk, 1, next_in_s=0.1)
    desk.change(*put("stacks", "a"), after_ms=50)
    apply = desk.one(effects.ApplyChanges)
    assert apply.at == desk.now
    carried(desk, apply.batch, next_in_s=None)
    desk.tick(500)
    assert not desk.all_of(effects.ApplyChanges)


def test_changes_that_come_while_things_are_carried_wait_their_turn(desk: Desk) -> None:
    desk.change(*track("lidar", "cart"))
    carried(desk, 1, next_in_s=0.1)
    desk.tick(100)
    empty = batch(desk)
    desk.change(*put("lidar", "a"))
    assert not desk.all_of(effects.ApplyChanges)
    carried(desk, empty, next_in_s=0.1)
    assert told(desk) == []
    assert change_of(desk).what == "put"
    desk.publish(batch(desk))
    assert told(desk) == [("acknowledged", 2)]


def test_a_batch_may_be_wanted_at_once_and_what_waits_goes_with_it(desk: Desk) -> None:
    desk.change(*track("lidar", "cart"))
    carried(desk, 1, next_in_s=0.0)
    empty = desk.one(effects.ApplyChanges)
    assert (empty.changes, empty.at) == ((), desk.now)
    desk.change(*put("stacks", "a"))
    carried(desk, empty.batch, next_in_s=0.0)
    assert change_of(desk).what == "put"


def test_a_batch_that_is_due_while_another_is_out_is_the_next_one(desk: Desk) -> None:
    desk.change(*track("lidar", "cart"))
    carried(desk, 1, next_in_s=0.1)
    desk.change(*put("stacks", "a"), after_ms=99)
    out = batch(desk)
    # It would have been due now; whoever is at work says anew when it wants one.
    desk.tick(5)
    assert not desk.all_of(effects.ApplyChanges)
    carried(desk, out, next_in_s=0.02)
    desk.tick(19)
    assert not desk.all_of(effects.ApplyChanges)
    desk.tick(1)
    assert desk.one(effects.ApplyChanges).changes == ()


def test_nothing_is_carried_while_there_is_no_surveyor(desk: Desk) -> None:
    desk.change(*track("lidar", "cart"))
    carried(desk, 1, next_in_s=0.1)
    desk.hand_in(events.SurveyorLost(1, "killed"))
    desk.tick(200)
    assert not desk.all_of(effects.ApplyChanges)
    assert desk.front.surveying.next_alarm() is None
    desk.hand_in(events.SurveyorReady(2, 2, {"revision": 2}))
    desk.tick(200)
    assert not desk.all_of(effects.ApplyChanges)


def test_the_batch_of_a_surveyor_that_was_lost_comes_before_what_its_successor_wants(
    desk: Desk,
) -> None:
    desk.change(*track("lidar", "cart"))
    desk.hand_in(events.SurveyorLost(1, "killed"))
    desk.hand_in(events.SurveyorReady(2, 1, {"revision": 1}, next_in_s=0.0))
    assert change_of(desk).what == "track"


def test_a_batch_that_is_due_while_another_is_out_is_a_defect(desk: Desk) -> None:
    desk.change(*track("lidar", "cart"))
    desk.front.surveying._carry_at = desk.now
    with pytest.raises(Defect, match="carried by who is free"):
        desk.front.check()


def test_a_surveyor_that_is_lost_while_it_carries_owes_no_changes(desk: Desk) -> None:
    desk.change(*track("lidar", "cart"))
    carried(desk, 1, next_in_s=0.1)
    desk.tick(100)
    desk.hand_in(events.SurveyorLost(1, "killed"))
    desk.hand_in(events.SurveyorReady(2, 2, {"revision": 2}, next_in_s=0.05))
    assert not desk.all_of(effects.ApplyChanges)
    desk.tick(50)
    apply = desk.one(effects.ApplyChanges)
    assert (apply.surveyor, apply.changes) == (2, ())


def test_the_health_record_counts_what_moves(desk: Desk) -> None:
    desk.change(*track("fixed", "cart"))
    carried(desk, 1, None, obstacles={"fixed": 4}, tracks={"fixed": 1})
    desk.say(messages.Health())
    record = desk.answer("q")
    assert isinstance(record, messages.HealthIs)
    assert (record.layers["fixed"].obstacles, record.layers["fixed"].tracks) == (4, 1)
