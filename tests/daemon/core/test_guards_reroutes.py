"""New routes for guarded vehicles: where they begin, who gets a worker first, how they end."""

from __future__ import annotations

import msgpack
import pytest
from tests.daemon.core.coursetables import outcome, straight, there_and_back
from tests.daemon.core.frontdesk import handle, nothing, put, route
from tests.daemon.core.guarddesk import GuardDesk, block, ready

from byway import messages
from bywayd.core import effects, events
from bywayd.core.front_settings import KnownVehicle
from bywayd.core.invariant import Defect
from bywayd.core.rerouting import deceleration_mps2

#: 100 ms of budget and as much for the message: a route begins where the vehicle is after 200 ms.
AHEAD_S = 0.2


@pytest.fixture
def desk() -> GuardDesk:
    """A unit that drives 20 m along x with 2 m/s, has reached the fifth, and brakes with 1 m/s2."""
    tug = KnownVehicle("car", {"model": "car", "deceleration_mps2_max": 1.0})
    desk = ready(vehicles={"tug": tug})
    desk.guard(rows=straight(20.0), replan_on_alert=True, budget_s=0.1)
    desk.saw(None)
    desk.progress(5.0)
    return desk


def job(desk: GuardDesk) -> effects.Job:
    return desk.one(effects.StartJob).job


# -- where it begins ------------------------------------------------------------------------------


def test_an_alert_has_a_new_route_searched_from_where_the_vehicle_will_be(desk: GuardDesk) -> None:
    desk.saw(block(12.0))
    desk.event(messages.Alert)
    wanted = job(desk)
    assert wanted.start == pytest.approx((5.0 + 2.0 * AHEAD_S, 0.0, 0.0))
    assert wanted.goal == pytest.approx((20.0, 0.0, 0.0))
    assert wanted.start_speed_mps == pytest.approx(2.0)
    assert wanted.revision == 1
    assert not desk.replies()


def test_and_counts_from_when_the_vehicle_was_heard(desk: GuardDesk) -> None:
    desk.saw(block(12.0), after_ms=300.0)
    assert job(desk).start[0] == pytest.approx(5.0 + 2.0 * (0.3 + AHEAD_S))


def test_it_keeps_what_the_guard_was_asked_with(desk: GuardDesk) -> None:
    desk.guard(
        id="h",
        rows=straight(20.0),
        replan_on_alert=True,
        clearance_m=0.4,
        leave_out=["outlines"],
        progress_m=5.0,
    )
    desk.saw(block(12.0), 2)
    assert (job(desk).clearance_m, job(desk).left_out) == (0.4, ("outlines",))


def test_a_vehicle_too_near_to_drive_on_gets_a_route_from_where_it_can_stand(
    desk: GuardDesk,
) -> None:
    # From 5.4 m it would need 2 m to stop, and after 7.2 m it is too late.
    desk.saw(block(7.2))
    wanted = job(desk)
    assert wanted.start == pytest.approx((7.0, 0.0, 0.0))
    assert wanted.start_speed_mps == 0.0


def test_a_vehicle_that_stands_gets_a_route_from_where_it_is(desk: GuardDesk) -> None:
    desk.progress(5.0, speed_mps=0.0)
    desk.saw(block(5.1), after_ms=1_000)
    assert job(desk).start == pytest.approx((5.0, 0.0, 0.0))
    assert job(desk).start_speed_mps == 0.0


def test_a_slow_vehicle_is_expected_where_its_pace_takes_it(desk: GuardDesk) -> None:
    desk.progress(5.0, speed_mps=1.0)
    desk.saw(block(12.0))
    assert job(desk).start[0] == pytest.approx(5.0 + 1.0 * AHEAD_S)
    assert job(desk).start_speed_mps == pytest.approx(2.0)  # as its route allows there


def test_a_vehicle_in_reverse_gets_a_route_that_begins_in_reverse(desk: GuardDesk) -> None:
    desk.guard(id="h", rows=there_and_back(10.0), replan_on_alert=True, progress_m=15.0)
    desk.saw(block(19.0), 2)
    assert job(desk).start_speed_mps < -1.5
    assert 4.0 < job(desk).start[0] < 5.0


def test_a_braking_vehicle_stands_no_later_than_where_it_turns_back(desk: GuardDesk) -> None:
    desk.guard(id="h", rows=there_and_back(10.0), replan_on_alert=True, progress_m=9.0)
    desk.saw(block(9.6), 2)
    assert job(desk).start == pytest.approx((10.0, 0.0, 0.0), abs=1e-6)


