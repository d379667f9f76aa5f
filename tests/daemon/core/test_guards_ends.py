"""Guards: progress, release, silence, replans that bring one, the end of the daemon."""

from __future__ import annotations

import pytest
from tests.daemon.core.coursetables import outcome, straight
from tests.daemon.core.frontdesk import nothing, put, route
from tests.daemon.core.guarddesk import GuardDesk, block, ready

from byway import messages
from bywayd.core import effects, events
from bywayd.core.invariant import Defect


@pytest.fixture
def desk() -> GuardDesk:
    return ready()


@pytest.fixture
def guarded(desk: GuardDesk) -> GuardDesk:
    desk.guard()
    desk.saw(None)
    return desk


# -- progress, release, silence -------------------------------------------------------------------


def test_progress_moves_the_guard_and_tells_how_it_is(guarded: GuardDesk) -> None:
    reply = guarded.progress(2.5, speed_mps=1.0)
    assert reply == messages.GuardIs(
        unit="u", guard="guard1", state="clear", revision=1, progress_m=2.5
    )
    moved = guarded.one(effects.MoveGuard)
    assert (moved.surveyor, moved.guard, moved.progress_m) == (1, 1, 2.5)
    guarded.progress(2.5)
    assert not guarded.all_of(effects.MoveGuard)


def test_progress_of_a_blocked_vehicle_tells_what_is_in_the_way(guarded: GuardDesk) -> None:
    guarded.saw(block(6.0))
    reply = guarded.progress(3.0)
    assert reply.state == "blocked"
    assert reply.blocked.distance_m == pytest.approx(3.0)


def test_progress_beyond_the_end_is_about_another_route(guarded: GuardDesk) -> None:
    assert guarded.progress(10.4).progress_m == pytest.approx(10.0)
    assert guarded.progress(10.6).code == "bad_value"


@pytest.mark.parametrize("fields", [{"unit": "nobody"}, {"guard": "guard7"}])
def test_progress_without_a_guard_is_told_so(guarded: GuardDesk, fields: dict[str, str]) -> None:
    assert guarded.progress(1.0, **fields).code == "unknown_request"  # type: ignore[arg-type]


def test_a_release_ends_the_guard_and_is_repeated_in_the_same_words(guarded: GuardDesk) -> None:
    guarded.saw(block())
    release = messages.Release(unit="u")
    guarded.say(release, "r")
    reply = guarded.answer("r")
    assert reply.state == "released"  # type: ignore[union-attr]
    assert reply.blocked is None  # type: ignore[union-attr]
    assert guarded.one(effects.Unwatch).guard == 1
    guarded.say(release, "r")
    assert guarded.answer("r") == reply
    guarded.say(release, "s")
    assert guarded.error("s") == "unknown_request"
    guarded.tick(60_000)
    assert not guarded.published()


def test_a_release_of_another_guard_than_stands_ends_nothing(guarded: GuardDesk) -> None:
    guarded.say(messages.Release(unit="u", guard="guard9"), "r")
    assert guarded.error("r") == "unknown_request"
    assert len(guarded.front.guards) == 1


def test_an_asker_whose_guard_is_released_before_it_was_seen_is_told_so(desk: GuardDesk) -> None:
    desk.guard()
    desk.say(messages.Release(unit="u"), "r")
    assert desk.error("g") == "superseded"
    assert desk.answer("r").state == "released"  # type: ignore[union-attr]


def test_a_silent_unit_loses_its_guard_once(guarded: GuardDesk) -> None:
    guarded.tick(4_999)
    assert not guarded.published()
    guarded.tick(2)
    lost = guarded.event(messages.GuardLost)
    assert (lost.unit, lost.guard) == ("u", "guard1")
    assert lost.silent_s == pytest.approx(5.001)
    assert guarded.one(effects.Unwatch).guard == 1
    guarded.tick(60_000)
    assert not guarded.published()
    assert guarded.progress(1.0).code == "unknown_request"


def test_progress_keeps_the_guard(guarded: GuardDesk) -> None:
    for _ in range(4):
        guarded.progress(1.0, after_ms=4_000)
    assert len(guarded.front.guards) == 1
    guarded.tick(5_001)
    assert guarded.event(messages.GuardLost).silent_s == pytest.approx(5.001)


def test_a_unit_may_ask_for_a_silence_of_its_own(desk: GuardDesk) -> None:
    desk.guard(silence_s=1.0)
    desk.saw(None)
    desk.tick(1_001)
    assert desk.event(messages.GuardLost).silent_s == pytest.approx(1.001)


def test_a_guard_that_is_lost_while_its_asker_waits_is_told_to_both(desk: GuardDesk) -> None:
    desk.guard(silence_s=0.05)
    desk.tick(51)
    assert desk.event(messages.GuardLost)
    assert desk.error("g") == "superseded"


# -- replans that want a guard --------------------------------------------------------------------


