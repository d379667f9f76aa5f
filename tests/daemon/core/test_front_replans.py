"""Replans through the front: taken in or refused, planned, answered once, repeated."""

from __future__ import annotations

import pytest
from tests.daemon.core.frontdesk import START, Desk, handle, ms, nothing, put, route, settings

from byway import frames, messages
from byway.errors import BadMessage
from byway.frames import Header
from bywayd.core import effects, events
from bywayd.core.instants import Instant
from bywayd.core.intake import spread
from bywayd.core.invariant import Defect


@pytest.fixture
def desk() -> Desk:
    return Desk().open()


# -- taken in --------------------------------------------------------------------------------------


def test_a_replan_is_taken_in_and_given_to_an_idle_worker_at_once(desk: Desk) -> None:
    desk.ask(
        "a",
        seed=7,
        method="lattice",
        leave_out=["outlines"],
        clearance_m=0.2,
        start_speed_mps=1.0,
        start_curvature_per_m=0.1,
        gap_wanted=0.05,
    )
    reply = desk.one(effects.Reply)
    assert reply.message == messages.Accepted(unit="unit-a", budget_s=0.1, revision=1)
    assert (reply.header.id, reply.header.traceparent) == ("a", "trace-a")
    start = desk.one(effects.StartJob)
    assert start.worker == 1
    assert start.job == effects.Job(
        job=1,
        vehicle={"model": "car", "turn_radius_m_min": 2.6},
        start=(0.0, 0.0, 0.0),
        goal=(9.0, 0.0, 0.0),
        deadline=START + ms(98),
        seed=7,
        method="lattice",
        left_out=("outlines",),
        clearance_m=0.2,
        start_speed_mps=1.0,
        start_curvature_per_m=0.1,
        gap_wanted=0.05,
        revision=1,
        handle=handle(1),
    )


def test_what_the_worker_finds_is_the_answer(desk: Desk) -> None:
    desk.ask("a")
    desk.better(5.0, after_ms=10)
    better = desk.one(effects.Publish)
    assert (better.topic, better.header.number, better.header.id) == ("better.unit-a", 1, "a")
    assert better.message == messages.BetterMessage(
        unit="unit-a", revision=1, elapsed_s=0.01, outcome=route(5.0).body
    )
    assert better.packed == b"columns of the route"
    desk.done(route(4.0), after_ms=20)
    reply = desk.one(effects.Reply)
    assert reply.packed == b"columns of the route"
    assert reply.message == messages.AnswerMessage(
        unit="unit-a",
        revision=1,
        first_s=0.01,
        waited_s=0.0,
        total_s=0.03,
        attempts=1,
        outcome=route(4.0).body,
    )


@pytest.mark.parametrize("kind", ["start_blocked", "goal_blocked", "start_too_fast", "no_route"])
def test_that_there_is_no_route_is_an_answer(desk: Desk, kind: events.OutcomeKind) -> None:
    desk.ask("a")
    desk.done(nothing(kind))
    message = desk.answer("a")
    assert isinstance(message, messages.AnswerMessage)
    assert message.outcome == kind.encode()
    assert message.first_s is None


def test_a_route_that_is_not_better_is_not_published(desk: Desk) -> None:
    desk.ask("a")
    desk.better(5.0)
    desk.better(6.0)
    assert desk.all_of(effects.Publish) == []
    desk.done(route(6.0))
    assert desk.outcome() == (route(5.0).body, 1)


def test_seeds_are_drawn_for_those_who_bring_none(desk: Desk) -> None:
    desk.ask("a")
    first = desk.one(effects.StartJob).job.seed
    desk.done(nothing())
    desk.ask("b")
    second = desk.one(effects.StartJob).job.seed
    assert first == spread(1, 1)
    assert second == spread(1, 2)
    assert 0 <= first < 2**63


def test_seeds_are_those_of_splitmix() -> None:
    """First outputs from seed 0 in the published C program (Vigna 2015), their top 63 bits."""
    published = [0xE220A8397B1DCDAF, 0x6E789E6AA1B965F4, 0x06C45D188009454F]
    assert [spread(0, serial) for serial in (1, 2, 3)] == [value >> 1 for value in published]


