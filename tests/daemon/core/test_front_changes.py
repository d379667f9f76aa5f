"""Changes of the site through the front: numbers, refusals, leases, expiry."""

from __future__ import annotations

import pytest
from tests.daemon.core.frontdesk import Desk, put, replace, settings

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