def test_a_replan_with_a_guard_has_it_stand_before_its_answer(desk: GuardDesk) -> None:
    desk.ask("a", unit="u", guard=True, silence_s=2.0, replan_on_alert=True)
    desk.done(outcome(straight(10.0)))
    answer = desk.answer("a")
    assert isinstance(answer, messages.AnswerMessage)
    assert answer.guard == "guard1"
    kinds = [type(effect) for effect in desk.out]
    assert kinds.index(effects.WatchRoute) < kinds.index(effects.Reply)
    desk.saw(None)
    desk.tick(2_001)
    assert desk.event(messages.GuardLost).guard == "guard1"


def test_a_repeat_of_it_gets_the_same_guard(desk: GuardDesk) -> None:
    desk.ask("a", unit="u", guard=True)
    desk.done(outcome(straight(10.0)))
    desk.ask("a", unit="u", guard=True)
    assert desk.answer("a").guard == "guard1"  # type: ignore[union-attr]
    assert len(desk.front.guards) == 1


def test_a_replan_without_a_route_leaves_the_old_guard_standing(guarded: GuardDesk) -> None:
    guarded.ask("a", unit="u", guard=True)
    guarded.done(nothing("no_route"))
    assert guarded.answer("a").guard is None  # type: ignore[union-attr]
    assert guarded.front.guards.of_unit("u") is not None


def test_a_replan_that_wants_no_guard_leaves_the_old_one_standing(guarded: GuardDesk) -> None:
    guarded.ask("a", unit="u")
    guarded.done(outcome(straight(10.0)))
    assert guarded.answer("a").guard is None  # type: ignore[union-attr]
    assert [guard.number for guard in guarded.front.guards] == [1]


def test_a_route_that_cannot_be_read_is_answered_without_a_guard(desk: GuardDesk) -> None:
    desk.ask("a", unit="u", guard=True)
    desk.done(route(3.0))
    assert desk.answer("a").guard is None  # type: ignore[union-attr]
    assert desk.count("guards_failed_total") == 1


def test_a_guard_that_finds_no_room_any_more_is_left_out() -> None:
    desk = ready(guards_max=1)
    desk.ask("a", unit="u", guard=True)
    desk.guard(unit="w")
    desk.done(outcome(straight(10.0)))
    assert desk.answer("a").guard is None  # type: ignore[union-attr]
    assert desk.count("guards_failed_total") == 1


# -- the end --------------------------------------------------------------------------------------


def test_who_waits_is_answered_when_the_daemon_ends_and_nobody_gets_a_new_guard(
    desk: GuardDesk,
) -> None:
    desk.ask("a")  # so that it does not end at once
    desk.guard()
    desk.hand_in(events.StopAsked("SIGTERM"))
    assert desk.answer("g").state == "unchecked"  # type: ignore[union-attr]
    desk.guard(id="h")
    assert desk.error("h") == "stopping"


def test_the_health_record_counts_guards(guarded: GuardDesk) -> None:
    guarded.saw(block())
    guarded.say(messages.Health(), "h")
    health = guarded.answer("h")
    assert isinstance(health, messages.HealthIs)
    assert (health.counts["guards"], health.counts["guards_blocked"]) == (1, 1)
    assert health.counts["alerts_total"] == 1
    assert health.memory_bytes["guards"] > 0


def test_how_long_an_alert_takes_after_the_acknowledgement_is_observed(
    guarded: GuardDesk,
) -> None:
    message, packed = put("live", "a")
    guarded.change(message, packed)
    guarded.publish(guarded.one(effects.ApplyChanges).batch)
    guarded.saw(block(), after_ms=3.0)
    assert guarded.front.health.statistics().observed["alert_s"] == 1
    # A vehicle that moves, or a guard that begins, is not what made it late.
    guarded.guard(unit="w", id="h")
    guarded.saw(block(), 2, revision=1)
    assert guarded.front.health.statistics().observed["alert_s"] == 1


def test_an_alert_is_late_by_the_first_snapshot_of_its_revision(guarded: GuardDesk) -> None:
    """Later ones in which nothing differs did not bring it about."""
    message, packed = put("live", "a")
    guarded.change(message, packed)
    guarded.publish(guarded.one(effects.ApplyChanges).batch)
    guarded.change(message, packed)
    out = guarded.one(effects.ApplyChanges).batch
    guarded.hand_in(events.SnapshotReady(1, out, guarded.revision, {}), after_ms=40.0)
    guarded.saw(None)  # nothing is told
    assert guarded.front.health.statistics().observed["alert_s"] == 0
    guarded.saw(block(), after_ms=3.0)
    assert guarded.front.health.histograms()["alert_s"].sum_s == pytest.approx(0.043)


def test_a_guard_that_nobody_would_miss_is_a_defect(guarded: GuardDesk) -> None:
    guarded.front.guards._alarms.clear(1)
    with pytest.raises(Defect, match="every silence has an end"):
        guarded.front.check()
