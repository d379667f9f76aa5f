"""Whatever ends a process of the crew, the front learns it once, and the others live on."""

import os
import signal
import time

import pytest
from tests.daemon.crew_harness import Crew


@pytest.fixture(scope="module")
def crew(tmp_path_factory):
    os.environ["STANDIN_ONCE"] = str(tmp_path_factory.mktemp("once") / "seen")
    hired = Crew()
    hired.surveyed = hired.spawn_surveyor(1)
    yield hired
    hired.end()


@pytest.mark.parametrize(
    ("number", "method", "how"),
    [(1, "killed", "killed by SIGKILL"), (2, "wild", "killed by SIGSEGV")],
)
def test_a_worker_that_dies_in_a_job_is_reported_with_the_reason(crew, number, method, how):
    crew.spawn_worker(number)
    crew.plan(number, number, crew.surveyed, method, 1.0)
    assert crew.lost("worker", number) == how
    assert ("worker", number) not in crew.staff.members


def test_what_a_lost_worker_had_said_is_heard_before_the_loss(crew):
    crew.spawn_worker(3)
    crew.plan(3, 3, crew.surveyed, "hang_with_a_route", 1.0)
    time.sleep(0.05)  # the route is on its way; nobody has read it
    crew.staff.kill("worker", 3, "silent too long")
    time.sleep(0.05)
    order: list[str] = []
    crew.until(lambda: crew.losses and crew.losses[-1][1] == 3)
    order = [m["say"] for r, n, m in crew.heard if (r, n) == ("worker", 3)]
    assert order[-1] == "better"
    assert crew.losses[-1] == ("worker", 3, "silent too long (killed by SIGKILL)")


@pytest.mark.parametrize(("number", "method"), [(4, "hang"), (5, "stopped")])
def test_a_worker_that_hangs_can_be_killed_and_replaced_at_once(crew, number, method):
    crew.spawn_worker(number)
    crew.plan(number, number, crew.surveyed, method, 1.0)
    time.sleep(0.02)  # by now it is at it
    asked_s = time.monotonic()
    crew.staff.kill("worker", number, "endless")
    crew.lost("worker", number)
    crew.spawn_worker(number + 100)
    # 20 to 30 ms on an idle machine; the bound is for a busy one.
    assert time.monotonic() - asked_s < 1.0


def test_a_worker_that_is_killed_before_its_number_is_known_is_killed_all_the_same(crew):
    crew.staff.spawn("worker", 6)
    crew.staff.kill("worker", 6, "changed my mind")
    assert crew.lost("worker", 6).startswith("changed my mind")


def test_nonsense_on_a_channel_ends_the_process_that_sent_it(crew):
    crew.spawn_worker(7)
    pid = crew.pid("worker", 7)
    crew.plan(7, 7, crew.surveyed, "garbles", 1.0)
    assert "nonsense" in crew.lost("worker", 7)
    with pytest.raises(ProcessLookupError):
        os.kill(pid, 0)


def test_a_worker_that_reads_nothing_does_not_hold_up_the_front(crew):
    crew.spawn_worker(8)
    os.kill(crew.pid("worker", 8), signal.SIGSTOP)
    job = {"do": "plan", "ballast": bytes(1_000_000)}
    for _ in range(20):
        crew.staff.put("worker", 8, job)
    assert "does not read" in crew.lost("worker", 8)


def test_the_death_of_the_template_costs_nobody_else_their_life(crew):
    crew.spawn_worker(9)
    before = crew.staff.template_pid
    os.kill(before, signal.SIGKILL)
    crew.staff.spawn("worker", 10)  # perhaps lost with the template, never forgotten
    crew.until(lambda: crew.template_losses)
    assert crew.template_losses == ["killed by SIGKILL"]
    crew.until(lambda: crew.warm_count == 2)
    crew.staff.put("worker", 9, {"do": "ping"})
    crew.hear("worker", 9, "alive")
    crew.until(lambda: crew.told("worker", 10, "ready") or [r for r in crew.losses if r[1] == 10])
    crew.spawn_worker(11)


def test_what_the_crew_prints_is_read_by_the_front(crew):
    crew.spawn_worker(12)
    crew.plan(12, 12, crew.surveyed, "wild", 1.0)
    crew.lost("worker", 12)
    crew.until(lambda: any("Segmentation fault" in line for line in crew.said))


def test_a_template_that_cannot_start_is_given_up(monkeypatch):
    from bywayd.runtime.staff import TemplateFailed

    monkeypatch.setenv("STANDIN_WARM_FAILS", "1")
    hired = Crew()
    with pytest.raises(TemplateFailed, match="3 times"):
        hired.until(lambda: False)
    assert any("out of order" in line for line in hired.said)
    hired.end()
