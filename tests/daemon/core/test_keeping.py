"""Durable layers through the front: what waits for the disk, what does not, what is recalled."""

from __future__ import annotations

from typing import Any

import pytest
from tests.daemon.core.frontdesk import Desk, put, replace, settings

from byway import messages
from bywayd.core import effects, events, kept
from bywayd.core.effects import Change, LayerFlags
from bywayd.core.instants import Duration
from bywayd.core.invariant import Defect
from bywayd.core.keepline import KeepLine
from bywayd.core.kept import Keepsake, Recollection, Stock
from bywayd.core.sources import Source

DURABLE = LayerFlags(durable=True)
CLAIM = messages.Claim(layer="stacks", durable=True)


def started(**told: Any) -> Desk:
    """A desk with a site and workers, whose clerk has not said anything yet."""
    return Desk(settings(keeps=True, **told)).open()


def opened(*found: Recollection, **told: Any) -> Desk:
    """A desk whose clerk has recalled something, and that is visible."""
    desk = started(**told)
    desk.hand_in(kept.ClerkReady(1, Stock(100, 0)))
    recall = desk.one(kept.RecallChanges)
    desk.hand_in(kept.Recalled(1, recall.task, found, None))
    for apply in desk.all_of(effects.ApplyChanges):
        desk.publish(apply.batch)
    return desk


def durable(**told: Any) -> Desk:
    """A desk with a durable layer "stacks" of source "s", and a live one "moving" of "m"."""
    desk = opened(**told)
    desk.change(CLAIM)
    desk.publish(1)
    done(desk)
    desk.change(messages.Claim(layer="moving"), source="m")
    desk.publish(2)
    return desk


def batch_of(desk: Desk) -> int:
    return desk.one(effects.ApplyChanges).batch


def done(desk: Desk, stock: Stock = Stock(100, 0), after_ms: float = 4.0) -> None:  # noqa: B008
    """The clerk has committed what it was given last."""
    task = desk.one(kept.KeepChanges).task
    desk.hand_in(kept.ChangesKept(1, task, stock), after_ms)


def told(desk: Desk) -> list[tuple[str, str, int]]:
    """What sources were told by the last event: kind, source, number."""
    return [
        (message.kind, message.source, message.number)
        for _, message in desk.replies()
        if isinstance(message, messages.Acknowledged | messages.Refused)
    ]


def kept_of(desk: Desk) -> list[tuple[str, str]]:
    return [
        (keepsake.change.what, keepsake.change.layer)
        for keepsake in desk.one(kept.KeepChanges).keepsakes
    ]


# -- acknowledgements -------------------------------------------------------------------------


def test_a_durable_change_is_acknowledged_when_it_is_on_the_disk() -> None:
    desk = durable()
    desk.change(*put("stacks", "a"))
    desk.publish(batch_of(desk))
    assert told(desk) == []
    assert kept_of(desk) == [("put", "stacks")]
    done(desk)
    assert told(desk) == [("acknowledged", "s", 2)]
    assert desk.reply().revision == desk.revision  # type: ignore[attr-defined]
    assert desk.front.health.statistics().observed["kept_s"] == 2
    assert desk.count("changes_kept_total") == 2


def test_a_live_change_of_another_source_does_not_wait_for_it() -> None:
    desk = durable()
    desk.change(*put("stacks", "a"))
    batch = batch_of(desk)
    desk.change(*put("moving", "x"), source="m")
    desk.publish(batch)
    batch = batch_of(desk)
    desk.publish(batch)
    assert told(desk) == [("acknowledged", "m", 2)]
    assert desk.all_of(kept.KeepChanges) == []


def test_a_live_change_of_the_same_source_waits_for_those_before_it() -> None:
    desk = durable()
    desk.change(messages.Claim(layer="sight"))
    desk.publish(batch_of(desk))
    assert told(desk) == [("acknowledged", "s", 2)]
    desk.change(*put("stacks", "a"))
    desk.publish(batch_of(desk))
    keep = desk.one(kept.KeepChanges)
    desk.change(*put("sight", "b"))
    desk.publish(batch_of(desk))
    desk.change(*put("sight", "c"))
    desk.publish(batch_of(desk))
    assert told(desk) == []
    desk.hand_in(kept.ChangesKept(1, keep.task, Stock()))
    assert told(desk) == [("acknowledged", "s", 5)]