@pytest.mark.parametrize(
    ("told", "expected"),
    [({"deceleration_mps2_max": 0.7}, 0.7), ({}, 1.5), ({"deceleration_mps2_max": "x"}, 1.5)],
)
def test_how_a_vehicle_brakes_is_in_its_settings(told: dict[str, object], expected: float) -> None:
    assert deceleration_mps2(told) == expected


# -- who is first ---------------------------------------------------------------------------------


def test_a_guard_that_does_not_want_it_gets_no_route(desk: GuardDesk) -> None:
    desk.guard(id="h", rows=straight(20.0))
    desk.saw(block(12.0), 2)
    desk.event(messages.Alert)
    assert not desk.all_of(effects.StartJob)


def test_a_vehicle_in_motion_goes_before_all_who_wait(desk: GuardDesk) -> None:
    desk.ask("a", budget_s=1.0)
    desk.ask("b", budget_s=1.0)
    desk.saw(block(12.0))
    assert not desk.all_of(effects.StartJob)
    desk.better(3.0)
    assert desk.one(effects.SteerJob).how == "finish"
    desk.done(route(3.0))
    assert job(desk).start_speed_mps == pytest.approx(2.0)


def test_it_does_not_get_in_the_way_of_the_units_own_replans(desk: GuardDesk) -> None:
    desk.ask("a", unit="u", budget_s=1.0)
    desk.ask("b", unit="u", budget_s=1.0)
    desk.saw(block(12.0))
    assert not desk.replies()
    desk.say(messages.Cancel(unit="u"), "c")
    assert {id for id, _ in desk.replies()} == {"a", "b", "c"}
    assert len(desk.front.rerouting) == 1


def test_its_better_routes_are_not_published(desk: GuardDesk) -> None:
    desk.saw(block(12.0))
    desk.better(3.0)
    assert not desk.all_of(effects.Publish)


# -- the new route --------------------------------------------------------------------------------


def rerouted(desk: GuardDesk, at_m: float = 12.0) -> messages.Rerouted:
    """Block the route, and find one that begins where it is left and ends a metre farther."""
    desk.saw(block(at_m))
    begin_m, number = job(desk).start[0], job(desk).job
    rows = straight(21.0 - begin_m, (begin_m, 0.0), job(desk).start_speed_mps)
    desk.done(outcome(rows), number, after_ms=100.0)
    return desk.event(messages.Rerouted)


def test_the_new_route_is_guarded_before_it_is_published(desk: GuardDesk) -> None:
    told = rerouted(desk)
    assert (told.unit, told.guard, told.was, told.revision) == ("u", "guard2", "guard1", 1)
    assert told.from_m == pytest.approx(5.4)
    assert told.in_s == pytest.approx(0.1, abs=1e-6)
    assert msgpack.unpackb(told.outcome)["kind"] == "route"
    publish = desk.one(effects.Publish)
    assert publish.topic == "guard.u"
    assert len(publish.packed) > 0
    kinds = [type(effect) for effect in desk.out]
    assert kinds.index(effects.WatchRoute) < kinds.index(effects.Publish)
    assert desk.one(effects.Unwatch).guard == 1
    assert [guard.number for guard in desk.front.guards] == [2]


def test_what_is_left_of_the_old_route_is_watched_together_with_the_new_one(
    desk: GuardDesk,
) -> None:
    rerouted(desk)
    watch = desk.one(effects.WatchRoute)
    guard = desk.front.guards.of_unit("u")
    assert guard is not None
    assert guard.course.packed == watch.packed
    # From 5.2 m, where the vehicle is after 100 ms, over 5.4 m to 21 m.
    assert guard.course.length_m == pytest.approx(21.0 - 5.2, abs=1e-6)
    assert guard.course.place(0.0).x_m == pytest.approx(5.2)
    desk.saw(block(6.2, x_m=11.4), 2)
    # From where the new route begins, as the vehicle counts.
    assert desk.event(messages.Alert).blocked.at_m == pytest.approx(6.0)


