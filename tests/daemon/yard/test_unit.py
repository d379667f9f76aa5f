"""A unit on its round: what it asks, when, and what it does with the answers."""

import math
from typing import Any

import pytest
from tests.daemon.yard.lines import CART, arc

from bywayd.yard import scene
from bywayd.yard import unit as unit_module
from bywayd.yard.claims import Ground, claim_here
from bywayd.yard.scene import Round, Station
from bywayd.yard.shapes import Mass, as_points, rectangle
from bywayd.yard.tracking import Line
from bywayd.yard.unit import Ask, Block, News, Pack, Reply, Unit

HERE, THERE = Station("here", (0.0, 0.0, 0.0)), Station("there", (20.0, 0.0, 0.0))
BACK = Station("back", (40.0, 0.0, 0.0))
DT_S = 0.02


class Run:
    """One unit, a clock, and the questions it has asked."""

    def __init__(self, rank: int = 0) -> None:
        self.ground = Ground()
        round_ = Round("cart-1", "cart", rank, HERE.pose, ((HERE, THERE), (THERE, BACK)))
        self.unit = Unit(round_, CART, self.ground, seed=1)
        self.now_s = 0.0

    def until_asked(self, most_s: float = 30.0) -> Ask:
        end_s = self.now_s + most_s
        while self.now_s < end_s:
            self.now_s += DT_S
            ask = self.unit.step(self.now_s, DT_S)
            if ask is not None:
                return ask
        raise AssertionError("nothing was asked")

    def wait(self, seconds: float) -> list[Ask]:
        asked = []
        for _ in range(round(seconds / DT_S)):
            self.now_s += DT_S
            ask = self.unit.step(self.now_s, DT_S)
            asked += [ask] if ask else []
        return asked

    def answer(self, ask: Ask, line: Line | None = None, cost: float = 0.0) -> None:
        kind = "not_found" if line is None else "route"
        self.unit.take(Reply(ask, kind, line, cost, "" if line is None else "g-1"), self.now_s)

    def answer_straight(self, ask: Ask, cost: float = 0.0) -> Line:
        line = arc(ask.start, 0.0, math.dist(ask.start[:2], ask.goal[:2]), ask.start_speed_mps)
        self.answer(ask, line, cost)
        return line

    def drive(self) -> Line:
        """Be on the way, guarded."""
        line = self.answer_straight(self.until_asked())
        self.wait(2.0)
        return line

    def hear(self, kind: Any, guard: str = "g-1", **more: Any) -> None:
        self.unit.hear(News("cart-1", kind, guard, **more))


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


# -- guards -----------------------------------------------------------------------------------

PACK = Block(12.0, "packs", "pack-1", "polygon")


def test_a_route_from_where_it_stands_is_guarded_already_and_others_are_to_be() -> None:
    run = Run()
    run.answer_straight(run.until_asked())
    assert (run.unit.guard, run.unit.wants_guard) == ("g-1", False)
    ask = run.until_asked()
    assert ask.goes_on_at_m is not None
    run.answer_straight(ask, cost=1.0)
    run.wait(1.0)
    assert (run.unit.guard, run.unit.wants_guard) == ("", True)
    run.hear("guarded", "g-2", line_number=run.unit.driver.line_number)
    assert (run.unit.guard, run.unit.wants_guard) == ("g-2", False)


def test_at_an_alert_it_stops_before_the_place_and_goes_on_when_it_is_cleared() -> None:
    run = Run()
    run.drive()
    run.hear("alert", block=PACK)
    assert run.unit.driver.blocked_at_m == pytest.approx(12.0 - unit_module.BLOCK_STOP_M)
    while run.unit.driver.held_since_s is None:
        run.wait(DT_S)
    assert 11.0 < run.unit.driver.at_m <= 11.6
    run.hear("cleared")
    run.wait(1.0)
    assert run.unit.driver.at_m > 11.7
    assert (run.unit.tally.alerts, run.unit.tally.cleared) == (1, 1)


def test_the_ground_of_another_vehicle_is_no_reason_to_stop() -> None:
    run = Run()
    run.drive()
    run.hear("alert", block=Block(12.0, "unit.cart-2", "ground-0", "polygon"))
    assert run.unit.driver.blocked_at_m == math.inf


def test_the_new_route_of_the_daemon_is_taken_over_at_its_place() -> None:
    run = Run()
    line = run.drive()
    run.hear("alert", block=PACK)
    from_m = run.unit.driver.at_m + 0.5
    new = arc(line.pose_at(from_m), 0.05, 15.0, line.speed_at(from_m))
    run.hear("rerouted", "g-2", was="g-1", line=new, from_m=from_m)
    # On its way there it goes on telling its progress by the old guard.
    assert run.unit.guard == "g-1"
    run.wait(1.0)
    assert run.unit.driver.line is new
    assert (run.unit.guard, run.unit.wants_guard) == ("g-2", False)
    assert run.unit.driver.blocked_at_m == math.inf
    assert (run.unit.tally.rerouted, run.unit.tally.rerouted_taken) == (1, 1)