# -- refused ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("fields", "code"),
    [
        ({"vehicle": "unicorn"}, "unknown_vehicle"),
        ({"leave_out": ["nowhere"]}, "unknown_layer"),
        ({"leave_out": ["fixed"]}, "bad_value"),
        ({"budget_s": 11.0}, "bad_value"),
    ],
)
def test_a_senseless_replan_is_refused_with_its_reason(
    fields: dict[str, object], code: str
) -> None:
    desk = Desk(settings(budget_max_s=10.0)).open()
    desk.ask("a", **fields)
    assert desk.error() == code
    assert desk.all_of(effects.StartJob) == []
    assert desk.count(f"refused_{code}_total") == 1


def test_a_layer_that_is_not_visible_yet_cannot_be_left_out(desk: Desk) -> None:
    desk.change(messages.Claim(layer="new", outlines_only=True))
    desk.ask("a", leave_out=["new"])
    assert desk.error() == "unknown_layer"
    desk.publish(1)
    desk.ask("b", leave_out=["new"])
    assert desk.all_of(effects.StartJob)


def test_a_replan_for_an_earlier_life_of_the_daemon_is_refused(desk: Desk) -> None:
    desk.ask("a", epoch="before")
    message = desk.answer("a")
    assert isinstance(message, messages.ErrorMessage)
    assert (message.code, message.facts) == ("new_epoch", {"epoch": "now"})
    desk.ask("b", epoch="now")
    assert desk.all_of(effects.StartJob)


def test_nobody_is_served_before_there_is_a_site_and_a_worker() -> None:
    desk = Desk()
    desk.hand_in(events.Started(0.0))
    for id, event in [
        ("a", events.SurveyorReady(1, 1, handle(1))),
        ("b", events.WorkerReady(1)),
    ]:
        desk.ask(id)
        message = desk.answer(id)
        assert isinstance(message, messages.ErrorMessage)
        assert message.code == "warming"
        assert message.retry_after_s
        desk.hand_in(event)
    desk.ask("c")
    assert desk.all_of(effects.StartJob)


def test_garbage_is_answered_with_what_is_wrong(desk: Desk) -> None:
    fault = BadMessage("a replan has no field goul", {"field": "goul"})
    fault.header = Header("replan", "a")
    desk.hand_in(events.Unreadable(desk.peer, fault))
    assert desk.error() == "bad_message"


# -- repeats ---------------------------------------------------------------------------------------


def test_a_repeat_gets_the_same_answer_again(desk: Desk) -> None:
    desk.ask("a")
    desk.done(route(4.0))
    answer = desk.answer("a")
    desk.peer = events.Peer("requests", b"reconnected")
    desk.ask("a", after_ms=500)
    reply = desk.one(effects.Reply)
    assert (reply.message, reply.packed) == (answer, b"columns of the route")
    assert reply.peer.identity == b"reconnected"
    assert desk.all_of(effects.StartJob) == []


def test_a_repeat_of_what_is_open_moves_the_answer_to_where_the_asker_is_now(desk: Desk) -> None:
    desk.ask("a")
    desk.peer = events.Peer("requests", b"reconnected")
    desk.ask("a")
    assert desk.out == []
    desk.done(route(4.0))
    assert desk.one(effects.Reply).peer.identity == b"reconnected"


def test_a_repeat_of_what_was_refused_is_refused_again_even_if_it_could_be_served_now() -> None:
    desk = Desk()
    desk.hand_in(events.Started(0.0))
    desk.ask("a")
    refusal = desk.answer("a")
    desk.hand_in(events.SurveyorReady(1, 1, handle(1)))
    desk.hand_in(events.WorkerReady(1))
    desk.ask("a")
    assert desk.answer("a") == refusal
    assert desk.all_of(effects.StartJob) == []


def test_the_same_id_with_another_body_is_a_conflict(desk: Desk) -> None:
    desk.ask("a")
    desk.ask("a", budget_s=0.2)
    assert desk.error() == "conflict"
    desk.done(route(4.0))
    assert desk.outcome() == (route(4.0).body, 1)
    desk.ask("a", budget_s=0.2)
    assert desk.error() == "conflict"


# -- cancel, finish, supersede ---------------------------------------------------------------------


def test_a_cancelled_replan_ends_at_once_and_its_worker_is_told(desk: Desk) -> None:
    desk.ask("a")
    desk.better(5.0)
    desk.say(messages.Cancel(replan="a"), "c")
    assert desk.error() == "cancelled"
    assert desk.answer("c") == messages.Noted(replans=["a"])
    assert desk.one(effects.SteerJob) == effects.SteerJob(1, 1, "cancel")
    desk.better(4.0)
    desk.done(route(4.0))
    assert desk.replies() == []


