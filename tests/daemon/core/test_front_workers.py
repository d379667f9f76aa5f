"""Workers through the front: lost, hung, raving, overloaded; and how the front itself ends."""

from __future__ import annotations

import pytest
from tests.daemon.core.frontdesk import START, Desk, handle, ms, nothing, put, route, settings

from byway import frames, messages
from bywayd.core import effects, events
from bywayd.core.invariant import Defect


@pytest.fixture
def desk() -> Desk:
    return Desk().open()


@pytest.fixture
def pair() -> Desk:
    """A front with two workers."""
    return Desk(settings(workers=2)).open()


# -- lost ------------------------------------------------------------------------------------------


def test_a_job_whose_worker_is_lost_goes_to_another(pair: Desk) -> None:
    pair.ask("a")
    pair.hand_in(events.WorkerLost(2, "killed"), 10)
    job = pair.one(effects.StartJob)
    assert (job.worker, job.job.job, job.job.deadline) == (1, 2, START + ms(98))
    assert pair.one(effects.SpawnWorker).worker == 3
    pair.done(route(4.0), job=2)
    message = pair.answer("a")
    assert isinstance(message, messages.AnswerMessage)
    assert message.attempts == 2


def test_it_waits_for_the_replacement_if_nobody_else_is_free(desk: Desk) -> None:
    desk.ask("a")
    desk.ask("b")
    desk.hand_in(events.WorkerLost(1, "killed"), 10)
    assert desk.all_of(effects.StartJob) == []
    desk.hand_in(events.WorkerReady(2), 20)
    assert desk.one(effects.StartJob).job.job == 2
    desk.better(5.0, job=2, worker=2)
    assert desk.one(effects.Publish).header.id == "a"


def test_without_time_for_another_try_the_best_so_far_is_the_answer(pair: Desk) -> None:
    pair.ask("a")
    pair.better(5.0, worker=2)
    pair.hand_in(events.WorkerLost(2, "killed"), 96)
    assert pair.outcome() == (route(5.0).body, 1)


def test_a_route_found_before_the_loss_stays_the_best_until_there_is_a_better(pair: Desk) -> None:
    pair.ask("a")
    pair.better(5.0, worker=2)
    pair.hand_in(events.WorkerLost(2, "killed"), 10)
    pair.better(7.0, job=2, worker=1)
    assert pair.all_of(effects.Publish) == []
    pair.done(nothing(), job=2, worker=1)
    assert pair.outcome() == (route(5.0).body, 1)


def test_a_replan_that_waits_again_and_gets_no_worker_is_answered_with_what_there_is(
    desk: Desk,
) -> None:
    desk.ask("a")
    desk.hand_in(events.WorkerLost(1, "killed"), 10)
    desk.tick(90)
    assert frames.decode_outcome(desk.outcome()[0], b"").kind == "not_found"


def test_a_job_that_kills_its_workers_does_not_go_through_the_whole_crew() -> None:
    desk = Desk(settings(workers=5)).open()
    desk.ask("a", budget_s=10.0)
    for job in (1, 2, 3):
        desk.hand_in(events.WorkerLost(6 - job, "killed"), 1)
    assert frames.decode_outcome(desk.outcome()[0], b"").kind == "not_found"
    assert desk.all_of(effects.StartJob) == []


def test_who_was_told_to_finish_is_answered_when_its_worker_is_lost(pair: Desk) -> None:
    pair.ask("a")
    pair.better(5.0, worker=2)
    pair.say(messages.Finish(replan="a"), "f")
    pair.hand_in(events.WorkerLost(2, "killed"))
    assert pair.outcome() == (route(5.0).body, 1)


def test_a_replan_whose_unit_has_asked_again_is_not_tried_again(pair: Desk) -> None:
    pair.ask("a", unit="u")
    pair.ask("b", unit="u")
    pair.hand_in(events.WorkerLost(2, "killed"), 10)
    assert [id for id, _ in pair.replies()] == ["a"]
    assert pair.one(effects.StartJob).job.job == 2


# -- silent ----------------------------------------------------------------------------------------


