"""Template, surveyor and workers as real processes, with a stand-in for planning."""

import os
import time
from pathlib import Path

import msgpack
import pytest
from tests.daemon.crew_harness import Crew, a_job

SURVEYOR, WORKER = 1, 1


@pytest.fixture(scope="module")
def crew(tmp_path_factory):
    os.environ["STANDIN_ONCE"] = str(tmp_path_factory.mktemp("once") / "seen")
    hired = Crew()
    yield hired
    hired.end()


@pytest.fixture(scope="module")
def published(crew):
    return crew.spawn_surveyor(SURVEYOR)


@pytest.fixture(scope="module")
def worker(crew):
    crew.spawn_worker(WORKER)
    return WORKER


@pytest.fixture(autouse=True)
def nothing_left_over(crew):
    yield
    crew.heard.clear()


def test_the_template_tells_its_progress_and_when_it_is_warm(crew, worker):
    assert crew.progress == [(0, 3, "clearance"), (1, 3, "floods"), (2, 3, "lattice")]
    assert crew.warm_count == 1


def test_the_first_snapshot_is_an_empty_site(crew, published):
    assert published["revision"] == 1
    assert published["memory_bytes"] > 0


def test_a_batch_is_visible_to_a_worker_once_it_is_published(crew, published, worker):
    before = crew.apply(SURVEYOR, 1, "stacks")
    after = crew.apply(SURVEYOR, 2, "stacks", "lidar")
    assert after["batch"] == 2
    assert after["revision"] == before["revision"] + 1
    assert after["obstacles"]["stacks"] - before["obstacles"]["stacks"] == 1
    seen = []
    for job, snapshot in ((10, before), (11, after), (12, before)):
        crew.plan(worker, job, snapshot, "at_once", 0.5)
        outcome = crew.hear("worker", worker, "done")["outcome"]
        seen.append(msgpack.unpackb(outcome["body"])["statistics"]["obstacles"])
    # An old snapshot stays what it was after a newer one has been made.
    assert seen[1] - seen[0] == 2
    assert seen[2] == seen[0]


def test_a_worker_sends_better_routes_and_ends_before_its_deadline(crew, published, worker):
    job = a_job(20, published, "auto", 0.06)
    crew.staff.put("worker", worker, {"do": "plan", **job})
    assert crew.hear("worker", worker, "better")["outcome"]["cost"] == 3.0
    done = crew.hear("worker", worker, "done")
    assert done["job"] == 20
    assert done["outcome"]["cost"] == 2.0
    # The machine may be busy; the worker itself stops some milliseconds early.
    assert time.monotonic_ns() < job["deadline_ns"] + 50_000_000


@pytest.mark.parametrize("how", ["finish", "cancel"])
def test_a_job_that_is_steered_ends_at_once(crew, published, worker, how):
    crew.plan(worker, 30, published, "auto", 30.0)
    crew.hear("worker", worker, "better")
    crew.staff.put("worker", worker, {"do": how, "job": 29})  # of another job: ignored
    crew.staff.put("worker", worker, {"do": "ping"})
    crew.hear("worker", worker, "alive")
    assert not crew.told("worker", worker, "done")
    crew.staff.put("worker", worker, {"do": how, "job": 30})
    assert crew.hear("worker", worker, "done", within_s=2.0)["job"] == 30


def test_a_busy_worker_gives_signs_of_life_and_answers_pings(crew, published, worker):
    crew.plan(worker, 40, published, "auto", 0.3)
    crew.hear("worker", worker, "done")
    assert len(crew.told("worker", worker, "alive")) >= 4


def test_a_job_that_fails_is_told_and_costs_only_itself(crew, published, worker):
    crew.plan(worker, 50, published, "raises", 0.5)
    failed = crew.hear("worker", worker, "failed")
    assert failed["code"] == "internal"
    assert "in the middle of a search" in failed["text"]
    assert "Traceback" in crew.hear("worker", worker, "trouble")["text"]
    crew.plan(worker, 51, published, "senseless", 0.5)
    failed = crew.hear("worker", worker, "failed")
    assert (failed["code"], failed["facts"]) == ("bad_value", {"field": "start"})
    crew.plan(worker, 52, published, "at_once", 0.5)
    assert crew.hear("worker", worker, "done")["job"] == 52


def test_a_route_is_checked_again_on_the_snapshot_that_is_named(crew, published, worker):
    blocked = crew.apply(SURVEYOR, 3, "block")
    for job, snapshot, good in ((60, published, True), (61, blocked, False)):
        message = {"do": "check", **a_job(job, snapshot, "auto", 0.5), "outcome": {"path": None}}
        crew.staff.put("worker", worker, message)
        assert crew.hear("worker", worker, "checked")["good"] is good