def test_a_cancelled_replan_that_waits_is_never_begun(desk: Desk) -> None:
    desk.ask("a")
    desk.ask("b")
    desk.say(messages.Cancel(unit="unit-b"), "c")
    assert desk.error("b") == "cancelled"
    desk.done(nothing())
    assert desk.all_of(effects.StartJob) == []


def test_finish_asks_the_worker_for_its_best(desk: Desk) -> None:
    desk.ask("a")
    desk.say(messages.Finish(replan="a"), "f")
    assert desk.answer("f") == messages.Noted(replans=["a"])
    assert desk.one(effects.SteerJob).how == "finish"
    desk.say(messages.Finish(replan="a"), "g")
    assert desk.all_of(effects.SteerJob) == []
    desk.done(route(4.0))
    assert desk.outcome() == (route(4.0).body, 1)


def test_finish_of_what_waits_answers_that_nothing_was_found(desk: Desk) -> None:
    desk.ask("a")
    desk.ask("b", leave_out=["outlines"], seed=3)
    desk.say(messages.Finish(replan="b"), "f")
    body, revision = desk.outcome("b")
    found = frames.decode_outcome(body, b"")
    assert (found.kind, found.gap, found.seed) == ("not_found", 1.0, 3)
    assert found.left_out == ["outlines"]
    assert revision == 1


def test_finish_and_cancel_by_unit_reach_all_of_it(desk: Desk) -> None:
    desk.ask("a", unit="u")
    desk.ask("b", unit="u")
    desk.say(messages.Cancel(unit="u"), "c")
    assert desk.answer("c") == messages.Noted(replans=["a", "b"])


@pytest.mark.parametrize(
    "message",
    [
        messages.Cancel(replan="z"),
        messages.Cancel(unit="z"),
        messages.Finish(replan="z"),
        messages.Finish(unit="z"),
    ],
)
def test_what_is_not_open_cannot_be_ended(desk: Desk, message: messages.Message) -> None:
    desk.say(message, "c")
    assert desk.error("c") == "unknown_request"


def test_a_newer_replan_of_a_unit_supersedes_the_one_that_waits(desk: Desk) -> None:
    desk.ask("a", unit="u")
    desk.ask("b", unit="u")
    desk.ask("c", unit="u")
    assert desk.error("b") == "superseded"
    assert desk.answer("c") == messages.Accepted(unit="u", budget_s=0.1, revision=1)


# -- deadlines -------------------------------------------------------------------------------------


def test_a_late_worker_does_not_make_the_answer_late(desk: Desk) -> None:
    desk.ask("a")
    wake = desk.one(effects.Wake)
    desk.better(5.0)
    assert wake.at == START + ms(99)
    desk.tick(97.9)
    assert desk.replies() == []
    desk.tick(0.1)
    assert desk.outcome() == (route(5.0).body, 1)
    assert desk.one(effects.SteerJob).how == "cancel"
    desk.done(route(4.0))
    assert desk.replies() == []


def test_without_a_route_a_late_worker_means_not_found(desk: Desk) -> None:
    desk.ask("a")
    desk.tick(99)
    body, _ = desk.outcome()
    assert frames.decode_outcome(body, b"").kind == "not_found"


def test_who_never_got_a_worker_is_told_that_it_was_too_much(desk: Desk) -> None:
    desk.ask("a", budget_s=10.0)
    desk.ask("b")
    desk.tick(97)
    message = desk.answer("b")
    assert isinstance(message, messages.ErrorMessage)
    assert message.code == "overloaded"
    assert message.facts["waited_s"] == pytest.approx(0.097)


def test_an_answer_that_leaves_late_is_counted(desk: Desk) -> None:
    """The front itself may get its turn late; then the miss must show."""
    desk.ask("a")
    desk.tick(120)
    assert desk.count("answers_late_total") == 1
    assert [log.event for log in desk.all_of(effects.Log)] == ["replan.late"]
    assert desk.front.health.statistics().observed["late_s"] == 1


def test_time_that_goes_back_is_a_defect(desk: Desk) -> None:
    with pytest.raises(Defect, match="time does not go back"):
        desk.front.handle(events.Tick(), Instant(START.ns - 1))