def test_progress_on_the_old_route_counts_until_the_vehicle_knows(desk: GuardDesk) -> None:
    rerouted(desk)
    reply = desk.progress(5.3, guard="guard1")
    assert (reply.guard, reply.progress_m) == ("guard2", 0.0)
    assert desk.one(effects.MoveGuard).progress_m == pytest.approx(0.1)
    reply = desk.progress(1.0, guard="guard2")
    assert reply.progress_m == pytest.approx(1.0)
    assert desk.one(effects.MoveGuard).progress_m == pytest.approx(1.2)
    assert desk.progress(9.0, guard="guard1").code == "unknown_request"


def test_a_vehicle_that_brakes_is_watched_until_it_stands_and_from_there(desk: GuardDesk) -> None:
    told = rerouted(desk, at_m=7.2)
    assert told.from_m == pytest.approx(7.0)
    # From 5.2 m it needs longer to 7 m than without braking.
    assert told.in_s == pytest.approx(1.9, abs=0.05)
    guard = desk.front.guards.of_unit("u")
    assert guard is not None
    assert guard.course.place(1.8).speed_mps == pytest.approx(0.0, abs=1e-6)


def test_a_vehicle_that_stands_is_on_its_new_route_at_once(desk: GuardDesk) -> None:
    desk.progress(5.0, speed_mps=0.0)
    told = rerouted(desk, at_m=5.1)
    assert (told.from_m, told.in_s) == (pytest.approx(5.0), 0.0)
    guard = desk.front.guards.of_unit("u")
    assert guard is not None
    assert guard.lead.length_m == 0.0


def test_a_new_route_that_is_blocked_in_its_turn_is_left_for_another(desk: GuardDesk) -> None:
    rerouted(desk)
    desk.saw(block(8.0, x_m=13.2), 2)
    assert desk.event(messages.Alert).guard == "guard2"
    begin_m = job(desk).start[0]
    desk.done(outcome(straight(22.0 - begin_m, at=(begin_m, 0.0))), 2, after_ms=100.0)
    told = desk.event(messages.Rerouted)
    assert (told.guard, told.was) == ("guard3", "guard2")
    assert told.from_m == pytest.approx(begin_m - 5.4)


def test_a_new_route_does_not_lengthen_the_silence(desk: GuardDesk) -> None:
    desk.tick(4_800)
    rerouted(desk, at_m=19.9)
    desk.tick(101)
    assert desk.event(messages.GuardLost).guard == "guard2"


def test_a_route_found_on_a_changed_site_is_checked_before_it_is_published(
    desk: GuardDesk,
) -> None:
    desk.saw(block(12.0))
    message, packed = put("live", "a")
    desk.change(message, packed)
    desk.publish(desk.one(effects.ApplyChanges).batch)
    desk.done(outcome(straight(15.6, at=(5.4, 0.0))))
    check = desk.one(effects.Recheck)
    assert not desk.published()
    desk.hand_in(events.WorkerChecked(1, check.job.job, True), 1.0)
    assert desk.event(messages.Rerouted).revision == 2


# -- no new route ---------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "kind", ["start_blocked", "goal_blocked", "start_too_fast", "no_route", "not_found"]
)
def test_that_there_is_no_route_is_said(desk: GuardDesk, kind: events.OutcomeKind) -> None:
    desk.saw(block(12.0))
    desk.done(nothing(kind))
    failed = desk.event(messages.RerouteFailed)
    assert (failed.unit, failed.guard, failed.reason) == ("u", "guard1", kind)
    assert failed.text
    assert [guard.number for guard in desk.front.guards] == [1]
    assert desk.progress(6.0).state == "blocked"


def test_so_is_that_none_was_found_in_time(desk: GuardDesk) -> None:
    desk.saw(block(12.0))
    desk.tick(100)
    assert desk.event(messages.RerouteFailed).reason == "not_found"


def test_so_is_that_no_worker_was_free(desk: GuardDesk) -> None:
    desk.ask("a", budget_s=5.0)
    desk.saw(block(12.0))
    desk.tick(100)
    assert desk.event(messages.RerouteFailed).reason == "overloaded"


def test_so_is_that_the_planner_failed(desk: GuardDesk) -> None:
    desk.saw(block(12.0))
    desk.hand_in(events.WorkerFailed(1, 1, "internal", "it broke", {}))
    failed = desk.event(messages.RerouteFailed)
    assert (failed.reason, failed.text) == ("internal", "it broke")


def test_so_is_that_what_was_found_cannot_be_read(desk: GuardDesk) -> None:
    desk.saw(block(12.0))
    desk.done(route(3.0))
    assert desk.event(messages.RerouteFailed).reason == "internal"


