"""The crew: who is starting, idle, busy, silent, lost, and what is done about it."""

from __future__ import annotations

from itertools import product
from typing import get_args

import pytest

from bywayd.core.instants import Duration, Instant
from bywayd.core.invariant import Defect
from bywayd.core.roster import MOVES, Manners, Move, Order, Phase, Roster

T0 = Instant(1_000_000_000_000)
MS = 1_000_000


def after(milliseconds: float) -> Instant:
    return Instant(T0.ns + round(milliseconds * MS))


MANNERS = Manners(
    start_time_max=Duration(1000 * MS),
    silence=Duration(100 * MS),
    grace=Duration(10 * MS),
    ping_every=Duration(200 * MS),
    backoff_first=Duration(50 * MS),
    backoff_max=Duration(300 * MS),
)


@pytest.fixture
def roster() -> Roster:
    """Two workers, 1 and 2, that have just become ready."""
    roster = Roster("worker", 2, MANNERS)
    assert roster.due(T0) == []
    roster.open(T0)
    assert roster.due(T0) == [Order("spawn", 1), Order("spawn", 2)]
    for number in (1, 2):
        assert roster.ready(number, T0)
    roster.check()
    return roster


def test_nobody_is_idle_before_anybody_was_ready() -> None:
    roster = Roster("worker", 1, MANNERS)
    roster.open(T0)
    roster.due(T0)
    assert roster.idle() is None
    assert not roster.was_ready
    roster.heard(1, after(1))
    assert roster.ready(1, after(2))
    assert roster.was_ready
    assert roster.idle() == 1


def test_the_last_to_become_idle_is_first_to_be_given_something(roster: Roster) -> None:
    assert roster.idle() == 2
    roster.give(2, 7, after(50), T0)
    assert roster.idle() == 1
    assert roster.idle_count == 1
    assert roster.done(2, 7, after(5))
    assert roster.idle() == 2
    roster.check()


def test_a_task_that_was_not_given_cannot_end(roster: Roster) -> None:
    assert not roster.done(1, 7, T0)
    roster.give(1, 7, None, T0)
    assert roster.done(1, 7, T0)
    assert not roster.done(1, 7, T0)


def test_who_owes_several_answers_is_busy_until_the_last(roster: Roster) -> None:
    roster.give(1, 7, None, T0)
    roster.give(1, 8, None, after(1))
    roster.done(1, 7, after(2))
    assert roster.phase(1) == "busy"
    roster.check()
    roster.done(1, 8, after(3))
    assert roster.phase(1) == "idle"


def test_who_is_past_its_deadline_by_more_than_the_grace_is_to_be_killed(roster: Roster) -> None:
    roster.give(1, 7, after(50), T0)
    assert roster.next_alarm() == after(60)
    assert roster.due(after(59)) == []
    assert roster.due(after(60)) == [Order("kill", 1, "past its deadline")]


def test_a_sign_of_life_does_not_move_a_deadline(roster: Roster) -> None:
    roster.give(1, 7, after(50), T0)
    roster.heard(1, after(55))
    assert roster.due(after(60)) == [Order("kill", 1, "past its deadline")]


def test_who_says_nothing_at_work_is_to_be_killed_long_before_its_deadline(roster: Roster) -> None:
    roster.give(1, 7, after(5000), T0)
    roster.heard(1, after(80))
    assert roster.due(after(100)) == []
    assert roster.due(after(180)) == [Order("kill", 1, "silent at work")]


def test_who_was_idle_for_long_has_time_to_speak_once_it_has_something_to_do(
    roster: Roster,
) -> None:
    roster.give(1, 7, None, after(150))
    assert roster.due(after(249)) == [Order("ping", 2)]
    roster.heard(2, after(249))
    assert roster.due(after(250)) == [Order("kill", 1, "silent at work")]


def test_the_idle_are_pinged_and_those_that_do_not_answer_are_to_be_killed(roster: Roster) -> None:
    assert roster.due(after(200)) == [Order("ping", 1), Order("ping", 2)]
    roster.heard(1, after(201))
    assert roster.due(after(300)) == [Order("kill", 2, "silent when pinged")]
    assert roster.due(after(401)) == [Order("ping", 1)]