def test_all_that_comes_during_a_commit_goes_into_the_next_one() -> None:
    desk = durable()
    desk.change(*put("stacks", "a"))
    desk.publish(batch_of(desk))
    keep = desk.one(kept.KeepChanges)
    for obstacle in "bc":
        desk.change(*put("stacks", obstacle))
        desk.publish(batch_of(desk))
        assert desk.all_of(kept.KeepChanges) == []
    desk.hand_in(kept.ChangesKept(1, keep.task, Stock()))
    assert told(desk) == [("acknowledged", "s", 2)]
    assert len(desk.one(kept.KeepChanges).keepsakes) == 2
    done(desk)
    assert told(desk) == [("acknowledged", "s", 4)]
    assert desk.count("commits_total") == 3


def test_what_is_refused_is_told_at_once_and_not_kept() -> None:
    desk = durable()
    desk.change(*put("stacks", "a"))
    batch = batch_of(desk)
    desk.publish(batch, events.Refusal(0, "bad_geometry", "crosses itself", {}))
    assert told(desk) == [("refused", "s", 2), ("acknowledged", "s", 2)]
    assert desk.all_of(kept.KeepChanges) == []


def test_a_repeat_is_not_acknowledged_before_its_time() -> None:
    desk = durable()
    desk.change(*put("stacks", "a"))
    desk.publish(batch_of(desk))
    keep = desk.one(kept.KeepChanges)
    desk.change(*put("stacks", "a"), number=2)
    assert desk.replies() == []
    desk.hand_in(kept.ChangesKept(1, keep.task, Stock()))
    desk.change(*put("stacks", "a"), number=2)
    assert told(desk) == [("acknowledged", "s", 2)]


def test_a_source_has_a_window_for_what_is_not_on_the_disk() -> None:
    desk = durable(source_window=2)
    for obstacle in "ab":
        desk.change(*put("stacks", obstacle))
        desk.publish(batch_of(desk))
    desk.change(*put("stacks", "c"))
    assert desk.reply() == messages.Resend(
        source="s", reason="full", have=3, retry_after_s=desk.front.settings.resend_every_s
    )


def test_everything_about_a_durable_layer_is_kept_in_order() -> None:
    desk = durable()
    desk.change(*put("stacks", "a", expires_in_s=0.05))
    batch = batch_of(desk)
    desk.change(messages.Drop(layer="stacks", ids=["b"]))
    desk.change(messages.Patch(layer="stacks", corner_m=(0.0, 0.0), cell_m=0.1, columns={}))
    desk.change(*replace("stacks", "c"))
    desk.change(*put("moving", "x"), source="m")
    arrived = desk.now
    desk.publish(batch)
    keep = desk.one(kept.KeepChanges)
    assert keep.keepsakes[0].expires_at == arrived + Duration.of_s(0.05)
    assert keep.keepsakes[0].change.settings == DURABLE
    desk.publish(batch_of(desk))
    desk.hand_in(kept.ChangesKept(1, keep.task, Stock()))
    assert kept_of(desk) == [("drop", "stacks"), ("patch", "stacks"), ("replace", "stacks")]


def test_what_expires_is_forgotten_by_the_clerk_as_well() -> None:
    desk = durable()
    desk.change(*put("stacks", "a", expires_in_s=0.05))
    desk.publish(batch_of(desk))
    done(desk)
    desk.tick(51)
    desk.publish(batch_of(desk))
    (keepsake,) = desk.one(kept.KeepChanges).keepsakes
    assert (keepsake.change.what, keepsake.change.ids) == ("drop", ("a",))
    done(desk)
    assert desk.replies() == []


# -- what cannot be kept ------------------------------------------------------------------------