def test_a_refused_change_leaves_the_others_in_place(crew, published):
    before = crew.apply(SURVEYOR, 70, "stacks")
    after = crew.apply(SURVEYOR, 71, "stacks", "refused", "stacks", "full")
    assert [(r["index"], r["code"]) for r in after["refusals"]] == [
        (1, "bad_geometry"),
        (3, "too_large"),
    ]
    assert after["refusals"][0]["facts"] == {"layer": "refused"}
    assert after["obstacles"]["stacks"] == before["obstacles"]["stacks"] + 2


def test_a_change_that_breaks_the_site_is_undone_whole(crew, published):
    before = crew.apply(SURVEYOR, 80, "stacks")
    after = crew.apply(SURVEYOR, 81, "stacks", "broken", "stacks")
    assert [(r["index"], r["code"]) for r in after["refusals"]] == [(1, "internal")]
    assert "broken" not in after["obstacles"]
    assert after["obstacles"]["stacks"] == before["obstacles"]["stacks"] + 2
    assert "a mistake in the site" in crew.hear("surveyor", SURVEYOR, "trouble")["text"]


def test_a_batch_that_cannot_be_published_is_refused_whole(crew, published):
    before = crew.apply(SURVEYOR, 90, "stacks")
    after = crew.apply(SURVEYOR, 91, "stacks", "bursting")
    assert [r["code"] for r in after["refusals"]] == ["too_large", "too_large"]
    assert after["revision"] == before["revision"]
    assert after["obstacles"] == before["obstacles"]


def test_a_long_batch_is_no_reason_to_think_the_surveyor_dead(crew, published):
    crew.send_batch(SURVEYOR, 100, "slow", "slow")
    crew.hear("surveyor", SURVEYOR, "snapshot")
    assert len(crew.told("surveyor", SURVEYOR, "alive")) >= 2


def test_the_site_is_described_as_tables(crew, published):
    crew.apply(SURVEYOR, 110, "kerb")
    crew.staff.put("surveyor", SURVEYOR, {"do": "describe", "ticket": 7, "question": {}})
    site = crew.hear("surveyor", SURVEYOR, "site")
    assert site["ticket"] == 7
    assert {"layer": "kerb", "polygons": 1, "discs": 0} in site["fields"]["layers"]


def test_a_surveyor_that_dies_is_followed_by_one_that_knows_the_site(crew):
    crew.spawn_surveyor(2)
    held = crew.apply(2, 1, "stacks", "stacks")
    crew.send_batch(2, 2, "stacks", "killer")
    assert "SIGKILL" in crew.lost("surveyor", 2)
    back = crew.spawn_surveyor(3, held)
    assert (back["revision"], back["handle"]) == (held["revision"], held["handle"])
    after = crew.apply(3, 2, "stacks")
    assert after["obstacles"] == {"stacks": 3}
    assert after["revision"] == held["revision"] + 1
    crew.staff.kill("surveyor", 3, "enough")
    assert crew.lost("surveyor", 3) == "enough (killed by SIGKILL)"


def test_a_change_that_kills_the_surveyor_again_and_again_is_refused(crew):
    held = crew.spawn_surveyor(11)
    for number in (11, 12):
        crew.send_batch(number, 1, "stacks", "killer", "stacks")
        crew.lost("surveyor", number)
        crew.spawn_surveyor(number + 1, held)
    after = crew.apply(13, 1, "stacks", "killer", "stacks")
    assert [(r["index"], r["code"]) for r in after["refusals"]] == [(1, "internal")]
    assert after["obstacles"] == {"stacks": 2}
    # It is forgiven with the batch: the next one may have its place.
    assert crew.apply(13, 2, "stacks", "kerb")["refusals"] == []
    crew.staff.kill("surveyor", 13, "enough")


def test_workers_step_back_and_the_surveyor_does_not(crew, published, worker):
    assert _niceness(crew.pid("worker", worker)) == 10 + _niceness(os.getpid())
    assert _niceness(crew.pid("surveyor", SURVEYOR)) == _niceness(os.getpid())


def _niceness(pid: int) -> int:
    return os.getpriority(os.PRIO_PROCESS, pid)


def test_processes_can_be_told_apart_by_name(crew, published, worker):
    names = [
        Path(f"/proc/{pid}/comm").read_text().strip()
        for pid in (crew.staff.template_pid, crew.pid("worker", worker))
    ]
    assert names == ["byway-template", "byway-work-1"]


def test_the_end_of_the_front_is_the_only_signal_a_worker_heeds(crew, published, worker):
    """Ctrl-C and a service manager signal the whole group; open jobs must still be answered."""
    pid = crew.pid("worker", worker)
    for line in Path(f"/proc/{pid}/status").read_text().splitlines():
        if line.startswith("SigBlk"):
            blocked = int(line.split()[1], 16)
    assert all(blocked >> (number - 1) & 1 for number in (1, 2, 15))
