"""Clerks through the front: successors, nonsense, full disks, the end."""

from __future__ import annotations

import pytest
from tests.daemon.core.frontdesk import put
from tests.daemon.core.keepdesk import (
    batch_of,
    durable,
    kept_of,
    told,
)

from byway import messages
from bywayd.core import effects, events, kept
from bywayd.core.kept import Stock


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


# -- the end, and looking at it ------------------------------------------------------------


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