@pytest.mark.parametrize("change", [(CLAIM, b""), replace("stacks", "a", durable=True)])
def test_without_a_file_no_layer_can_be_durable(change: tuple[messages.Change, bytes]) -> None:
    desk = Desk().open()
    desk.change(*change)
    ((_, refused), (_, _)) = desk.replies()
    assert isinstance(refused, messages.Refused)
    assert refused.code == "conflict"
    assert "[keep] file" in refused.text
    # It is not there now, neither.
    assert desk.front.ledger.layers.get("stacks") is None
    assert desk.front.clerks.statistics().spawned_total == 0


def test_whether_a_layer_is_durable_cannot_be_changed() -> None:
    desk = durable()
    desk.change(messages.Claim(layer="stacks", durable=False))
    ((_, refused), *_) = desk.replies()
    assert isinstance(refused, messages.Refused)
    assert refused.facts == {"layer": "stacks", "field": "durable", "value": True}


@pytest.mark.parametrize(
    "change",
    [
        messages.Scan(layer="stacks", origin=(0.0, 0.0, 0.0), range_m_max=9.0, columns={}),
        messages.Track(layer="stacks", columns={}),
    ],
)
def test_a_durable_layer_takes_nothing_that_is_true_for_a_moment_only(
    change: messages.Change,
) -> None:
    desk = durable()
    desk.change(change)
    ((_, refused), _) = desk.replies()
    assert isinstance(refused, messages.Refused)
    assert (refused.code, refused.facts["field"]) == ("conflict", "durable")


@pytest.mark.parametrize(
    ("stock", "change", "code"),
    [
        (Stock(1000, 0), put("stacks", "a"), "too_large"),
        (Stock(1000, 0), replace("stacks", "a"), "too_large"),
        (Stock(1000, 0), replace("stacks"), None),
        (Stock(1000, 0), (messages.Drop(layer="stacks", ids=["a"]), b""), None),
        (Stock(1000, 0), (CLAIM, b""), None),
        (Stock(999, 0), put("stacks", "a"), None),
        (Stock(0, 4), put("stacks", "a"), None),
        (
            Stock(0, 4),
            (messages.Patch(layer="stacks", corner_m=(0, 0), cell_m=0.1, columns={}), b""),
            "too_large",
        ),
        (
            Stock(0, 3),
            (messages.Patch(layer="stacks", corner_m=(0, 0), cell_m=0.1, columns={}), b""),
            None,
        ),
    ],
)
def test_a_file_that_is_full_takes_only_what_makes_room(
    stock: Stock, change: tuple[messages.Change, bytes], code: str | None
) -> None:
    desk = durable(keep_bytes_max=1000, keep_patches_max=4)
    desk.change(*put("stacks", "first"))
    desk.publish(batch_of(desk))
    done(desk, stock)
    desk.change(*change)
    refused = [m for _, m in desk.replies() if isinstance(m, messages.Refused)]
    assert [m.code for m in refused] == ([] if code is None else [code])
    # Live layers do not care.
    desk.change(*put("moving", "x"), source="m")
    assert not [m for _, m in desk.replies() if isinstance(m, messages.Refused)]


def test_what_waits_for_the_disk_is_bounded() -> None:
    desk = durable(keep_pending_bytes_max=80)
    desk.change(*put("stacks", "a"))
    desk.publish(batch_of(desk))
    keep = desk.one(kept.KeepChanges)
    desk.change(*put("stacks", "b"))
    resend = desk.reply()
    assert isinstance(resend, messages.Resend)
    assert (resend.reason, resend.have) == ("full", 2)
    desk.change(*put("moving", "x"), source="m")
    assert desk.one(effects.ApplyChanges)
    desk.hand_in(kept.ChangesKept(1, keep.task, Stock()))
    desk.change(*put("stacks", "b"), number=3, after_ms=100)
    assert desk.front.ledger.pending == 2


# -- clerks -------------------------------------------------------------------------------------


def test_what_a_lost_clerk_never_answered_is_given_to_its_successor() -> None:
    desk = durable()
    desk.change(*put("stacks", "a"))
    desk.publish(batch_of(desk))
    first = desk.one(kept.KeepChanges)
    desk.hand_in(kept.ClerkLost(1, "killed"))
    assert desk.one(kept.SpawnClerk).clerk == 2
    desk.change(*put("stacks", "b"))
    desk.publish(batch_of(desk))
    assert told(desk) == []
    desk.hand_in(kept.ClerkReady(2, Stock(100, 0)))
    again = desk.one(kept.KeepChanges)
    assert (again.clerk, again.keepsakes) == (2, first.keepsakes)
    desk.hand_in(kept.ChangesKept(2, again.task, Stock()))
    assert told(desk) == [("acknowledged", "s", 2)]
    assert kept_of(desk) == [("put", "stacks")]


