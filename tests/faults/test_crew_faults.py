"""Processes of the crew are killed, stopped, hung; every replan is answered all the same."""

import os
import signal
import time

import pytest
from tests.daemon.daemon_harness import eventually, outcome_of, running

from byway import messages

#: The daemon answers within the budget (targets and counts are elsewhere); on a shared machine
#: this process may have to wait to see it.
SEEN_LATE_S = 0.25


@pytest.fixture(scope="module")
def served(tmp_path_factory):
    with running(tmp_path_factory.mktemp("daemon")) as pair:
        yield pair


@pytest.fixture
def daemon(served):
    return served[0]


@pytest.fixture
def peer(served):
    served[1].when_ready()
    return served[1]


@pytest.mark.parametrize("method", ["killed", "wild", "garbles"])
def test_a_replan_whose_worker_dies_is_tried_again(peer, method):
    answer = peer.replan(method, 1.0, seed=100)
    assert outcome_of(answer)["kind"] == "route"
    assert answer.attempts == 2
    assert answer.total_s < 1.0


def test_a_replan_whose_worker_is_stopped_is_tried_again(peer):
    answer = peer.replan("stopped", 3.0, seed=101)
    assert outcome_of(answer)["kind"] == "route"
    assert answer.attempts == 2
    assert answer.total_s < 3.0


@pytest.mark.parametrize(
    ("method", "kind", "cost"),
    [("hang", "not_found", None), ("hang_with_a_route", "route", 3.0)],
)
def test_an_endless_loop_does_not_keep_the_answer_back(peer, method, kind, cost):
    began_s = time.monotonic()
    answer = peer.replan(method, 0.1)
    assert time.monotonic() - began_s < 0.1 + SEEN_LATE_S
    outcome = outcome_of(answer)
    assert (outcome["kind"], outcome.get("cost")) == (kind, cost)


def test_a_hanging_worker_holds_up_nobody_else(peer):
    """With two workers, one that never comes back leaves one for all others."""
    hung = peer.send_replan("hang_with_a_route", 0.4, unit="hung")
    for _ in range(5):
        assert outcome_of(peer.replan("at_once", 0.2, unit="other"))["kind"] == "route"
    assert outcome_of(peer.answer_to(hung))["cost"] == 3.0


def test_workers_that_are_killed_while_idle_are_replaced(daemon, peer):
    before = {n: p for n, p in daemon.family().items() if n.startswith("byway-work")}
    for pid in before.values():
        os.kill(pid, signal.SIGKILL)
    answer = peer.replan("at_once", 2.0)
    assert outcome_of(answer)["statistics"]["process"] not in before.values()
    after = eventually(lambda: _workers(daemon, 2))
    assert not set(after) & set(before.values())


def _workers(daemon, count):
    found = [pid for name, pid in daemon.family().items() if name.startswith("byway-work")]
    return found if len(found) == count else None


def _surveyor(daemon):
    return next((p for n, p in daemon.family().items() if n.startswith("byway-surv")), None)


def test_an_idle_worker_that_is_stopped_is_found_out_and_replaced(daemon, peer):
    stopped = eventually(lambda: _workers(daemon, 2))[0]
    os.kill(stopped, signal.SIGSTOP)
    eventually(lambda: stopped not in daemon.family().values())
    assert outcome_of(peer.replan("at_once", 1.0))["kind"] == "route"


def test_a_surveyor_that_dies_loses_nothing_that_was_acknowledged(daemon, peer):
    first = peer.decided(peer.put("kerb", a=(1.0, 1.0, 0.5)))
    before = _surveyor(daemon)
    os.kill(before, signal.SIGKILL)
    eventually(lambda: _surveyor(daemon) not in (None, before))
    second = peer.decided(peer.put("stacks", b=(2.0, 2.0, 0.5)))
    assert isinstance(second, messages.Acknowledged)
    assert second.revision > first.revision
    site = peer.ask(messages.Site())
    assert {"kerb", "stacks"} <= {layer.layer for layer in site.layers}


def test_a_change_under_way_when_the_surveyor_dies_is_made_by_its_successor(daemon, peer):
    number = peer.put("slow-belt", a=(1.0, 1.0, 0.5))
    time.sleep(0.05)  # it takes 0.3 s
    os.kill(_surveyor(daemon), signal.SIGKILL)
    assert isinstance(peer.decided(number), messages.Acknowledged)
    assert "slow-belt" in {layer.layer for layer in peer.ask(messages.Site()).layers}


def test_a_change_that_no_surveyor_survives_is_refused_and_others_go_on(peer):
    deadly, harmless = peer.put("killer", a=(1.0, 1.0, 0.5)), peer.put("quay", a=(1.0, 1.0, 0.5))
    refused = peer.decided(deadly)
    assert isinstance(refused, messages.Refused)
    assert refused.code == "internal"
    assert isinstance(peer.decided(harmless), messages.Acknowledged)


def test_replans_go_on_while_there_is_no_surveyor(daemon, peer):
    peer.put("slow-lane", a=(1.0, 1.0, 0.5))
    os.kill(_surveyor(daemon), signal.SIGKILL)
    assert outcome_of(peer.replan("at_once", 0.5))["kind"] == "route"


def test_the_death_of_the_template_is_noticed_by_nobody_outside(daemon, peer):
    before = daemon.family()["byway-template"]
    os.kill(before, signal.SIGKILL)
    assert outcome_of(peer.replan("at_once", 0.5))["kind"] == "route"
    eventually(lambda: daemon.family().get("byway-template", before) != before)
    assert outcome_of(peer.replan("killed", 3.0, seed=102))["kind"] == "route"


def test_an_error_inside_the_planner_is_an_answer(peer):
    answer = peer.replan("raises", 0.5)
    assert isinstance(answer, messages.ErrorMessage)
    assert answer.code == "internal"
    assert peer.replan("senseless", 0.5).code == "bad_value"


def test_whatever_happened_each_loss_left_one_line_in_the_log(daemon, peer):
    lost = [(line["worker"], line["why"]) for line in daemon.log_lines("worker.lost")]
    assert len({number for number, _ in lost}) == len(lost)
