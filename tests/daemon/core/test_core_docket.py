"""The life of one replan: its table of moves, what it holds, how its budget is shared out."""

from __future__ import annotations

from itertools import product
from typing import get_args

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.daemon.core.frontdesk import START, ms, nothing, route

from byway import messages
from byway.frames import Header
from bywayd.core.docket import MOVES, Docket, Held, Move, Phase, times_of
from bywayd.core.events import Peer
from bywayd.core.instants import Duration, Instant
from bywayd.core.invariant import Defect


@pytest.fixture
def docket() -> Docket:
    ask = messages.Replan(
        vehicle="tug", unit="u", start=(0.0, 0.0, 0.0), goal=(1.0, 0.0, 0.0), budget_s=0.1
    )
    return Docket(
        header=Header("replan", "a"),
        ask=ask,
        body=b"",
        times=times_of(START, ms(100), ms(2), 0.2, ms(1.5)),
        seed=1,
        attempts_max=2,
        retry_left_min=ms(3),
        peer=Peer("requests", b"c"),
    )


@pytest.mark.parametrize(("phase", "move"), list(product(get_args(Phase), get_args(Move))))
def test_every_move_is_in_the_table_or_a_defect(docket: Docket, phase: Phase, move: Move) -> None:
    docket.phase = phase
    row = MOVES.get((phase, move))
    if row is None:
        with pytest.raises(Defect, match=f"no move for {move} in {phase}"):
            docket.move(move, START)
    else:
        assert docket.move(move, START) == row[1]
        assert docket.phase == row[0]
        assert f"{phase} -> {row[0]} ({move})" in docket.story[-1]


def test_every_phase_is_left_in_every_way_that_must_always_work() -> None:
    """Nobody who waits for an answer can be in a phase without a way to get one."""
    for phase in get_args(Phase):
        if phase != "answered":
            for move in ("due", "cancel", "stop", "finish"):
                assert (phase, move) in MOVES
        else:
            assert not [row for row in MOVES if row[0] == "answered"]


def test_every_answer_ends_and_every_end_answers() -> None:
    for after, act in MOVES.values():
        assert (after == "answered") == act.startswith("answer")


def test_only_a_better_route_is_held(docket: Docket) -> None:
    assert docket.hold(route(5.0), 1, START)
    assert not docket.hold(route(5.0), 1, START)
    assert not docket.hold(route(6.0), 1, START)
    assert docket.hold(route(4.0), 1, START + ms(1))
    assert docket.best == Held(route(4.0), 1)
    assert docket.first_at == START


def test_a_route_on_a_newer_revision_replaces_a_cheaper_one_on_an_older(docket: Docket) -> None:
    docket.hold(route(5.0), 1, START)
    assert docket.hold(route(9.0), 2, START)
    with pytest.raises(Defect, match="revisions rise"):
        docket.hold(route(1.0), 1, START)


def test_only_routes_are_held(docket: Docket) -> None:
    with pytest.raises(Defect, match="only routes are held"):
        docket.hold(nothing(), 1, START)


@pytest.mark.parametrize(
    ("kind", "revision", "route_stays"),
    [("not_found", 1, True), ("not_found", 2, True), ("no_route", 1, True), ("no_route", 2, False)],
)
def test_a_route_gives_way_only_to_a_proof_about_a_newer_revision(
    docket: Docket, kind: str, revision: int, route_stays: bool
) -> None:
    docket.hold(route(5.0), 1, START)
    docket.ended(nothing(kind), revision, START)  # type: ignore[arg-type]
    assert (docket.best is not None) == route_stays
    assert (docket.verdict is None) == route_stays


def test_without_a_route_the_verdict_counts(docket: Docket) -> None:
    docket.ended(nothing(), 1, START)
    assert docket.verdict == Held(nothing(), 1)
    docket.ended(route(3.0), 1, START)
    assert docket.best == Held(route(3.0), 1)
    docket.blocked()
    assert docket.best is None
    assert docket.verdict is None


def test_another_try_needs_time_and_attempts_and_a_reason(docket: Docket) -> None:
    assert docket.has_another_try(START)
    assert not docket.has_another_try(docket.times.start_by)
    assert docket.has_another_try(docket.times.start_by - ms(1))
    docket.retry_left_min = ms(60)
    assert not docket.has_another_try(START + ms(50))
    docket.hurry = "shorten"
    assert docket.has_another_try(START)
    for hurry in ("finish", "newer"):
        docket.hurry = hurry  # type: ignore[assignment]
        assert not docket.has_another_try(START)
    docket.hurry = ""
    docket.attempts = 2
    assert not docket.has_another_try(START)


def test_beginning_again_forgets_why_it_was_hurried_but_not_when_it_began(docket: Docket) -> None:
    docket.begin(7, 1, START)
    docket.check()
    docket.hurry = "shorten"
    docket.move("lost_early", START)
    docket.leave_worker()
    docket.check()
    docket.begin(8, 2, START + ms(5))
    docket.check()
    assert (docket.task, docket.worker, docket.attempts, docket.hurry) == (8, 2, 2, "")
    assert docket.begun_at == START


def test_a_docket_that_cannot_be_is_found_out(docket: Docket) -> None:
    docket.phase = "planning"
    with pytest.raises(Defect, match="who is at work has a task"):
        docket.check()


@settings(max_examples=100, deadline=None)
@given(
    budget_ns=st.integers(1, 60 * 10**9),
    margin_ns=st.integers(0, 10**8),
    ratio=st.floats(0.0, 0.99),
    start_left_ns=st.integers(0, 10**8),
)
def test_a_budget_is_shared_out_in_order_whatever_its_size(
    budget_ns: int, margin_ns: int, ratio: float, start_left_ns: int
) -> None:
    """A replan can always be started, and the answer always leaves before the budget ends."""
    budget = Duration(budget_ns)
    times = times_of(START, budget, Duration(margin_ns), ratio, Duration(start_left_ns))
    assert times.arrived == START
    assert START <= times.start_by <= times.work_by <= times.answer_by <= START + budget
    assert times.work_by.until(START + budget).ns <= min(margin_ns, budget_ns * ratio + 1)


def test_the_margin_of_a_usual_budget_is_two_milliseconds() -> None:
    times = times_of(Instant(0), ms(50), ms(2), 0.2, ms(1.5))
    assert times.work_by == Instant(0) + ms(48)
    assert times.answer_by == Instant(0) + ms(49)
    assert times.start_by == Instant(0) + ms(46.5)