def test_so_is_that_its_route_finds_no_room() -> None:
    desk = ready(guards_bytes_max=10_000)
    desk.guard(rows=straight(20.0), replan_on_alert=True)
    desk.saw(block(12.0))
    desk.done(outcome(straight(200.0, at=(job(desk).start[0], 0.0))))
    assert desk.event(messages.RerouteFailed).reason == "overloaded"


def test_it_is_tried_again_when_the_blockage_has_changed_meanwhile(desk: GuardDesk) -> None:
    desk.saw(block(12.0))
    desk.saw(block(11.0))
    assert not desk.all_of(effects.StartJob)
    desk.done(nothing("no_route"))
    desk.event(messages.RerouteFailed)
    assert job(desk).job == 2
    desk.done(nothing("no_route"), 2)
    assert not desk.all_of(effects.StartJob)


def test_a_vehicle_that_has_passed_the_place_gets_another_route(desk: GuardDesk) -> None:
    desk.saw(block(18.0))
    desk.progress(6.0, after_ms=10)
    desk.done(outcome(straight(15.6, at=(5.4, 0.0))))
    assert not desk.published()
    assert desk.count("reroutes_missed_total") == 1
    assert job(desk).start[0] > 6.0


def test_a_route_that_is_free_again_needs_no_other(desk: GuardDesk) -> None:
    desk.saw(block(12.0))
    desk.saw(None)
    desk.event(messages.Cleared)
    assert desk.one(effects.SteerJob).how == "cancel"
    desk.done(outcome(straight(15.6, at=(5.4, 0.0))))
    assert not desk.published()
    assert desk.count("reroutes_dropped_total") == 1


def test_one_that_was_to_be_searched_when_it_became_free_is_not(desk: GuardDesk) -> None:
    desk.saw(block(12.0))
    desk.saw(block(11.0))
    desk.saw(None)
    desk.done(nothing())
    assert not desk.all_of(effects.StartJob)


def test_a_unit_that_is_released_needs_no_other_route(desk: GuardDesk) -> None:
    desk.saw(block(12.0))
    desk.say(messages.Release(unit="u"), "r")
    assert desk.one(effects.SteerJob).how == "cancel"
    assert not desk.published()


def test_a_guard_of_a_new_replan_ends_the_search_for_the_old_one(desk: GuardDesk) -> None:
    desk.saw(block(12.0))
    desk.guard(id="h", rows=straight(20.0), replan_on_alert=True, progress_m=5.0)
    assert desk.one(effects.SteerJob).how == "cancel"
    desk.saw(block(12.0), 2)
    desk.done(nothing())
    assert job(desk).job == 2


def test_a_lost_worker_costs_a_try_and_not_the_route(desk: GuardDesk) -> None:
    desk.saw(block(12.0))
    desk.hand_in(events.WorkerLost(1, "died"), 5.0)
    spawned = desk.one(effects.SpawnWorker).worker
    desk.hand_in(events.WorkerReady(spawned), 20.0)
    assert job(desk).start[0] == pytest.approx(5.4)


def test_while_the_daemon_ends_nothing_is_begun(desk: GuardDesk) -> None:
    desk.ask("a")
    desk.hand_in(events.StopAsked("SIGTERM"))
    desk.saw(block(12.0))
    alert, failed = desk.published()
    assert isinstance(alert, messages.Alert)
    assert isinstance(failed, messages.RerouteFailed)
    assert failed.reason == "stopping"


def test_what_is_under_way_when_it_ends_is_told_to_have_failed(desk: GuardDesk) -> None:
    desk.ask("a", budget_s=5.0)
    desk.saw(block(12.0))
    desk.hand_in(events.StopAsked("SIGTERM"))
    assert desk.event(messages.RerouteFailed).reason == "stopping"


def test_a_surveyor_may_die_while_a_route_is_searched(desk: GuardDesk) -> None:
    desk.saw(block(12.0))
    desk.hand_in(events.SurveyorLost(1, "died"))
    desk.done(outcome(straight(15.6, at=(5.4, 0.0))))
    desk.event(messages.Rerouted)
    desk.hand_in(events.SurveyorReady(2, 1, handle(1)))
    assert desk.one(effects.WatchRoute).guard == 2


def test_a_search_that_nobody_would_miss_is_a_defect(desk: GuardDesk) -> None:
    desk.saw(block(12.0))
    desk.front.answering.open.clear()
    with pytest.raises(Defect):
        desk.front.rerouting.check()
