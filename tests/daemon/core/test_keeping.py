"""Durable layers through the front: what waits for the disk, and what cannot be kept."""

from __future__ import annotations

import pytest
from tests.daemon.core.frontdesk import Desk, put, replace
from tests.daemon.core.keepdesk import (
    CLAIM,
    DURABLE,
    batch_of,
    done,
    durable,
    kept_of,
    told,
)

from byway import messages
from bywayd.core import effects, events, kept
from bywayd.core.effects import Change
from bywayd.core.instants import Duration
from bywayd.core.invariant import Defect
from bywayd.core.keepline import KeepLine
from bywayd.core.kept import Keepsake, Stock
from bywayd.core.sources import Source


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


# -- what cannot be kept ------------------------------------------------------------


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


# -- the parts ------------------------------------------------------------


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