def test_a_worker_that_is_silent_past_its_deadline_is_killed(desk: Desk) -> None:
    desk.ask("a", budget_s=0.5)
    desk.hand_in(events.WorkerAlive(1), 450)
    desk.tick(50)
    assert desk.outcome()
    desk.tick(200)
    assert desk.one(effects.KillWorker) == effects.KillWorker(1, "past its deadline")
    desk.hand_in(events.WorkerLost(1, "killed"), 1)
    assert desk.one(effects.SpawnWorker).worker == 2


def test_a_worker_that_hangs_is_killed_and_its_job_does_not_wait_for_the_funeral(
    pair: Desk,
) -> None:
    pair.ask("a", budget_s=5.0)
    pair.tick(500)
    assert pair.one(effects.KillWorker) == effects.KillWorker(2, "silent at work")
    assert pair.one(effects.StartJob).worker == 1
    # What it read stays in memory until it is certainly gone.
    assert pair.front.snapshots.pins() == {1: 2}
    pair.hand_in(events.WorkerLost(2, "killed"), 1)
    assert pair.front.snapshots.pins() == {1: 1}


def test_what_a_killed_worker_still_says_is_not_listened_to(pair: Desk) -> None:
    pair.ask("a", budget_s=5.0)
    pair.tick(500)
    pair.hand_in(events.WorkerAlive(2))
    pair.better(1.0, job=1, worker=2)
    pair.done(route(1.0), job=1, worker=2)
    pair.done(route(1.0), job=1, worker=2)
    pair.hand_in(events.WorkerReady(2))
    assert pair.out == []
    assert pair.front.snapshots.pins() == {1: 1}


def test_an_idle_worker_is_pinged(desk: Desk) -> None:
    desk.tick(1000)
    assert desk.one(effects.PingWorker).worker == 1
    desk.tick(500)
    assert desk.one(effects.KillWorker).why == "silent when pinged"


# -- raving ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "event",
    [
        events.WorkerDone(2, 9, nothing()),
        events.WorkerDone(2, 1, events.Outcome("route", float("nan"), b"")),
        events.WorkerBetter(2, 9, route(1.0)),
        events.WorkerBetter(2, 1, nothing()),
        events.WorkerBetter(2, 1, events.Outcome("route", float("inf"), b"")),
        events.WorkerChecked(2, 1, True),
        events.WorkerFailed(2, 9, "internal", "", {}),
        events.WorkerReady(2),
    ],
)
def test_a_worker_that_talks_nonsense_is_killed_and_its_job_goes_to_another(
    pair: Desk, event: events.Event
) -> None:
    pair.ask("a")
    pair.hand_in(event)
    assert pair.one(effects.KillWorker).worker == 2
    assert pair.one(effects.StartJob).worker == 1


def test_a_worker_cannot_speak_for_another(pair: Desk) -> None:
    pair.ask("a")
    pair.done(route(1.0), job=1, worker=1)
    assert pair.one(effects.KillWorker).worker == 1
    assert pair.replies() == []


@pytest.mark.parametrize(
    ("code", "told"),
    [("bad_value", "bad_value"), ("internal", "internal"), ("odd", "internal")],
)
def test_what_the_planner_makes_no_sense_of_is_told(desk: Desk, code: str, told: str) -> None:
    desk.ask("a")
    desk.hand_in(events.WorkerFailed(1, 1, code, "no method is called x", {"field": "method"}))
    message = desk.answer("a")
    assert isinstance(message, messages.ErrorMessage)
    assert (message.code, message.text) == (told, "no method is called x")


def test_a_planner_that_breaks_after_it_has_found_a_route_costs_nothing(desk: Desk) -> None:
    desk.ask("a")
    desk.better(5.0)
    desk.hand_in(events.WorkerFailed(1, 1, "internal", "broken", {}))
    assert desk.outcome() == (route(5.0).body, 1)


def test_a_failure_of_what_nobody_waits_for_is_only_counted(desk: Desk) -> None:
    desk.ask("a")
    desk.say(messages.Cancel(replan="a"), "c")
    desk.hand_in(events.WorkerFailed(1, 1, "internal", "broken", {}))
    assert desk.replies() == []
    assert desk.count("worker_failures_total") == 1


# -- more than the workers can do ------------------------------------------------------------------