def test_a_clerk_that_is_silent_at_a_commit_is_replaced_and_not_believed_afterwards() -> None:
    desk = durable(clerk_silence_s=1.0)
    desk.change(*put("stacks", "a"))
    desk.publish(batch_of(desk))
    keep = desk.one(kept.KeepChanges)
    desk.hand_in(kept.ClerkAlive(1), 900)
    desk.tick(1001)
    assert desk.one(kept.KillClerk).why == "silent at work"
    desk.hand_in(kept.ChangesKept(1, keep.task, Stock()))
    assert desk.replies() == []
    desk.hand_in(kept.ClerkHindered(1, "no room"))
    desk.hand_in(kept.ClerkUnfit(1, "damaged"))
    assert desk.front.health.counts().get("clerks_unfit_total", 0) == 0
    desk.hand_in(kept.ClerkReady(1, Stock()))
    assert desk.all_of(kept.KeepChanges) == []
    desk.hand_in(kept.ClerkLost(1, "killed"))
    desk.hand_in(kept.ClerkReady(2, Stock()))
    assert desk.one(kept.KeepChanges).clerk == 2


def test_an_idle_clerk_is_pinged() -> None:
    desk = durable()
    desk.tick(1001)
    assert desk.one(kept.PingClerk).clerk == 1
    desk.hand_in(kept.ClerkAlive(1))
    desk.tick(20_001)
    assert desk.one(kept.PingClerk).clerk == 1
    desk.tick(20_001)
    assert desk.one(kept.KillClerk).why == "silent when pinged"


@pytest.mark.parametrize(
    "event",
    [
        kept.ClerkReady(1, Stock()),
        kept.ChangesKept(1, 99, Stock()),
        kept.Recalled(1, 99, (), None),
        kept.Recalled(1, 3, (), None),  # its task is to keep something
    ],
)
def test_a_clerk_that_talks_nonsense_is_replaced(event: kept.ClerkEvent) -> None:
    desk = durable()
    desk.change(*put("stacks", "a"))
    desk.publish(batch_of(desk))
    assert desk.one(kept.KeepChanges).task == 3
    desk.hand_in(event)
    assert desk.one(kept.KillClerk).why.startswith("spoke nonsense")
    assert desk.replies() == []
    desk.hand_in(event)
    assert desk.all_of(kept.KillClerk) == []


def test_a_disk_that_takes_nothing_is_told_now_and_then_and_nothing_is_acknowledged() -> None:
    desk = durable(surveyor_silence_s=100.0, worker_silence_s=100.0)
    desk.change(*put("stacks", "a"))
    desk.publish(batch_of(desk))
    keep = desk.one(kept.KeepChanges)
    lines: list[str] = []
    for _ in range(25):
        desk.hand_in(kept.ClerkHindered(1, "there is no room"), 500)
        lines += [log.event for log in desk.all_of(effects.Log) if "keep" in log.event]
        assert told(desk) == []
    assert lines == ["keep.hindered"] * 2
    assert desk.front.keeping.counts()["clerk_hindered"] == 1
    desk.change(*put("moving", "x"), source="m")
    desk.publish(batch_of(desk))
    assert told(desk) == [("acknowledged", "m", 2)]
    desk.hand_in(kept.ChangesKept(1, keep.task, Stock()))
    assert told(desk) == [("acknowledged", "s", 2)]
    assert desk.one(effects.Log).event == "keep.goes_on"
    assert desk.front.keeping.counts()["clerk_hindered"] == 0


