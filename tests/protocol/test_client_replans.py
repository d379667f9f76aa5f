"""Replans through the blocking client, over real sockets, with a daemon that can fail."""

import math
from collections.abc import Callable

import numpy as np
import pytest
from tests.protocol.fake_daemon import FakeDaemon, outcome, route_table, set_patience

import byway
from byway import frames, messages
from byway.frames import Header

NewClient = Callable[..., byway.Client]


def next_id(client: byway.Client) -> str:
    """The id that the client's next request will have."""
    return f"{client._contact._token}-{client._contact._serial + 1}"


START, GOAL = (0.0, 0.0, 0.0), (5.0, 0.0, 0.0)


def test_an_answer_is_what_the_daemon_said(client: byway.Client, daemon: FakeDaemon) -> None:
    answer = client.replan("tug", START, GOAL, budget_s=0.05)
    assert (answer.kind, answer.cost, answer.bound, answer.cost_unit) == ("route", 5.0, 1.0, "m")
    assert (answer.first_s, answer.waited_s, answer.total_s) == (0.01, 0.0, 0.02)
    assert (answer.seed, answer.attempts, answer.left_out) == (7, 1, ())
    assert answer.epoch == daemon.epoch == client.epoch
    assert answer.unit == client.client_id
    assert answer.route is not None
    assert answer.route.table.dtype == byway.ROUTE_TABLE
    assert np.array_equal(answer.route.table, route_table(5.0))
    assert answer.route.legs == (byway.Leg(0, 2, 1, 5.0),)


def test_the_request_says_what_the_caller_said(client: byway.Client, daemon: FakeDaemon) -> None:
    client.replan(
        "tug",
        np.array(START),
        GOAL,
        0.05,
        unit="tug-3",
        method="lattice",
        seed=np.int64(3),
        leave_out=["unit.tug-3"],
        clearance_m=0.2,
        start_speed_mps=-1.0,
        start_curvature_per_m=0.1,
        gap_wanted=0.5,
    )
    assert daemon.log[-1].message == messages.Replan(
        vehicle="tug",
        unit="tug-3",
        start=START,
        goal=GOAL,
        budget_s=0.05,
        method="lattice",
        seed=3,
        leave_out=["unit.tug-3"],
        clearance_m=0.2,
        start_speed_mps=-1.0,
        start_curvature_per_m=0.1,
        gap_wanted=0.5,
    )
    assert daemon.log[-1].header.epoch == daemon.epoch


@pytest.mark.parametrize(
    ("fields", "error", "field"),
    [
        ({"budget_s": -1.0}, byway.BadValue, "budget_s"),
        ({"budget_s": math.nan}, byway.BadValue, "budget_s"),
        ({"budget_s": "1"}, byway.BadMessage, "budget_s"),
        ({"start": (0.0, 0.0)}, byway.BadMessage, "start.2"),
        ({"start": (0.0, math.inf, 0.0)}, byway.BadValue, "start.1"),
        ({"goal": None}, byway.BadValue, "goal"),
        ({"vehicle": "no such name"}, byway.BadValue, "vehicle"),
        ({"gap_wanted": 1.0}, byway.BadValue, "gap_wanted"),
    ],
)
def test_what_cannot_be_meant_is_refused_before_it_is_sent(
    client: byway.Client,
    daemon: FakeDaemon,
    fields: dict[str, object],
    error: type[byway.BywayError],
    field: str,
) -> None:
    asked = {"vehicle": "tug", "start": START, "goal": GOAL, "budget_s": 0.05}
    with pytest.raises(error) as caught:
        client.replan(**{**asked, **fields})  # type: ignore[arg-type]
    assert caught.value.facts["field"] == field
    assert not daemon.got