def test_improving_stops_when_somebody_has_waited_long_enough(desk: Desk) -> None:
    desk.ask("a", budget_s=1.0)
    desk.better(5.0)
    desk.ask("b")
    assert desk.all_of(effects.SteerJob) == []
    desk.tick(12.5)  # a quarter of its budget, half of that since the room is half full
    assert desk.one(effects.SteerJob).how == "finish"
    desk.done(route(5.0))
    assert desk.outcome("a") == (route(5.0).body, 1)
    assert desk.one(effects.StartJob).job.deadline == START + ms(99)


def test_a_first_route_ends_the_search_when_somebody_is_out_of_patience(desk: Desk) -> None:
    desk.ask("a", budget_s=1.0)
    desk.ask("b")
    desk.tick(30)
    assert desk.all_of(effects.SteerJob) == []
    desk.better(5.0)
    assert desk.one(effects.SteerJob).how == "finish"


def test_a_unit_that_asks_again_ends_its_own_older_search(desk: Desk) -> None:
    desk.ask("a", unit="u", budget_s=5.0)
    desk.ask("b", unit="u")
    assert desk.all_of(effects.SteerJob) == []
    desk.tick(50)
    assert desk.one(effects.SteerJob).how == "finish"
    desk.done(nothing())
    assert desk.error("a") == "superseded"
    assert desk.one(effects.StartJob).job.job == 2


def test_a_unit_that_asks_again_is_not_denied_a_proof(desk: Desk) -> None:
    desk.ask("a", unit="u", budget_s=5.0)
    desk.ask("b", unit="u")
    desk.tick(50)
    desk.done(nothing("no_route"))
    assert desk.outcome("a") == (b"no_route", 1)


def test_a_unit_that_asks_again_when_its_worker_is_lost_gets_the_older_one_superseded(
    desk: Desk,
) -> None:
    desk.ask("a", unit="u", budget_s=5.0)
    desk.ask("b", unit="u")
    desk.tick(50)
    desk.hand_in(events.WorkerLost(1, "killed"))
    assert desk.error("a") == "superseded"


def test_what_was_cut_short_for_others_is_tried_again_if_its_route_is_blocked(desk: Desk) -> None:
    desk.ask("a", budget_s=1.0)
    desk.better(5.0)
    desk.change(*put("fixed", "o"))
    desk.publish(1)
    desk.ask("b")
    desk.tick(13)
    desk.done(route(5.0))
    desk.hand_in(events.WorkerChecked(1, 2, False))
    assert desk.one(effects.StartJob).job.goal == (9.0, 0.0, 0.0)
    assert desk.front.answering.open["a"].phase == "planning"


def test_two_wait_for_each_worker_and_more_are_refused_with_a_time_to_come_back(
    desk: Desk,
) -> None:
    desk.ask("a")
    desk.done(nothing(), after_ms=10)
    for id, job in (("b", 2), ("c", None), ("d", None)):
        desk.ask(id, budget_s=5.0)
        assert bool(desk.all_of(effects.StartJob)) == (job is not None)
    desk.ask("e")
    message = desk.answer("e")
    assert isinstance(message, messages.ErrorMessage)
    assert (message.code, message.facts) == ("overloaded", {"waiting": 2})
    assert message.retry_after_s == pytest.approx(0.1 * 0.010 * 3)


def test_a_full_room_does_not_keep_a_unit_from_replacing_its_own(desk: Desk) -> None:
    desk.ask("a", budget_s=5.0)
    desk.ask("b", unit="u", budget_s=5.0)
    desk.ask("c", budget_s=5.0)
    desk.ask("d", unit="u", budget_s=5.0)
    assert desk.error("b") == "superseded"


def test_an_overload_is_served_newest_first(desk: Desk) -> None:
    desk.ask("a", budget_s=5.0)
    desk.ask("b", budget_s=5.0)
    desk.ask("c", budget_s=5.0)
    desk.done(nothing())
    assert desk.front.answering.open["c"].phase == "planning"


# -- the end ---------------------------------------------------------------------------------------


def test_when_nothing_is_open_it_ends_at_once(desk: Desk) -> None:
    desk.hand_in(events.StopAsked("SIGTERM"))
    assert desk.one(effects.Stop) == effects.Stop("SIGTERM")
    assert desk.out[-1] == effects.Stop("SIGTERM")
    assert desk.hand_in(events.Tick(), 10) == []


