"""What was kept comes back: before anything else, with what is left of its time."""

from __future__ import annotations

from tests.daemon.core.frontdesk import put
from tests.daemon.core.keepdesk import (
    DURABLE,
    LAYER,
    batch_of,
    done,
    durable,
    opened,
    recollection,
    started,
    told,
)

from byway import messages
from bywayd.core import effects, events, kept
from bywayd.core.effects import Change, LayerFlags
from bywayd.core.kept import Recollection, Stock


def test_nothing_is_taken_in_before_the_recall_and_no_replan_before_it_is_visible() -> None:
    desk = started()
    desk.change(*put("moving", "x"), source="m")
    resend = desk.reply()
    assert isinstance(resend, messages.Resend)
    assert (resend.reason, resend.have) == ("full", 0)
    desk.ask("early")
    assert desk.error("early") == "warming"
    desk.hand_in(kept.ClerkReady(1, Stock(100, 0)))
    recall = desk.one(kept.RecallChanges)
    assert recall.place is None
    desk.hand_in(kept.Recalled(1, recall.task, (LAYER, recollection("a")), (1, 7)))
    batch = batch_of(desk)
    again = desk.one(kept.RecallChanges)
    assert again.place == (1, 7)
    desk.change(*put("moving", "x"), source="m", number=1, after_ms=60)
    assert isinstance(desk.reply(), messages.Resend)
    desk.hand_in(kept.Recalled(1, again.task, (recollection("b"),), None))
    desk.change(*put("moving", "x"), source="m", number=1)
    desk.publish(batch)
    second = desk.one(effects.ApplyChanges)
    assert [change.layer for change in second.changes] == ["stacks", "moving"]
    desk.ask("soon")
    assert desk.error("soon") == "warming"
    assert desk.front.state == "warming"
    desk.publish(second.batch)
    assert told(desk) == [("acknowledged", "m", 1)]
    # What was recalled is kept already.
    assert desk.all_of(kept.KeepChanges) == []
    desk.ask("late")
    assert desk.one(effects.StartJob)
    layer = desk.front.ledger.layers.get("stacks")
    assert layer is not None
    assert (layer.owner, layer.flags) == (None, DURABLE)


def test_what_is_expected_of_a_layer_outlasts_the_daemon() -> None:
    desk = durable()
    desk.change(messages.Claim(layer="stacks", expected_period_s=0.1, when_stale="refuse"))
    desk.publish(batch_of(desk))
    (keepsake,) = desk.one(kept.KeepChanges).keepsakes
    claim = Recollection(keepsake.change, keepsake.terms)
    successor = opened(claim, recollection("a"))
    successor.ask("a")
    assert successor.one(effects.StartJob)
    successor.tick(101)
    successor.ask("b")
    assert successor.error("b") == "stale_layer"
    successor.say(messages.Health())
    record = successor.answer("q")
    assert isinstance(record, messages.HealthIs)
    layer = record.layers["stacks"]
    assert (layer.stale, layer.expected_period_s, layer.age_s) == (True, 0.1, None)


def test_a_large_site_is_recalled_no_faster_than_the_surveyor_takes_it() -> None:
    desk = started(batch_changes_max=2)
    desk.hand_in(kept.ClerkReady(1, Stock()))
    recall = desk.one(kept.RecallChanges)
    found = (LAYER, *(recollection(f"o{i}") for i in range(5)))
    desk.hand_in(kept.Recalled(1, recall.task, found, (1, 5)))
    batch = batch_of(desk)
    for _ in range(2):
        assert desk.all_of(kept.RecallChanges) == []
        desk.publish(batch)
        batch = batch_of(desk)
    desk.publish(batch)
    assert desk.one(kept.RecallChanges).place == (1, 5)