def test_who_is_told_to_end_has_a_grace_from_now(roster: Roster) -> None:
    roster.give(1, 7, after(90), T0)
    roster.hurry(1, 7, after(20))
    assert roster.due(after(30)) == [Order("kill", 1, "past its deadline")]


def test_hurry_never_gives_more_time(roster: Roster) -> None:
    roster.give(1, 7, after(5), T0)
    roster.hurry(1, 7, after(8))
    assert roster.due(after(15)) == [Order("kill", 1, "past its deadline")]
    roster.give(2, 8, None, after(15))
    roster.hurry(2, 8, after(16))
    assert roster.due(after(26)) == [Order("kill", 2, "past its deadline")]


def test_who_does_not_start_in_time_is_to_be_killed() -> None:
    roster = Roster("worker", 1, MANNERS)
    roster.open(T0)
    roster.due(T0)
    assert roster.due(after(1000)) == [Order("kill", 1, "not ready in time")]


def test_what_the_killed_still_say_changes_nothing(roster: Roster) -> None:
    roster.give(1, 7, after(50), T0)
    roster.give(1, 8, after(50), T0)
    roster.kill(1, "why not")
    roster.heard(1, after(1))
    assert roster.ready(1, after(1))
    assert roster.done(1, 7, after(1))
    assert roster.done(1, 8, after(2))
    assert roster.phase(1) == "killed"
    roster.check()
    assert roster.lost(1, "killed", after(3)) == ()
    assert roster.phase(1) == "gone"


def test_who_is_lost_owes_what_it_was_given_and_is_replaced_at_once(roster: Roster) -> None:
    roster.give(1, 7, after(50), T0)
    assert roster.lost(1, "fell over", after(3)) == (7,)
    roster.check()
    assert roster.due(after(3)) == [Order("spawn", 3)]
    assert roster.statistics().lost_total == 1


def test_who_is_lost_again_and_again_without_having_done_anything_is_replaced_more_slowly() -> None:
    roster = Roster("worker", 1, MANNERS)
    roster.open(T0)
    now = T0
    pauses_ms = []
    for number in range(1, 8):
        assert roster.due(now) == [Order("spawn", number)]
        roster.lost(number, "stillborn", now)
        following = roster.next_alarm()
        assert following is not None
        pauses_ms.append(following.since(now).ns / MS)
        now = following
    assert pauses_ms == [0, 50, 100, 200, 300, 300, 300]
    roster.due(now)
    roster.ready(8, now)
    roster.give(8, 1, None, now)
    roster.done(8, 1, now)
    roster.lost(8, "after some work", now)
    assert roster.next_alarm() == now


def test_being_ready_twice_is_not_believed(roster: Roster) -> None:
    assert not roster.ready(1, after(1))
    assert roster.phase(1) == "idle"


def test_nobody_is_killed_or_lost_twice(roster: Roster) -> None:
    roster.kill(1, "first")
    with pytest.raises(Defect, match="no move for killed in killed"):
        roster.kill(1, "second")
    roster.lost(1, "gone", T0)
    with pytest.raises(Defect, match="was not lost before"):
        roster.lost(1, "gone again", T0)


@pytest.mark.parametrize(
    ("phase", "move"),
    [pair for pair in product(get_args(Phase), get_args(Move)) if pair not in MOVES],
)
def test_a_move_without_a_row_is_a_defect(roster: Roster, phase: Phase, move: Move) -> None:
    member = roster._members[1]
    member.phase = phase
    with pytest.raises(Defect, match=f"no move for {move} in {phase}"):
        roster._move(member, move)


def test_statistics_count_everybody() -> None:
    roster = Roster("worker", 4, MANNERS)
    roster.open(T0)
    roster.due(T0)
    for number in (1, 2, 3):
        roster.ready(number, T0)
    roster.give(1, 7, None, T0)
    roster.kill(2, "slow")
    roster.lost(4, "stillborn", T0)
    found = roster.statistics()
    assert (found.starting, found.idle, found.busy, found.killed, found.vacant) == (0, 1, 1, 1, 1)
    assert (found.spawned_total, found.killed_total, found.lost_total) == (4, 1, 1)