def test_a_file_that_goes_bad_in_service_stops_durable_changes_only() -> None:
    desk = durable()
    desk.change(*put("stacks", "a"))
    desk.publish(batch_of(desk))
    desk.hand_in(kept.ClerkLost(1, "disk I/O error"))
    desk.hand_in(kept.ClerkUnfit(2, "site.sqlite is damaged"))
    assert desk.one(effects.Log).event == "keep.unfit"
    assert desk.all_of(effects.Stop) == []
    desk.hand_in(kept.ClerkLost(2, "ended"))
    desk.change(*put("moving", "x"), source="m")
    desk.publish(batch_of(desk))
    assert told(desk) == [("acknowledged", "m", 2)]
    desk.ask("a")
    assert desk.one(effects.StartJob)


# -- the recall ---------------------------------------------------------------------------------


def recollection(obstacle: str, expires_in_s: float | None = None) -> Recollection:
    message, packed = put("stacks", obstacle)
    expires_in = None if expires_in_s is None else Duration.of_s(expires_in_s)
    return Recollection(
        Change("put", "stacks", DURABLE, message, packed), {}, (obstacle,), expires_in
    )


LAYER = Recollection(Change("claim", "stacks", DURABLE))


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


# -- the end, and looking at it ------------------------------------------------------------------


def test_the_daemon_does_not_end_before_all_is_on_the_disk() -> None:
    desk = durable()
    desk.change(*put("stacks", "a"))
    desk.publish(batch_of(desk))
    keep = desk.one(kept.KeepChanges)
    desk.hand_in(events.StopAsked("enough"))
    assert desk.all_of(effects.Stop) == []
    desk.hand_in(kept.ChangesKept(1, keep.task, Stock()))
    assert told(desk) == [("acknowledged", "s", 2)]
    assert desk.one(effects.Stop) == effects.Stop("enough")


def test_the_health_record_tells_how_much_is_kept() -> None:
    desk = durable()
    desk.change(*put("stacks", "a"))
    desk.publish(batch_of(desk))
    keep = desk.one(kept.KeepChanges)
    desk.say(messages.Health())
    record = desk.answer("q")
    assert isinstance(record, messages.HealthIs)
    assert record.counts["keep_pending"] == 1
    assert record.memory_bytes["keep_pending"] > 0
    assert record.layers["stacks"].durable
    desk.hand_in(kept.ChangesKept(1, keep.task, Stock(5000, 3)))
    desk.say(messages.Health())
    record = desk.answer("q")
    assert isinstance(record, messages.HealthIs)
    assert record.memory_bytes["kept"] == 5000
    assert (record.counts["keep_patches"], record.counts["clerk_ready"]) == (3, 1)


# -- the parts -----------------------------------------------------------------------------------


def keepsake(size_bytes: int) -> Keepsake:
    return Keepsake(Change("claim", "stacks", DURABLE), size_bytes=size_bytes)


def test_a_commit_is_bounded_and_a_change_that_is_larger_goes_alone() -> None:
    line = KeepLine(100)
    sizes = [1, 17 << 20, 17 << 20, 8 << 20, 8 << 20, 1, *([0] * 1100)]
    assert [line.append(keepsake(size)) for size in sizes] == list(range(1, len(sizes) + 1))
    batches = []
    while batch := line.next_batch():
        assert line.next_batch() is batch
        assert len(line) == len(sizes) - line.kept_to
        line.check()
        assert line.kept(Stock()) == batch
        batches.append(len(batch))
    assert batches == [1, 1, 1, 2, 1024, 1106 - 5 - 1024]
    assert (line.kept_to, line.size_bytes) == (1106, 0)


def test_nothing_is_kept_that_was_not_handed_out() -> None:
    with pytest.raises(Defect, match="handed out"):
        KeepLine(100).kept(Stock())


def test_numbers_are_decided_with_what_they_wait_for() -> None:
    source = Source("s", events.Peer("updates", b"s"), Desk().now)
    assert source.settle(3, 0, 0)
    assert not source.settle(5, 10, 7)
    assert not source.settle(6, 12, 7)
    assert not source.settle(8, 0, 7)  # live: comes after what waits for 12
    assert (source.decided, source.settled) == (3, 8)
    assert not source.let_go(9)
    assert source.let_go(11)
    assert source.decided == 5
    assert source.let_go(12)
    assert (source.decided, source.settled, list(source.held)) == (8, 8, [])
    assert source.settle(9, 12, 12)
