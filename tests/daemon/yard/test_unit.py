"""A unit on its round: what it asks, when, and what it does with the answers."""

import math

import pytest
from tests.daemon.yard.lines import CART, arc

from bywayd.yard import unit as unit_module
from bywayd.yard.claims import Ground, claim_here
from bywayd.yard.scene import Round, Station
from bywayd.yard.shapes import Mass, as_points, rectangle
from bywayd.yard.tracking import Line
from bywayd.yard.unit import Ask, Pack, Reply, Unit

HERE, THERE = Station("here", (0.0, 0.0, 0.0)), Station("there", (20.0, 0.0, 0.0))
BACK = Station("back", (40.0, 0.0, 0.0))
DT_S = 0.02


class Run:
    """One unit, a clock, and the questions it has asked."""

    def __init__(self, rank: int = 0) -> None:
        self.ground = Ground()
        round_ = Round("cart-1", "cart", rank, HERE.pose, ((HERE, THERE), (THERE, BACK)))
        self.unit = Unit(round_, CART, self.ground, seed=1)
        self.packs: list[Pack] = []
        self.now_s = 0.0

    def until_asked(self, most_s: float = 30.0) -> Ask:
        end_s = self.now_s + most_s
        while self.now_s < end_s:
            self.now_s += DT_S
            ask = self.unit.step(self.packs, self.now_s, DT_S)
            if ask is not None:
                return ask
        raise AssertionError("nothing was asked")

    def wait(self, seconds: float) -> list[Ask]:
        asked = []
        for _ in range(round(seconds / DT_S)):
            self.now_s += DT_S
            ask = self.unit.step(self.packs, self.now_s, DT_S)
            asked += [ask] if ask else []
        return asked

    def answer(self, ask: Ask, line: Line | None = None, cost: float = 0.0) -> None:
        kind = "not_found" if line is None else "route"
        self.unit.take(Reply(ask, kind, line, cost), self.packs, self.now_s)

    def answer_straight(self, ask: Ask, cost: float = 0.0) -> Line:
        line = arc(ask.start, 0.0, math.dist(ask.start[:2], ask.goal[:2]), ask.start_speed_mps)
        self.answer(ask, line, cost)
        return line


def test_a_loaded_unit_asks_for_the_way_to_where_it_unloads() -> None:
    ask = Run().until_asked()
    assert (ask.start, ask.goal) == (HERE.pose, THERE.pose)
    assert ask.goes_on_at_m is None
    assert ask.start_speed_mps == 0.0


def test_one_question_is_open_at_a_time() -> None:
    run = Run()
    run.until_asked()
    assert run.wait(3.0) == []


def test_arriving_loaded_is_a_delivery_and_the_round_goes_on() -> None:
    run = Run()
    run.answer_straight(run.until_asked())
    while run.unit.driver.line is not None:
        for ask in run.wait(DT_S):
            run.answer(ask)
    assert run.unit.tally.deliveries == 1
    assert run.unit.driver.pose == pytest.approx(THERE.pose, abs=0.01)
    ask = run.until_asked()
    # The next load is taken up where the last was put down; then it goes on loaded.
    run.answer_straight(ask)
    run.wait(0.1)
    assert run.unit.tally.deliveries == 1
    assert run.until_asked().goal == BACK.pose


def test_on_the_move_it_asks_from_the_state_at_the_hand_over() -> None:
    run = Run()
    run.answer_straight(run.until_asked())
    ask = run.until_asked()
    assert ask.goes_on_at_m is not None
    assert ask.start == pytest.approx((ask.goes_on_at_m, 0.0, 0.0))
    assert ask.goes_on_at_m > run.unit.driver.at_m
    assert 0.5 < ask.start_speed_mps <= 2.0


def test_a_route_that_saves_nothing_is_not_taken_over() -> None:
    run = Run()
    run.answer_straight(run.until_asked())
    old = run.unit.driver.line
    ask = run.until_asked()
    run.answer_straight(ask, cost=20.0 - (ask.goes_on_at_m or 0.0))
    run.wait(1.0)
    assert run.unit.driver.line is old
    assert run.unit.tally.not_needed == 1


def test_a_route_that_saves_something_is_taken_over_at_its_place() -> None:
    run = Run()
    run.answer_straight(run.until_asked())
    ask = run.until_asked()
    new = run.answer_straight(ask, cost=1.0)
    run.wait(1.0)
    assert run.unit.driver.line is new
    assert run.unit.tally.taken_over == 1


def test_an_answer_after_its_place_is_too_late() -> None:
    run = Run()
    run.answer_straight(run.until_asked())
    old = run.unit.driver.line
    ask = run.until_asked()
    run.wait(2.0)
    run.answer_straight(ask, cost=1.0)
    run.wait(0.1)
    assert run.unit.driver.line is old
    assert run.unit.tally.too_late == 1


def test_a_new_pack_is_asked_about_at_once_and_an_old_one_is_not() -> None:
    run = Run()
    run.answer_straight(run.until_asked())
    run.answer_straight(run.until_asked(), cost=99.0)
    run.wait(unit_module.ASK_PAUSE_S)
    seen_s = run.now_s
    run.packs = [Pack(Mass("pack-1", rectangle(16.0, 0.0, 1.0, 1.0)), math.inf, math.inf)]
    run.unit.see(run.packs)
    assert run.unit.driver.blocked_at_m < 15.0
    ask = run.until_asked()
    assert run.now_s - seen_s < 0.1
    # A route from a question asked after the daemon knew the pack is not held up by it.
    run.packs = [Pack(run.packs[0].mass, ask.asked_s - 0.01, math.inf)]
    run.answer_straight(ask, cost=99.0)
    run.wait(0.6)
    assert run.unit.tally.taken_over == 1
    assert run.unit.driver.blocked_at_m == math.inf


def test_held_up_it_waits_by_rank_then_asks_from_where_it_stands() -> None:
    waited_s = []
    for rank in (0, 2):
        run = Run(rank)
        run.ground.take(
            "other",
            claim_here(as_points([(-1, -1), (1, -1), (1, 1), (-1, 1)]), (7.0, 0.0, 0.0), 0.0),
        )
        run.answer_straight(run.until_asked())
        while run.unit.driver.held_since_s is None:
            for ask in run.wait(DT_S):
                run.answer(ask)
        since_s = run.now_s
        ask = run.until_asked()
        assert ask.goes_on_at_m is None
        assert ask.start == run.unit.driver.pose
        waited_s.append(run.now_s - since_s)
        assert run.wait(1.0) == []
        assert run.unit.driver.pose == ask.start  # it stays where it asked from
    assert waited_s[0] > waited_s[1] > 0.3


def test_without_a_route_it_asks_again_and_in_the_end_makes_way() -> None:
    run = Run(rank=2)
    goals = []
    for _ in range(8):
        ask = run.until_asked()
        goals.append(ask.goal)
        run.answer(ask)
    assert goals[0] == THERE.pose
    aside = [goal for goal in goals if goal != THERE.pose]
    assert aside
    assert aside[0] in {station.pose for station in unit_module.ASIDE}
    assert run.unit.tally.made_way >= 1


def test_the_higher_rank_makes_way_later() -> None:
    def questions_before_making_way(rank: int) -> int:
        run = Run(rank)
        while run.unit.tally.made_way == 0:
            run.answer(run.until_asked())
        return run.unit.tally.asked

    assert questions_before_making_way(0) > questions_before_making_way(1)
    assert questions_before_making_way(1) > questions_before_making_way(2)
