"""Answers as callers see them, and the nonsense that does not get to them."""

import math
from typing import Any

import numpy as np
import pytest
from tests.protocol.fake_daemon import outcome, route_table

import byway
from byway import frames, messages
from byway.answer import answer_of, better_of, rerouted_of
from byway.ear import Heard
from byway.event import event_of
from byway.frames import Header, Received
from byway.packed import pack


def received(body: bytes, packed: bytes, kind: str = "answer") -> Received:
    message: messages.Message
    if kind == "answer":
        message = messages.AnswerMessage(
            unit="u", revision=1, waited_s=0.0, total_s=0.1, outcome=body
        )
    else:
        message = messages.BetterMessage(unit="u", revision=1, elapsed_s=0.1, outcome=body)
    parts = frames.encode(Header(kind, "a"), message, packed)
    door = frames.REPLIES if kind == "answer" else frames.EVENTS
    return frames.decode(parts, door)


def columns_of(table: np.ndarray) -> dict[str, Any]:
    columns, packed = pack({name: table[name] for name in table.dtype.names or ()})
    return {"columns": columns, "packed": packed}


def test_directions_change_between_legs() -> None:
    legs = [
        messages.LegIs(first=i, last=i + 1, gear=gear, length_m=1.0)
        for i, gear in enumerate([1, -1, -1, 1])
    ]
    route = answer_of(received(*outcome(2.0, legs=legs))).route
    assert route is not None
    assert route.direction_changes == 2
    assert not route.table.flags.writeable
    assert "table" not in repr(route)


@pytest.mark.parametrize("column", ["t_s", "x_m", "heading_rad", "speed_mps"])
@pytest.mark.parametrize("value", [math.nan, math.inf])
def test_a_route_with_a_number_that_is_none_is_refused(column: str, value: float) -> None:
    table = route_table()
    table[column][1] = value
    made = columns_of(table)
    body, _ = outcome(2.0, columns=made["columns"])
    with pytest.raises(byway.BadReply, match=f"{column} that is not finite"):
        answer_of(received(body, made["packed"]))


@pytest.mark.parametrize(
    "changes",
    [{"length_m": None}, {"duration_s": None}, columns_of(route_table()[:0])],
)
def test_a_route_without_rows_or_length_is_refused(changes: dict[str, Any]) -> None:
    packed = changes.pop("packed", None)
    body, standard = outcome(2.0, **changes)
    with pytest.raises(byway.BadReply, match="neither rows"):
        answer_of(received(body, standard if packed is None else packed))


@pytest.mark.parametrize("drop", ["t_s", "gear"])
def test_a_route_without_a_column_is_refused(drop: str) -> None:
    table = route_table()
    columns, packed = pack({name: table[name] for name in table.dtype.names or () if name != drop})
    body, _ = outcome(2.0, columns=columns)
    with pytest.raises(byway.BadReply, match="columns must be"):
        answer_of(received(body, packed))


def test_columns_of_two_lengths_are_refused() -> None:
    table = route_table()
    columns, packed = pack(
        {name: table[name][: 2 if name == "gear" else 3] for name in table.dtype.names or ()}
    )
    body, _ = outcome(2.0, columns=columns)
    with pytest.raises(byway.BadReply, match="gear"):
        answer_of(received(body, packed))


def test_kinds_that_are_new_are_handed_on() -> None:
    body, _ = outcome(kind="partial", cost=None, columns={}, legs=[])
    answer = answer_of(received(body, b""))
    assert (answer.kind, answer.route, answer.cost) == ("partial", None, math.inf)


def test_one_is_not_taken_for_the_other() -> None:
    with pytest.raises(byway.BadReply):
        answer_of(received(*outcome(2.0), kind="better"))
    with pytest.raises(byway.BadReply):
        better_of(received(*outcome(2.0)))
    with pytest.raises(byway.BadReply):
        rerouted_of(received(*outcome(2.0)))
    with pytest.raises(byway.BadReply, match="is no event"):
        event_of(Heard("better.u", received(*outcome(2.0)), 0))
