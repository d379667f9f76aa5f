"""Guards: who stands for whom, and what listeners are told."""

from __future__ import annotations

import numpy as np
import pytest
from tests.daemon.core.coursetables import packed_route, straight
from tests.daemon.core.frontdesk import handle, put
from tests.daemon.core.guarddesk import GuardDesk, block, ready

from byway import messages
from bywayd.core import effects, events
from bywayd.core.events import Block


@pytest.fixture
def desk() -> GuardDesk:
    return ready()


# -- standing -------------------------------------------------------------------------------------


def test_a_guard_is_watched_and_its_asker_hears_what_was_seen(desk: GuardDesk) -> None:
    desk.guard(progress_m=1.0, leave_out=["outlines"], clearance_m=0.3)
    watch = desk.one(effects.WatchRoute)
    assert (watch.guard, watch.unit, watch.name, watch.surveyor) == (1, "u", "guard1", 1)
    assert (watch.left_out, watch.clearance_m, watch.progress_m) == (("outlines",), 0.3, 1.0)
    assert watch.vehicle == desk.front.settings.vehicles["tug"].settings
    assert set(watch.columns) == set(straight(1.0))
    assert not desk.replies()
    desk.saw(None)
    assert desk.answer("g") == messages.GuardIs(
        unit="u", guard="guard1", state="clear", revision=1, progress_m=1.0
    )
    assert not desk.published()


def test_an_asker_whose_route_is_blocked_hears_it_in_the_reply_and_listeners_too(
    desk: GuardDesk,
) -> None:
    desk.guard()
    desk.saw(block())
    reply = desk.answer("g")
    assert isinstance(reply, messages.GuardIs)
    assert reply.state == "blocked"
    assert reply.blocked is not None
    assert reply.blocked.id == "crate"
    assert desk.event(messages.Alert).blocked == reply.blocked


def test_who_has_waited_for_long_enough_hears_that_nobody_has_looked(desk: GuardDesk) -> None:
    desk.guard()
    desk.tick(99)
    assert not desk.replies()
    desk.tick(2)
    reply = desk.answer("g")
    assert isinstance(reply, messages.GuardIs)
    assert reply.state == "unchecked"
    desk.saw(block())
    assert not desk.replies()
    assert desk.event(messages.Alert).guard == "guard1"


def test_a_repeat_is_answered_again_and_lets_no_second_guard_stand(desk: GuardDesk) -> None:
    desk.guard()
    desk.guard()
    assert not desk.all_of(effects.WatchRoute)
    desk.saw(None)
    first = desk.answer("g")
    desk.guard()
    assert desk.answer("g") == first
    assert len(desk.front.guards) == 1
    assert desk.count("repeats_total") == 2


def test_the_reply_goes_to_where_a_repeat_came_from(desk: GuardDesk) -> None:
    desk.guard()
    desk.peer = events.Peer("requests", b"moved")
    desk.guard()
    desk.saw(None)
    assert desk.one(effects.Reply).peer.identity == b"moved"


def test_the_same_id_with_another_body_is_a_conflict(desk: GuardDesk) -> None:
    desk.guard()
    desk.guard(unit="other")
    assert desk.error("g") == "conflict"
    desk.saw(None)
    desk.guard(unit="other")
    assert desk.error("g") == "conflict"


def test_a_new_guard_takes_the_place_of_the_units_old_one(desk: GuardDesk) -> None:
    desk.guard(id="g")
    desk.guard(id="h")
    assert desk.one(effects.Unwatch).guard == 1
    assert desk.one(effects.WatchRoute).guard == 2
    assert desk.error("g") == "superseded"
    desk.saw(block(), guard=1)
    assert not desk.out or not desk.published()
    desk.saw(None, guard=2)
    assert isinstance(desk.answer("h"), messages.GuardIs)


@pytest.mark.parametrize(
    ("fields", "code"),
    [
        ({"vehicle": "unicorn"}, "unknown_vehicle"),
        ({"leave_out": ["nowhere"]}, "unknown_layer"),
        ({"leave_out": ["fixed"]}, "bad_value"),
        ({"progress_m": 11.0}, "bad_value"),
        ({"rows": {"t_s": np.zeros(2)}}, "bad_message"),
    ],
)
def test_a_guard_that_makes_no_sense_is_refused(
    desk: GuardDesk, fields: dict[str, object], code: str
) -> None:
    desk.guard(**fields)  # type: ignore[arg-type]
    assert desk.error("g") == code
    assert len(desk.front.guards) == 0
    desk.guard(**fields)  # type: ignore[arg-type]
    assert desk.error("g") == code