def test_an_error_of_the_daemon_is_raised_with_its_code(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    daemon.refuses["replan"] = messages.ErrorMessage(
        code="overloaded", text="busy", facts={"waiting": 4}, retry_after_s=0.25
    )
    with pytest.raises(byway.Overloaded, match="busy") as caught:
        client.replan("tug", START, GOAL, 0.05)
    assert caught.value.code == "overloaded"
    assert caught.value.facts == {"waiting": 4}
    assert caught.value.retry_after_s == 0.25


def test_better_routes_come_in_order_and_never_after_the_answer(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    daemon.holds, daemon.costs = True, [5.0]
    heard: list[byway.Better] = []
    ask = client.start_replan("tug", START, GOAL, 1.0, unit="tug-1", on_better=heard.append)
    daemon.better(9.0, 8.0, 7.0)

    def hear(better: byway.Better) -> None:
        heard.append(better)
        if better.cost == 7.0:
            daemon.release()

    answer = ask.wait(hear)
    daemon.do(lambda: daemon._better(ask.id, "tug-1", 1.0))
    client.health()
    assert [better.cost for better in heard] == [9.0, 8.0, 7.0]
    assert [better.number for better in heard] == [1, 2, 3]
    assert heard[0].route is not None
    assert heard[0].replan == ask.id == answer.replan
    assert heard[0].elapsed_s == 0.01
    assert ask.wait() is answer


def test_better_routes_are_not_given_to_another_replan(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    """Two replans of one unit prefix are open; each hears its own."""
    daemon.holds = True
    heard: dict[str, list[float]] = {"a": [], "ab": []}
    asks = {
        unit: client.start_replan(
            "tug", START, GOAL, 1.0, unit=unit, on_better=lambda b, u=unit: heard[u].append(b.cost)
        )
        for unit in heard
    }
    daemon.wait_for_replans(2)
    daemon.better(9.0)
    # The answer waits until the event has come; events and answers travel apart.
    while not client._contact._better[asks["ab"].id]:
        client._run(client._contact.turn(asks["a"]._asked._question))
    daemon.release()
    for ask in asks.values():
        ask.wait()
    assert heard == {"a": [9.0], "ab": [9.0]}


def test_listening_late_hears_what_follows(client: byway.Client, daemon: FakeDaemon) -> None:
    daemon.holds = True
    heard: list[float] = []
    ask = client.start_replan("tug", START, GOAL, 1.0)
    client._run(client._contact.listen_to(ask.unit))
    daemon.better(9.0)

    def hear(better: byway.Better) -> None:
        heard.append(better.cost)
        if better.cost == 8.0:
            daemon.release()

    daemon.better(8.0)
    ask.wait(hear)
    assert heard == [9.0, 8.0]


def test_a_daemon_that_does_not_confirm_subscriptions_is_not_waited_for_long(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    daemon.confirms_subscriptions = False
    answer = client.replan("tug", START, GOAL, 0.05, on_better=lambda _: None)
    assert answer.kind == "route"


def test_what_on_better_raises_ends_the_wait(client: byway.Client, daemon: FakeDaemon) -> None:
    daemon.holds = True

    def fail(better: byway.Better) -> None:
        raise KeyError(better.cost)

    ask = client.start_replan("tug", START, GOAL, 1.0, on_better=fail)
    daemon.better(9.0)
    with pytest.raises(KeyError):
        ask.wait()
    assert client.health().planning == 1


@pytest.mark.parametrize("how", ["ask", "unit", "replan"])
def test_a_cancelled_replan_raises(client: byway.Client, daemon: FakeDaemon, how: str) -> None:
    daemon.holds = True
    ask = client.start_replan("tug", START, GOAL, 1.0)
    cancelled = {
        "ask": ask.cancel,
        "unit": client.cancel,
        "replan": lambda: client.cancel(replan=ask.id),
    }[how]()
    assert cancelled
    with pytest.raises(byway.Cancelled):
        ask.wait()
    assert not ask.cancel()


@pytest.mark.parametrize("how", ["ask", "unit"])
def test_a_finished_replan_is_answered_now(
    client: byway.Client, daemon: FakeDaemon, how: str
) -> None:
    daemon.holds = True
    ask = client.start_replan("tug", START, GOAL, 1.0, unit="tug-1")
    assert ask.finish() if how == "ask" else client.finish("tug-1")
    assert ask.wait().cost == 5.0
    assert not client.finish("tug-1")


def test_unit_and_replan_at_once_are_refused(client: byway.Client) -> None:
    with pytest.raises(byway.BadValue, match="either"):
        client.cancel("tug-1", replan="x")


@pytest.mark.parametrize("lost", ["replan", "accepted", "answer"])
def test_a_lost_message_is_made_good_by_a_repeat(
    new_client: NewClient, daemon: FakeDaemon, lost: str
) -> None:
    """Whatever is lost on the way, the same request is answered once, and answered."""
    client = new_client(repeat_s=0.05)
    client.hello()
    daemon.lose["replan"] = lost == "replan"
    daemon.mute["accepted"] = lost == "accepted"
    daemon.mute["answer"] = lost in ("accepted", "answer")
    assert client.replan("tug", START, GOAL, 0.01).cost == 5.0
    ids = {came.header.id for came in daemon.log if came.header.kind == "replan"}
    assert len(ids) == 1
    assert daemon.got["replan"] == (1 if lost == "replan" else 2)


def test_a_broken_connection_is_made_good(new_client: NewClient, daemon: FakeDaemon) -> None:
    """The daemon's sockets go and come back while a replan is open, its state stays."""
    client = new_client(repeat_s=0.5)
    daemon.holds = True
    ask = client.start_replan("tug", START, GOAL, 1.0)
    daemon.wait_for_replans()
    epoch, open_replans = daemon.epoch, dict(daemon.open)
    daemon.restart()
    daemon.epoch, daemon.open = epoch, open_replans
    assert not ask._asked._question.reply
    client.health()
    daemon.release()
    assert ask.wait().cost == 5.0


def test_a_restarted_daemon_is_told_to_the_caller(client: byway.Client, daemon: FakeDaemon) -> None:
    """Its site may not be complete, so the replan is not sent again by itself; the next works."""
    client.replan("tug", START, GOAL, 0.05)
    daemon.restart()
    with pytest.raises(byway.NewEpoch):
        client.replan("tug", START, GOAL, 0.05)
    assert client.epoch == daemon.epoch
    assert client.replan("tug", START, GOAL, 0.05).epoch == daemon.epoch


def test_no_daemon_is_told_soon(new_client: NewClient, daemon: FakeDaemon) -> None:
    daemon.stop()
    client = new_client(reconnect_s=0.03)
    with pytest.raises(byway.DaemonLost, match="no connection") as caught:
        client.replan("tug", START, GOAL, 0.05)
    assert caught.value.facts["endpoint"] == daemon.endpoints["requests"]
    daemon.start()
    set_patience(client, reconnect_s=5.0)
    assert client.replan("tug", START, GOAL, 0.05).kind == "route"


def test_what_failed_is_not_sent_by_a_later_call(client: byway.Client, daemon: FakeDaemon) -> None:
    client.hello()
    daemon.stop()
    set_patience(client, reconnect_s=0.01)
    with pytest.raises(byway.DaemonLost):
        client.replan("tug", START, GOAL, 1.0)
    daemon.start()
    set_patience(client, reconnect_s=5.0)
    client.health()
    assert daemon.got["replan"] == 0


def test_no_daemon_within_the_timeout_is_told_as_such(
    new_client: NewClient, daemon: FakeDaemon
) -> None:
    daemon.stop()
    client = new_client(timeout_s=0.03, reconnect_s=10.0)
    with pytest.raises(byway.DaemonLost):
        client.hello()


def test_no_answer_in_time_is_a_timeout(new_client: NewClient, daemon: FakeDaemon) -> None:
    client = new_client()
    client.hello()
    set_patience(client, timeout_s=0.05)
    daemon.holds = True
    with pytest.raises(byway.TimedOut) as caught:
        client.replan("tug", START, GOAL, 0.01)
    assert caught.value.code == "timed_out"
    daemon.holds = False
    set_patience(client, timeout_s=5.0)
    assert client.replan("tug", START, GOAL, 0.01).kind == "route"


def test_a_replan_nobody_waits_for_is_forgotten(new_client: NewClient, daemon: FakeDaemon) -> None:
    """After its time it is not sent again, and does not disturb the other calls."""
    client = new_client(repeat_s=0.01)
    client.hello()
    set_patience(client, timeout_s=0.05)
    daemon.holds = True
    ask = client.start_replan("tug", START, GOAL, 0.01)
    with pytest.raises(byway.TimedOut):
        ask.wait()
    set_patience(client, timeout_s=5.0)
    before = daemon.got["replan"]
    for _ in range(5):
        client.health()
    assert daemon.got["replan"] == before


def test_an_ask_that_is_dropped_is_forgotten(new_client: NewClient, daemon: FakeDaemon) -> None:
    client = new_client(repeat_s=0.001)
    client.hello()
    set_patience(client, timeout_s=0.02)
    daemon.holds = True
    ask = client.start_replan("tug", START, GOAL, 0.001)
    set_patience(client, timeout_s=5.0)
    while client._contact._requests._open:  # type: ignore[union-attr]
        client.health()
    before = daemon.got["replan"]
    client.health()
    assert daemon.got["replan"] == before
    with pytest.raises(byway.TimedOut):
        ask.wait()


def test_nonsense_for_an_answer_is_a_bad_reply(client: byway.Client, daemon: FakeDaemon) -> None:
    client.hello()
    daemon.instead["replan"] = [b"x", b"y"]
    with pytest.raises(byway.BadReply):
        client.replan("tug", START, GOAL, 0.05)


def test_another_message_than_the_answer_is_a_bad_reply(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    daemon.holds = True
    ask = client.start_replan("tug", START, GOAL, 1.0)
    noted = frames.encode(Header("noted", ask.id, epoch=daemon.epoch), messages.Noted(replans=[]))
    daemon.wait_for_replans()
    ((identity, _),) = daemon.open.values()
    daemon.do(lambda: daemon._sockets["requests"].send_multipart([identity, *noted]))
    with pytest.raises(byway.BadReply, match="where an answer was due"):
        ask.wait()


def test_another_reply_than_was_due_is_a_bad_reply(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    header = Header("noted", next_id(client), epoch=daemon.epoch)
    daemon.instead["health"] = frames.encode(header, messages.Noted(replans=[]))
    with pytest.raises(byway.BadReply, match="in reply to health"):
        client.health()


def test_replies_to_nobody_are_passed_over(new_client: NewClient, daemon: FakeDaemon) -> None:
    client = new_client()
    client.hello()
    set_patience(client, timeout_s=0.03)
    header = Header("noted", "nobody", epoch=daemon.epoch)
    daemon.instead["replan"] = frames.encode(header, messages.Noted(replans=[]))
    with pytest.raises(byway.TimedOut):
        client.replan("tug", START, GOAL, 0.001)


def test_a_blocked_start_is_an_answer(client: byway.Client, daemon: FakeDaemon) -> None:
    body, _ = outcome(
        kind="start_blocked",
        cost=None,
        bound=None,
        gap=1.0,
        blocked_by=[messages.BlockageIs(layer="fixed", id="kiln", depth_m=0.3)],
        columns={},
        legs=[],
    )
    told = messages.AnswerMessage(
        unit="u", revision=3, waited_s=0.0, total_s=0.01, attempts=2, outcome=body
    )
    client.hello()
    header = Header("answer", next_id(client), epoch=daemon.epoch)
    daemon.instead["replan"] = frames.encode(header, told)
    answer = client.replan("tug", START, GOAL, 0.05)
    assert (answer.kind, answer.route, answer.first_s) == ("start_blocked", None, None)
    assert (answer.cost, answer.bound, answer.gap) == (math.inf, math.inf, 1.0)
    assert answer.blocked_by == (byway.Blockage("fixed", "kiln", 0.3),)
    assert (answer.attempts, answer.revision) == (2, 3)
