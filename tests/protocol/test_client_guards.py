"""Guarded routes through the blocking client: what is asked, what is refused, what is heard."""

import threading
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from tests.protocol.fake_daemon import FakeDaemon, outcome, route_table

import byway
from byway import frames, limits, messages
from byway.frames import Header
from byway.packed import read

NewClient = Callable[..., byway.Client]
START, GOAL = (0.0, 0.0, 0.0), (5.0, 0.0, 0.0)
BLOCKED = messages.BlockedIs(
    distance_m=7.5,
    time_s=4.1,
    at_m=19.9,
    x_m=22.0,
    y_m=9.5,
    heading_rad=0.2,
    kind="polygon",
    layer="stacks",
    id="pile-9",
    depth_m=0.4,
)


def route(**changes: Any) -> byway.Route:
    table = changes.pop("table", route_table(5.0))
    return byway.Route(table, (), 5.0, 2.0)


def asked(daemon: FakeDaemon) -> Any:
    return daemon.log[-1].message


def test_an_answer_knows_all_that_a_guard_needs(client: byway.Client, daemon: FakeDaemon) -> None:
    body, packed = outcome(5.0, left_out=["unit.tug-3"])
    answer = client.replan(
        "tug", START, GOAL, 0.05, unit="tug-3", leave_out=["unit.tug-3"], clearance_m=0.25
    )
    told = frames.decode_outcome(body, packed)
    answer = byway.Answer(**{**fields_of(answer), "left_out": tuple(told.left_out)})
    guard = client.guard(answer, silence_s=9.0, replan_on_alert=True, budget_s=0.3, progress_m=1)
    assert (guard.unit, guard.state, guard.progress_m) == ("tug-3", "clear", 1.0)
    message = asked(daemon)
    assert (message.vehicle, message.unit, message.leave_out) == ("tug", "tug-3", ["unit.tug-3"])
    assert (message.clearance_m, message.silence_s) == (0.25, 9.0)
    assert (message.replan_on_alert, message.budget_s) == (True, 0.3)
    assert answer.route is not None
    for name in byway.ROUTE_TABLE.names or ():
        column = read(message.columns[name], daemon.log[-1].packed)
        assert np.array_equal(column, answer.route.table[name])


def fields_of(answer: byway.Answer) -> dict[str, Any]:
    return {name: getattr(answer, name) for name in byway.Answer.__dataclass_fields__}


def test_a_route_needs_the_vehicle_that_drives_it(client: byway.Client, daemon: FakeDaemon) -> None:
    with pytest.raises(byway.BadValue, match="which vehicle"):
        client.guard(route())
    client.guard(route(), vehicle="tug")
    message = asked(daemon)
    assert (message.vehicle, message.unit, message.leave_out) == ("tug", client.client_id, [])
    assert (message.clearance_m, message.budget_s) == (None, 0.2)