def test_a_guard_for_an_earlier_life_of_the_daemon_is_refused(desk: GuardDesk) -> None:
    columns, packed = packed_route(straight(3.0))
    told = messages.Guard(vehicle="tug", unit="u", columns=columns)
    desk.say(told, "g", packed, epoch="before")
    assert desk.error("g") == "new_epoch"


def test_guards_are_bounded_and_a_unit_can_always_exchange_its_own() -> None:
    desk = ready(guards_max=1)
    desk.guard(unit="u", id="g")
    desk.guard(unit="w", id="h")
    assert desk.error("h") == "overloaded"
    desk.ask("a", unit="w", guard=True)
    assert desk.error("a") == "overloaded"
    desk.guard(unit="u", id="i")
    assert desk.one(effects.WatchRoute).guard == 2


def test_so_are_the_bytes_of_their_routes() -> None:
    desk = ready(guards_bytes_max=8_000)
    desk.guard(unit="u", id="g")
    desk.guard(unit="w", id="h")
    assert desk.error("h") == "overloaded"


# -- what the surveyor sees -----------------------------------------------------------------------


@pytest.fixture
def guarded(desk: GuardDesk) -> GuardDesk:
    desk.guard()
    desk.saw(None)
    return desk


def test_an_alert_says_what_is_in_the_way_and_how_far_ahead(guarded: GuardDesk) -> None:
    guarded.progress(2.0)
    guarded.saw(block(6.0), after_ms=0.0)
    alert = guarded.event(messages.Alert)
    assert (alert.unit, alert.guard, alert.revision) == ("u", "guard1", 1)
    seen = alert.blocked
    assert (seen.layer, seen.id, seen.kind, seen.depth_m) == ("stacks", "crate", "polygon", 0.2)
    assert seen.distance_m == pytest.approx(4.0)
    assert seen.at_m == 6.0
    assert seen.time_s == pytest.approx(4.0 - 2.0)  # at 2 m/s from the second metre


def test_the_distance_counts_from_where_the_vehicle_should_be_by_now(guarded: GuardDesk) -> None:
    guarded.progress(2.0)
    guarded.saw(block(6.0), after_ms=500.0)
    assert guarded.event(messages.Alert).blocked.distance_m == pytest.approx(3.0)


@pytest.mark.parametrize(
    ("speed_mps", "distance_m"),
    [(0.0, 4.0), (1.0, 3.5), (-1.0, 3.5), (2.0, 3.0), (9.0, 2.5)],
)
def test_a_vehicle_that_tells_its_speed_is_where_that_takes_it(
    guarded: GuardDesk, speed_mps: float, distance_m: float
) -> None:
    guarded.progress(2.0, speed_mps=speed_mps)
    guarded.saw(block(6.0), after_ms=500.0)
    assert guarded.event(messages.Alert).blocked.distance_m == pytest.approx(distance_m)


def test_a_vehicle_at_the_start_of_its_route_is_taken_to_leave(guarded: GuardDesk) -> None:
    guarded.progress(0.0, speed_mps=0.0)
    guarded.saw(block(6.0), after_ms=1000.0)
    # Accelerating with 1 m/s2: half a metre.
    assert guarded.event(messages.Alert).blocked.distance_m == pytest.approx(5.5, abs=1e-3)


def test_what_lies_behind_already_is_no_distance_away(guarded: GuardDesk) -> None:
    guarded.saw(block(1.0), after_ms=4000.0)
    assert guarded.event(messages.Alert).blocked.distance_m == 0.0


def test_listeners_hear_of_a_blockage_once(guarded: GuardDesk) -> None:
    guarded.saw(block())
    guarded.saw(block())
    assert not guarded.published()
    guarded.saw(block(6.4, depth_m=0.3))
    assert not guarded.published()