def test_a_route_that_begins_where_it_can_stop_is_taken_over_from_a_stand() -> None:
    run = Run()
    line = run.drive()
    from_m = run.unit.driver.at_m + 2.5
    new = arc(line.pose_at(from_m), 0.2, 10.0, 0.0)
    run.hear("rerouted", "g-2", was="g-1", line=new, from_m=from_m)
    while run.unit.driver.line is line:
        run.wait(DT_S)
    assert run.unit.driver.line is new
    assert run.unit.driver.speed_mps < 0.05
    assert run.unit.driver.off_m_max < 0.01


@pytest.mark.parametrize("behind_m", [1.0, 2.0])
def test_a_new_route_that_comes_too_late_leaves_the_old_one_to_be_guarded(behind_m: float) -> None:
    run = Run()
    line = run.drive()
    at_m = run.unit.driver.at_m - behind_m
    run.hear("rerouted", "g-2", was="g-1", line=arc(line.pose_at(at_m), 0.1, 9.0), from_m=at_m)
    assert run.unit.driver.changes_at_m is None
    assert (run.unit.guard, run.unit.wants_guard) == ("", True)


def test_a_new_route_that_does_not_fit_leaves_the_old_one_to_be_guarded() -> None:
    run = Run()
    line = run.drive()
    from_m = run.unit.driver.at_m + 0.3
    x_m, y_m, turned_rad = line.pose_at(from_m)
    aside = arc((x_m, y_m + 1.0, turned_rad), 0.0, 9.0, 2.0)
    run.hear("rerouted", "g-2", was="g-1", line=aside, from_m=from_m)
    run.wait(0.5)
    assert run.unit.driver.line is line
    assert run.unit.tally.not_fitting == 1
    assert (run.unit.guard, run.unit.wants_guard) == ("", True)


def test_a_new_route_that_is_blocked_before_it_is_taken_over_has_to_be_guarded_anew() -> None:
    run = Run()
    line = run.drive()
    from_m = run.unit.driver.at_m + 0.5
    new = arc(line.pose_at(from_m), 0.05, 15.0, line.speed_at(from_m))
    run.hear("rerouted", "g-2", was="g-1", line=new, from_m=from_m)
    run.hear("rerouted", "g-3", was="g-2", line=new, from_m=3.0)
    run.wait(1.0)
    assert run.unit.driver.line is new
    assert (run.unit.guard, run.unit.wants_guard) == ("", True)


def test_without_a_new_route_it_asks_itself_at_once_and_again_from_where_it_stops() -> None:
    run = Run()
    run.drive()
    run.hear("alert", block=PACK)
    run.hear("reroute_failed")
    ask = run.until_asked(most_s=0.1)
    assert ask.goes_on_at_m is not None
    run.answer(ask)
    ask = run.until_asked()
    while ask.goes_on_at_m is not None:
        run.answer(ask)
        ask = run.until_asked()
    assert run.unit.driver.held_since_s is not None
    assert run.unit.tally.not_rerouted == 1


def test_news_of_other_guards_are_passed_over_and_early_ones_kept() -> None:
    run = Run()
    run.hear("alert", block=PACK)  # it stands
    ask = run.until_asked()
    run.answer_straight(ask)
    run.hear("alert", "g-0", block=PACK)
    assert run.unit.driver.blocked_at_m == math.inf
    run.wait(1.0)
    run.unit.guard = ""
    run.hear("alert", "g-7", block=PACK)
    run.hear("guarded", "g-7", line_number=run.unit.driver.line_number)
    assert run.unit.driver.blocked_at_m < 12.0
    run.hear("guarded", "g-8", line_number=99)
    assert run.unit.guard == "g-7"
    run.hear("guard_lost", "g-7")
    assert (run.unit.guard, run.unit.wants_guard) == ("", True)
    assert run.unit.tally.guards_lost == 1


def test_its_own_eyes_stop_it_whatever_the_daemon_says() -> None:
    run = Run()
    run.drive()
    run.unit.see([Pack(Mass("pallet-1", rectangle(14.0, 0.0, 1.0, 1.0)), math.inf, is_told=False)])
    run.hear("cleared")
    assert run.unit.driver.seen == "pallet-1"
    assert run.unit.driver.blocked_at_m < 12.5
    run.unit.see([])
    assert run.unit.driver.blocked_at_m == math.inf


# -- waiting ----------------------------------------------------------------------------------


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
    assert aside[0] in {station.pose for station in scene.ASIDE}
    assert run.unit.tally.made_way >= 1


def test_the_higher_rank_makes_way_later() -> None:
    def questions_before_making_way(rank: int) -> int:
        run = Run(rank)
        while run.unit.tally.made_way == 0:
            run.answer(run.until_asked())
        return run.unit.tally.asked

    assert questions_before_making_way(0) > questions_before_making_way(1)
    assert questions_before_making_way(1) > questions_before_making_way(2)