def test_a_unit_says_where_it_is_and_when_it_has_arrived(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    guard = client.guard(route(), vehicle="tug", unit="tug-3")
    there = client.progress(3.0, 1.5, unit="tug-3", guard=guard.guard)
    assert (there.guard, there.progress_m) == (guard.guard, 3.0)
    assert asked(daemon) == messages.Progress(
        unit="tug-3", progress_m=3.0, speed_mps=1.5, guard=guard.guard
    )
    assert client.release("tug-3", guard=guard.guard).state == "released"
    assert asked(daemon) == messages.Release(unit="tug-3", guard=guard.guard)
    for call in (lambda: client.progress(4.0), client.release):
        with pytest.raises(byway.UnknownRequest):
            call()
        assert asked(daemon).unit == client.client_id


def broken(name: str, value: float) -> np.ndarray:
    table = route_table(5.0)
    table[name][1] = value
    return table


@pytest.mark.parametrize(
    ("call", "error"),
    [
        (lambda c: c.guard(route(table=broken("x_m", np.nan)), vehicle="tug"), byway.BadGeometry),
        (lambda c: c.guard(route(table=route_table()[:0]), vehicle="tug"), byway.BadGeometry),
        (lambda c: c.guard(route(table=np.zeros(3)), vehicle="tug"), byway.BadGeometry),
        (
            lambda c: c.guard(
                route(table=np.zeros(limits.guard_rows_max + 1, byway.ROUTE_TABLE)), vehicle="tug"
            ),
            byway.TooLarge,
        ),
        (lambda c: c.guard(route(), vehicle="no name"), byway.BadValue),
        (lambda c: c.guard(route(), vehicle="tug", progress_m=-1.0), byway.BadValue),
        (lambda c: c.guard(route(), vehicle="tug", silence_s=0.0), byway.BadValue),
        (lambda c: c.guard(route(), vehicle="tug", misspelt=1), byway.BadMessage),
        (lambda c: c.progress(-1.0), byway.BadValue),
        (lambda c: c.progress(float("nan")), byway.BadValue),
        (lambda c: c.progress(1.0, float("inf")), byway.BadValue),
        (lambda c: c.release("a b"), byway.BadValue),
    ],
)
def test_what_cannot_be_meant_is_refused_before_it_is_sent(
    client: byway.Client,
    daemon: FakeDaemon,
    call: Callable[[byway.Client], object],
    error: type[byway.BywayError],
) -> None:
    with pytest.raises(error):
        call(client)
    assert not daemon.got


def test_an_answer_without_a_route_cannot_be_guarded(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    answer = client.replan("tug", START, GOAL, 0.05)
    nothing = byway.Answer(**{**fields_of(answer), "route": None})
    with pytest.raises(byway.BadValue, match="no route"):
        client.guard(nothing)
    assert not daemon.got["guard"]


def test_the_longest_route_passes_the_door(client: byway.Client, daemon: FakeDaemon) -> None:
    table = np.zeros(limits.guard_rows_max, byway.ROUTE_TABLE)
    assert client.guard(route(table=table), vehicle="tug").state == "clear"


def test_a_replan_may_ask_for_a_guard(client: byway.Client, daemon: FakeDaemon) -> None:
    client.replan("tug", START, GOAL, 0.05, guard=True, replan_on_alert=True, silence_s=4.0)
    message = asked(daemon)
    assert (message.guard, message.replan_on_alert, message.silence_s) == (True, True, 4.0)


def test_an_answer_says_which_guard_stands_and_what_would_have_to_move(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    remedy = messages.RemedyIs(
        movables=[messages.MovableIs(layer="stacks", id="pile-7", x_m=9.0, y_m=3.0)],
        way_m=[(2.0, 2.0), (9.0, 3.0)],
        disc_radius_m=0.8,
        proved=True,
    )
    nothing: dict[str, Any] = {"bound": None, "gap": 1.0, "columns": {}, "legs": []}
    body, _ = outcome(None, kind="no_route", remedy=remedy, **nothing)
    told = messages.AnswerMessage(
        unit="u", revision=1, waited_s=0.0, total_s=0.1, guard="g-17", outcome=body
    )
    client.hello()
    id = f"{client._contact._token}-{client._contact._serial + 1}"
    daemon.instead["replan"] = frames.encode(Header("answer", id, epoch=daemon.epoch), told)
    answer = client.replan("tug", START, GOAL, 0.05)
    assert (answer.kind, answer.guard, answer.vehicle) == ("no_route", "g-17", "tug")
    assert answer.remedy is not None
    assert answer.remedy.movables == (byway.Movable("stacks", "pile-7", 9.0, 3.0),)
    assert answer.remedy.way_m.tolist() == [[2.0, 2.0], [9.0, 3.0]]
    assert (answer.remedy.disc_radius_m, answer.remedy.proved) == (0.8, True)


def test_events_about_guards_and_layers(client: byway.Client, daemon: FakeDaemon) -> None:
    body, packed = outcome(9.0)
    told: list[messages.Message] = [
        messages.Alert(unit="tug-3", guard="g-1", revision=2, blocked=BLOCKED),
        messages.Cleared(unit="tug-3", guard="g-1", revision=3),
        messages.Rerouted(
            unit="tug-3", guard="g-2", was="g-1", from_m=3.0, in_s=0.5, revision=4, outcome=body
        ),
        messages.RerouteFailed(unit="tug-3", guard="g-2", reason="not_found", text="no"),
        messages.GuardLost(unit="tug-3", guard="g-2", silent_s=5.0),
    ]

    def publish() -> None:
        for message in told:
            is_route = isinstance(message, messages.Rerouted)
            daemon.publish("guard.tug-3", message, packed if is_route else b"")
        daemon.publish("layers.lidar", messages.LayerState(layer="lidar", state="fresh"))

    def wait_and_publish() -> None:
        daemon.wait_for_subscription("layers")
        daemon.do(publish)

    publisher = threading.Thread(target=wait_and_publish)
    publisher.start()
    events = client.listen(["guard", "layers"])
    found = [next(events) for _ in range(6)]
    publisher.join()
    events.close()
    assert [event.topic for event in found] == ["guard.tug-3"] * 5 + ["layers.lidar"]
    assert [found[i].content for i in (0, 1, 3, 4)] == [told[i] for i in (0, 1, 3, 4)]
    assert found[5].content == messages.LayerState(layer="lidar", state="fresh")
    rerouted = found[2].content
    assert isinstance(rerouted, byway.Rerouted)
    assert (rerouted.guard, rerouted.was, rerouted.from_m, rerouted.in_s) == (
        *("g-2", "g-1"),
        *(3.0, 0.5),
    )
    assert rerouted.route is not None
    assert (rerouted.cost, rerouted.unit, rerouted.revision) == (9.0, "tug-3", 4)