@pytest.mark.parametrize(
    "other",
    [block(5.4), block(6.6), block(id="pallet"), block(layer="lidar"), block(kind="track")],
)
def test_and_again_when_it_is_another(guarded: GuardDesk, other: Block) -> None:
    guarded.saw(block())
    guarded.saw(other)
    assert guarded.event(messages.Alert).blocked.at_m == other.at_m
    assert guarded.count("alerts_total") == 2


def test_small_steps_add_up(guarded: GuardDesk) -> None:
    guarded.saw(block(6.0))
    guarded.saw(block(5.7))
    assert not guarded.published()
    guarded.saw(block(5.4))
    assert guarded.event(messages.Alert).blocked.at_m == 5.4


def test_a_route_that_is_free_again_is_cleared_once(guarded: GuardDesk) -> None:
    guarded.saw(block())
    guarded.saw(None)
    cleared = guarded.event(messages.Cleared)
    assert (cleared.unit, cleared.guard, cleared.revision) == ("u", "guard1", 1)
    guarded.saw(None)
    assert not guarded.published()


def test_events_of_a_unit_go_to_its_topic_and_are_numbered(guarded: GuardDesk) -> None:
    guarded.saw(block())
    guarded.saw(None)
    event = guarded.one(effects.Publish)
    assert (event.topic, event.header.number, event.header.kind) == ("guard.u", 2, "cleared")


def test_a_route_that_cannot_be_watched_is_given_up(desk: GuardDesk) -> None:
    desk.guard()
    desk.saw(fault="it leaves the site")
    assert desk.error("g") == "bad_geometry"
    assert desk.event(messages.GuardLost).text == "it leaves the site"
    assert len(desk.front.guards) == 0
    assert desk.count("guards_lost_total") == 1


@pytest.mark.parametrize(("guard", "revision"), [(2, 1), (0, 1), (1, 9)])
def test_a_surveyor_that_sees_what_cannot_be_is_killed(
    guarded: GuardDesk, guard: int, revision: int
) -> None:
    guarded.saw(block(), guard, revision=revision)
    assert guarded.one(effects.KillSurveyor).surveyor == 1
    assert not guarded.published()


def test_what_a_killed_surveyor_sees_does_not_count(guarded: GuardDesk) -> None:
    guarded.saw(block(), 9)
    guarded.saw(block())
    assert not guarded.published()


def test_a_successor_is_told_all_guards_and_nobody_hears_anything_twice(
    guarded: GuardDesk,
) -> None:
    guarded.guard(unit="w", id="h")
    guarded.saw(None, 2)
    guarded.saw(block())
    guarded.progress(3.0)
    guarded.hand_in(events.SurveyorLost(1, "died"))
    assert guarded.progress(3.5).state == "unchecked"
    assert not guarded.all_of(effects.MoveGuard)
    guarded.hand_in(events.SurveyorReady(2, 1, handle(1)))
    watched = guarded.all_of(effects.WatchRoute)
    assert [(w.surveyor, w.guard, w.progress_m) for w in watched] == [(2, 1, 3.5), (2, 2, 0.0)]
    guarded.saw(block(), surveyor=2)
    guarded.saw(None, 2, surveyor=2)
    assert not guarded.published()
    assert guarded.progress(3.6).state == "blocked"
    guarded.saw(None, surveyor=2)
    assert guarded.event(messages.Cleared).guard == "guard1"


def test_a_guard_that_stands_while_there_is_no_surveyor_is_watched_by_the_next(
    desk: GuardDesk,
) -> None:
    desk.hand_in(events.SurveyorLost(1, "died"))
    desk.guard()
    assert not desk.all_of(effects.WatchRoute)
    desk.tick(101)
    assert desk.answer("g").state == "unchecked"  # type: ignore[union-attr]
    desk.hand_in(events.SurveyorReady(2, 1, handle(1)))
    assert desk.one(effects.WatchRoute).guard == 1


def test_guards_are_watched_before_a_successor_gets_the_batch_again(guarded: GuardDesk) -> None:
    message, packed = put("live", "a")
    guarded.change(message, packed)
    guarded.hand_in(events.SurveyorLost(1, "died"))
    guarded.hand_in(events.SurveyorReady(2, 1, handle(1)))
    kinds = [type(effect) for effect in guarded.out]
    assert kinds.index(effects.WatchRoute) < kinds.index(effects.ApplyChanges)