# -- the second look -------------------------------------------------------------------------------


def change_site(desk: Desk, batch: int) -> None:
    desk.change(*put("fixed", f"o{batch}"))
    desk.publish(batch, after_ms=0)


def test_a_route_on_an_old_revision_is_checked_on_the_newest_before_it_leaves(desk: Desk) -> None:
    desk.ask("a")
    change_site(desk, 1)
    change_site(desk, 2)
    desk.done(route(4.0))
    assert desk.replies() == []
    recheck = desk.one(effects.Recheck)
    assert recheck.outcome == route(4.0)
    assert (recheck.worker, recheck.job.job, recheck.job.revision) == (1, 2, 3)
    assert recheck.job.deadline == START + ms(99)
    desk.hand_in(events.WorkerChecked(1, 2, True), 1)
    assert desk.outcome() == (route(4.0).body, 3)


def test_a_route_that_is_blocked_now_is_planned_again_while_there_is_time(desk: Desk) -> None:
    desk.ask("a")
    change_site(desk, 1)
    desk.done(route(4.0), after_ms=50)
    desk.hand_in(events.WorkerChecked(1, 2, False, "the kiln is in the way"), 1)
    assert desk.replies() == []
    job = desk.one(effects.StartJob).job
    assert (job.job, job.revision, job.deadline) == (3, 2, START + ms(98))
    desk.better(9.0, job=3)  # dearer, but it is free
    assert desk.all_of(effects.Publish)
    desk.done(route(9.0), job=3)
    message = desk.answer("a")
    assert isinstance(message, messages.AnswerMessage)
    assert (message.outcome, message.attempts) == (route(9.0).body, 2)


def test_a_route_that_is_blocked_at_the_end_is_not_given_out(desk: Desk) -> None:
    desk.ask("a")
    change_site(desk, 1)
    desk.done(route(4.0), after_ms=96)
    desk.hand_in(events.WorkerChecked(1, 2, False), 1)
    body, revision = desk.outcome()
    assert frames.decode_outcome(body, b"").kind == "not_found"
    assert revision == 2


def test_a_check_that_takes_too_long_leaves_the_route_to_its_own_revision(desk: Desk) -> None:
    desk.ask("a")
    change_site(desk, 1)
    desk.done(route(4.0), after_ms=97)
    desk.tick(2)
    assert desk.outcome() == (route(4.0).body, 1)
    assert desk.count("answers_behind_total") == 1
    assert desk.all_of(effects.SteerJob) == []
    desk.hand_in(events.WorkerChecked(1, 2, False), 1)
    assert desk.replies() == []


def test_there_is_no_check_when_its_time_is_over(desk: Desk) -> None:
    desk.ask("a")
    change_site(desk, 1)
    desk.now = START + ms(99)
    desk.done(route(4.0), after_ms=0)
    assert desk.outcome() == (route(4.0).body, 1)


def test_a_check_that_fails_or_loses_its_worker_leaves_the_route_to_its_own_revision() -> None:
    for event in (
        events.WorkerFailed(1, 2, "internal", "broken", {}),
        events.WorkerLost(1, "died"),
    ):
        desk = Desk().open()
        desk.ask("a")
        change_site(desk, 1)
        desk.done(route(4.0), after_ms=50)
        desk.hand_in(event, 1)
        assert desk.outcome() == (route(4.0).body, 1)


def test_who_wanted_it_finished_is_not_made_to_wait_for_another_try(desk: Desk) -> None:
    desk.ask("a")
    change_site(desk, 1)
    desk.say(messages.Finish(replan="a"), "f")
    desk.done(route(4.0))
    desk.say(messages.Finish(replan="a"), "g")
    desk.hand_in(events.WorkerChecked(1, 2, False), 1)
    assert frames.decode_outcome(desk.outcome()[0], b"").kind == "not_found"


def test_what_is_being_checked_can_be_cancelled(desk: Desk) -> None:
    desk.ask("a")
    change_site(desk, 1)
    desk.done(route(4.0))
    desk.say(messages.Cancel(replan="a"), "c")
    assert desk.error() == "cancelled"


def test_that_there_is_no_route_needs_no_second_look(desk: Desk) -> None:
    desk.ask("a")
    change_site(desk, 1)
    desk.done(nothing("no_route"))
    assert desk.outcome() == (b"no_route", 1)