def test_what_waits_is_told_and_what_has_a_route_gives_it(desk: Desk) -> None:
    desk.ask("a", budget_s=5.0)
    desk.better(5.0)
    desk.ask("b", budget_s=5.0)
    desk.hand_in(events.StopAsked("SIGTERM"))
    assert desk.error("b") == "stopping"
    assert desk.one(effects.SteerJob).how == "finish"
    desk.hand_in(events.StopAsked("SIGTERM again"))
    assert desk.out == []
    desk.done(route(5.0))
    assert desk.outcome("a") == (route(5.0).body, 1)
    assert desk.all_of(effects.Stop)


def test_a_search_may_go_on_until_it_has_a_first_route(desk: Desk) -> None:
    desk.ask("a", budget_s=5.0)
    desk.hand_in(events.StopAsked("SIGTERM"))
    assert desk.all_of(effects.SteerJob) == []
    desk.better(5.0, after_ms=100)
    assert desk.one(effects.SteerJob).how == "finish"


def test_two_seconds_after_it_was_asked_everything_is_answered() -> None:
    desk = Desk(settings(workers=3)).open()
    for id in ("a", "b", "c"):
        desk.ask(id, budget_s=5.0)
    desk.change(*put("fixed", "o"))
    desk.publish(1)
    desk.say(messages.Site(), "q")
    desk.hand_in(events.StopAsked("SIGTERM"))
    assert desk.error("q") == "stopping"
    for _ in range(17):
        for worker in (1, 2, 3):
            desk.hand_in(events.WorkerAlive(worker), 100 / 3)
    desk.better(5.0, job=1, worker=3)  # told to end
    desk.done(route(6.0), job=2, worker=2, after_ms=0)  # to be checked
    desk.tick(100)
    answers = dict(desk.replies())
    assert isinstance(answers["a"], messages.AnswerMessage)
    assert isinstance(answers["b"], messages.AnswerMessage)
    stopping = answers["c"]
    assert isinstance(stopping, messages.ErrorMessage)
    assert stopping.code == "stopping"
    assert desk.all_of(effects.Stop)
    assert desk.now <= START + ms(2100)


def test_it_waits_for_changes_that_are_under_way(desk: Desk) -> None:
    desk.change(*put("fixed", "o"))
    desk.hand_in(events.StopAsked("SIGTERM"))
    assert desk.all_of(effects.Stop) == []
    desk.publish(1)
    assert isinstance(desk.reply(), messages.Acknowledged)
    assert desk.all_of(effects.Stop)


def test_nothing_new_is_taken_in_any_more(desk: Desk) -> None:
    desk.ask("a", budget_s=5.0)
    desk.hand_in(events.StopAsked("SIGTERM"))
    desk.ask("b")
    assert desk.error("b") == "stopping"
    desk.change(*put("fixed", "o"))
    assert desk.error("") == "stopping"
    desk.say(messages.Site(), "q")
    assert desk.error("q") == "stopping"
    desk.hand_in(events.WorkerLost(1, "killed"))
    assert desk.answer("a")


# -- what it tells of itself -----------------------------------------------------------------------


def test_hello_is_welcomed_with_all_a_client_needs() -> None:
    desk = Desk(
        settings(
            updates_endpoints=("tcp://127.0.0.1:7462",),
            events_endpoints=("tcp://127.0.0.1:7463",),
            software="byway 0.1.0",
        )
    )
    hello = messages.Hello(versions=[1], client="c")
    desk.say(hello, "before")
    found = desk.answer("before")
    assert isinstance(found, messages.Welcome)
    assert (found.state, found.wall_s, found.revision) == ("warming", 0.0, 0)
    desk.open()
    desk.say(hello, "h", after_ms=500)
    found = desk.answer("h")
    assert isinstance(found, messages.Welcome)
    assert (found.state, found.version, found.vehicles) == ("ready", 1, ["tug"])
    assert found.wall_s == pytest.approx(1e9 + 0.5)
    assert found.updates_endpoints == ["tcp://127.0.0.1:7462"]
    assert found.limits["budget_s_max"] == 60.0
    desk.hand_in(events.Vitals({"peers": 3}, 2e9))
    desk.say(hello, "i", after_ms=250)
    found = desk.answer("i")
    assert isinstance(found, messages.Welcome)
    assert found.wall_s == pytest.approx(2e9 + 0.25)