def test_a_clerk_that_is_lost_during_the_recall_has_a_successor_that_goes_on_with_it() -> None:
    desk = started()
    desk.hand_in(kept.ClerkReady(1, Stock()))
    recall = desk.one(kept.RecallChanges)
    desk.hand_in(kept.Recalled(1, recall.task, (LAYER,), (1, 0)))
    desk.hand_in(kept.ClerkLost(1, "killed"))
    desk.hand_in(kept.ClerkReady(2, Stock()))
    assert desk.one(kept.RecallChanges).place == (1, 0)


def test_what_is_recalled_expires_when_it_would_have() -> None:
    desk = opened(LAYER, recollection("a", 0.05), recollection("b"))
    desk.tick(60)
    (change,) = desk.one(effects.ApplyChanges).changes
    assert (change.what, change.ids) == ("drop", ("a",))
    desk.publish(batch_of(desk))
    (keepsake,) = desk.one(kept.KeepChanges).keepsakes
    assert keepsake.change.ids == ("a",)


def test_what_has_no_room_for_an_expiry_stays() -> None:
    desk = opened(LAYER, recollection("a", 0.05), recollection("b", 0.05), expiries_max=1)
    desk.tick(60)
    (change,) = desk.one(effects.ApplyChanges).changes
    assert change.ids == ("a",)
    assert desk.front.ledger.statistics().expiries == 0


def test_what_the_site_does_not_take_any_more_is_told_and_the_rest_is_there() -> None:
    desk = started()
    desk.hand_in(kept.ClerkReady(1, Stock()))
    task = desk.one(kept.RecallChanges).task
    desk.hand_in(kept.Recalled(1, task, (LAYER, recollection("a"), recollection("b")), None))
    desk.publish(batch_of(desk), events.Refusal(1, "outside_limits", "a: outside", {}))
    assert desk.one(effects.Log).event == "keep.recall_refused"
    assert desk.count("recalls_refused_total") == 1
    desk.ask("a")
    assert desk.one(effects.StartJob)


def test_settings_win_over_what_was_kept_of_a_layer() -> None:
    flags = LayerFlags(unknown_blocks=True, durable=True)
    desk = started(layers={"stacks": flags})
    desk.hand_in(kept.ClerkReady(1, Stock()))
    task = desk.one(kept.RecallChanges).task
    desk.hand_in(kept.Recalled(1, task, (LAYER, recollection("a")), None))
    assert {change.settings for change in desk.one(effects.ApplyChanges).changes} == {flags}


def test_a_layer_that_is_live_by_now_is_not_recalled_and_forgotten() -> None:
    desk = started(layers={"stacks": LayerFlags()})
    desk.hand_in(kept.ClerkReady(1, Stock()))
    task = desk.one(kept.RecallChanges).task
    desk.hand_in(kept.Recalled(1, task, (LAYER, recollection("a")), None))
    assert desk.all_of(effects.ApplyChanges) == []
    (keepsake,) = desk.one(kept.KeepChanges).keepsakes
    assert (keepsake.change.what, keepsake.change.settings.durable) == ("claim", False)
    assert "keep.layer_forgotten" in [log.event for log in desk.all_of(effects.Log)]
    done(desk)
    assert desk.replies() == []


def test_a_file_that_cannot_be_used_at_the_start_ends_the_daemon() -> None:
    desk = started()
    desk.hand_in(kept.ClerkUnfit(1, "site.sqlite is damaged"))
    assert desk.one(effects.Stop) == effects.Stop("site.sqlite is damaged", is_failure=True)
    assert "keep.unfit" in [log.event for log in desk.all_of(effects.Log)]
    assert desk.hand_in(kept.ClerkLost(1, "ended")) == []


def test_recalled_layers_are_there_however_many_there_may_be() -> None:
    found = [Recollection(Change("claim", f"layer{i}", DURABLE)) for i in range(3)]
    desk = opened(*found, layers_max=2, layers={})
    assert {layer.name for layer in desk.front.ledger.layers} == {"layer0", "layer1", "layer2"}
    desk.change(messages.Claim(layer="more"))
    ((_, refused), _) = desk.replies()
    assert isinstance(refused, messages.Refused)
    assert refused.code == "too_large"