def test_without_a_common_version_there_is_no_conversation(desk: Desk) -> None:
    desk.say(messages.Hello(versions=[7, 8], client="c"), "h")
    message = desk.answer("h")
    assert isinstance(message, messages.ErrorMessage)
    assert (message.code, message.facts) == ("unsupported_version", {"versions": [1]})


def test_vehicles_are_told_as_they_are_defined(desk: Desk) -> None:
    desk.say(messages.Vehicles(), "v")
    assert desk.answer("v") == messages.VehiclesAre(
        vehicles=[
            messages.VehicleIs(
                vehicle="tug", model="car", settings={"model": "car", "turn_radius_m_min": 2.6}
            )
        ]
    )


def test_what_is_no_request_is_not_answered_as_one(desk: Desk) -> None:
    desk.say(messages.Noted(replans=[]), "n")
    assert desk.error("n") == "unknown_kind"


def test_the_health_record_is_published_every_second_and_told_on_request(desk: Desk) -> None:
    desk.ask("a")
    desk.done(route(4.0))
    desk.change(messages.Claim(layer="fixed", lease_s=10.0))
    desk.publish(1)
    desk.change(messages.Drop(layer="fixed", ids=["pile"]))
    desk.publish(2)
    desk.hand_in(events.Vitals({"peers": 3}, 2e9, {"front": 4711}))
    desk.hand_in(events.Undeliverable(desk.peer))
    desk.ask("b", budget_s=5.0)
    desk.ask("c", budget_s=5.0)
    desk.say(messages.Health(), "h")
    found = desk.answer("h")
    assert isinstance(found, messages.HealthIs)
    assert (found.state, found.revision, found.waiting, found.planning) == ("ready", 3, 1, 1)
    assert found.workers == {"starting": 0, "idle": 0, "busy": 1, "killed": 0, "vacant": 0}
    fixed = found.layers["fixed"]
    assert (fixed.source, fixed.obstacles, fixed.age_s) == ("s", 3, 0.0)
    assert fixed.lease_left_s is not None
    assert found.layers["outlines"].age_s is None
    assert found.counts["answers_route_total"] == 1
    assert found.counts["undeliverable_total"] == 1
    assert found.counts["peers"] == 3
    assert found.memory_bytes["front"] == 4711
    assert found.memory_bytes["site"] == 4096
    assert sum(found.histograms["answer_s"].counts) == 1
    desk.tick(1000)
    event = desk.one(effects.Publish)
    assert (event.topic, event.header.number) == ("health", 1)
    assert isinstance(event.message, messages.HealthIs)
    desk.tick(1000)
    assert desk.one(effects.Publish).header.number == 2


def test_a_front_is_started_once(desk: Desk) -> None:
    with pytest.raises(Defect, match="started once"):
        desk.hand_in(events.Started(0.0))


def test_a_message_from_somebody_who_was_lost_is_a_defect(desk: Desk) -> None:
    desk.hand_in(events.WorkerLost(1, "died"))
    with pytest.raises(Defect, match="worker 1 is known"):
        desk.hand_in(events.WorkerAlive(1))


def test_it_is_woken_for_whatever_is_due_next(desk: Desk) -> None:
    """A runtime that only ever obeys `Wake` never misses anything."""
    desk = Desk()
    desk.hand_in(events.Started(0.0))
    wake = desk.one(effects.Wake).at
    desk.hand_in(events.SurveyorReady(1, 1, handle(1)))
    desk.hand_in(events.WorkerReady(1))
    desk.ask("a", budget_s=0.25)
    wake = min(wake, desk.one(effects.Wake).at)
    answered_at = None
    while answered_at is None:
        desk.now = wake
        desk.hand_in(events.Tick())
        wakes = desk.all_of(effects.Wake)
        assert wakes, "whoever has been woken is told when to wake again"
        wake = wakes[-1].at
        if desk.replies():
            answered_at = desk.now
    assert answered_at == START + ms(249)
