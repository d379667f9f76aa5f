"""The clerk as a real process: it keeps, recalls, waits for a disk, and ends with its front."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time

import pytest
from tests.daemon.crew.keeping_changes import put
from tests.daemon.crew_harness import Crew

from bywayd.crew.channel import Channel, channel_pair
from bywayd.crew.clerk import Clerk
from bywayd.crew.keep_store import recall_begin


@pytest.fixture(scope="module")
def crew():
    hired = Crew()
    yield hired
    hired.end()


@pytest.fixture
def file(tmp_path):
    return tmp_path / "site.sqlite"


@pytest.fixture(scope="module")
def numbers():
    return iter(range(1, 1000))


@pytest.fixture
def spawn(crew, numbers):
    """Start clerks; all are ended."""
    spawned = []

    def spawning(file):
        number = next(numbers)
        spawned.append(number)
        crew.staff.spawn("clerk", number, {"do": "begin", "file": str(file)})
        return number

    yield spawning
    for number in spawned:
        crew.staff.kill("clerk", number, "the test is over")
        crew.lost("clerk", number)
    crew.heard.clear()


def told(change):
    change = {name: value for name, value in change.items() if name != "expires_s"}
    return {**change, "expires_ns": None}


def send(crew, clerk, task, *changes, **more):
    order = {"do": "keep", "task": task, "changes": [{**told(each), **more} for each in changes]}
    crew.staff.put("clerk", clerk, order)


def keep(crew, clerk, task, *changes, **more):
    send(crew, clerk, task, *changes, **more)
    kept = crew.hear("clerk", clerk, "kept")
    assert kept["task"] == task
    return kept


def recall(crew, clerk):
    """All that is kept: the ids of obstacles, and how many pieces it took to say them."""
    found, place, task = [], recall_begin, 100
    while place is not None:
        task += 1
        order = {"do": "recall", "task": task, "place": place}
        crew.staff.put("clerk", clerk, order)
        answer = crew.hear("clerk", clerk, "recalled")
        assert answer["task"] == task
        found += [(each["ids"], each["expires_in_s"]) for each in answer["changes"] if each["ids"]]
        place = answer["place"]
    return {ids[0]: left_s for ids, left_s in found}, task - 100


def test_the_clerk_does_not_know_the_compiler_or_the_planner():
    code = (
        "import sys, bywayd.crew.clerk\n"
        "print([name for name in ('numba', 'llvmlite', 'scipy', 'byway_planning')"
        " if name in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_what_is_kept_is_recalled_by_the_next_clerk_though_the_first_was_killed(crew, spawn, file):
    first = spawn(file)
    stock = crew.hear("clerk", first, "ready")
    kept = keep(crew, first, 1, put(a=(1.0, 1.0, 0.5)), put(b=(2.0, 2.0, 0.5)))
    assert kept["size_bytes"] >= stock["size_bytes"] > 0
    assert kept["patches"] == 0
    keep(crew, first, 2, put(**{f"o{i}": (1.0, 1.0, 0.5) for i in range(150)}))
    os.kill(crew.pid("clerk", first), signal.SIGKILL)
    assert "SIGKILL" in crew.lost("clerk", first)
    second = spawn(file)
    crew.hear("clerk", second, "ready")
    found, pieces = recall(crew, second)
    assert len(found) == 152
    assert pieces > 2
    assert file.stat().st_mode & 0o077 == 0


def test_what_expires_is_kept_on_the_wall_clock(crew, spawn, file):
    clerk = spawn(file)
    crew.hear("clerk", clerk, "ready")
    in_10_s = time.monotonic_ns() + 10_000_000_000
    keep(crew, clerk, 1, put(a=(1.0, 1.0, 0.5)), expires_ns=in_10_s)
    keep(crew, clerk, 2, put(b=(1.0, 1.0, 0.5)), expires_ns=time.monotonic_ns())
    found, _ = recall(crew, clerk)
    assert 5.0 < found["a"] <= 10.0
    assert found["b"] <= 0.0  # whoever put it there drops it; it is not ours to


def test_an_idle_clerk_answers_and_has_its_file_in_order(crew, spawn, file):
    clerk = spawn(file)
    crew.hear("clerk", clerk, "ready")
    crew.staff.put("clerk", clerk, {"do": "ping"})
    crew.hear("clerk", clerk, "alive")
    keep(crew, clerk, 1, put(a=(1.0, 1.0, 0.5)))
    before = file.stat().st_mtime_ns
    # The write-ahead log is copied into the file when there is nothing else to do.
    crew.until(lambda: file.stat().st_mtime_ns > before)


def test_a_file_that_is_not_ours_is_told_once_and_the_clerk_ends(crew, spawn, file):
    file.write_text("something else\n" * 500)
    clerk = spawn(file)
    assert "not a database" in crew.hear("clerk", clerk, "unfit")["text"]
    assert crew.lost("clerk", clerk) == "ended with status 0"


def test_a_row_that_was_altered_makes_the_file_unfit(crew, spawn, file):
    import sqlite3

    first = spawn(file)
    crew.hear("clerk", first, "ready")
    keep(crew, first, 1, put(a=(1.0, 1.0, 0.5)))
    crew.staff.kill("clerk", first, "to have the file to ourselves")
    crew.lost("clerk", first)
    with sqlite3.connect(file) as other:
        other.execute("UPDATE obstacles SET id = 'b'")
    other.close()
    second = spawn(file)
    crew.hear("clerk", second, "ready")
    crew.staff.put("clerk", second, {"do": "recall", "task": 1, "place": recall_begin})
    assert "damaged" in crew.hear("clerk", second, "unfit")["text"]
    crew.lost("clerk", second)


@pytest.fixture
def small_disk(tmp_path):
    """A disk of 200 kB, if we may make one."""
    folder = tmp_path / "disk"
    folder.mkdir()
    command = ["mount", "-t", "tmpfs", "-o", "size=200k", "byway-test", str(folder)]
    try:
        subprocess.run(command, check=True, capture_output=True)
    except (OSError, subprocess.CalledProcessError):
        pytest.skip("no right to mount a disk")
    yield folder
    subprocess.run(["umount", "-l", str(folder)], check=True)


def test_a_full_disk_is_waited_for_and_nothing_is_said_to_be_kept_meanwhile(
    crew, spawn, small_disk
):
    file, ballast = small_disk / "site.sqlite", small_disk / "ballast"
    clerk = spawn(file)
    crew.hear("clerk", clerk, "ready")
    keep(crew, clerk, 1, put(first=(1.0, 1.0, 0.5)))
    with pytest.raises(OSError, match="No space"):
        ballast.write_bytes(bytes(300_000))
    send(crew, clerk, 2, put(**{f"o{i}": (1.0, 1.0, 0.5) for i in range(100)}))
    for _ in range(2):
        assert "no room" in crew.hear("clerk", clerk, "hindered")["text"]
    assert crew.told("clerk", clerk, "kept") == []
    ballast.unlink()
    assert crew.hear("clerk", clerk, "kept")["task"] == 2
    found, _ = recall(crew, clerk)
    assert len(found) == 101


def test_a_clerk_that_is_dismissed_leaves_its_file_in_order(file):
    crew = Crew()
    crew.staff.spawn("clerk", 1, {"do": "begin", "file": str(file)})
    crew.hear("clerk", 1, "ready")
    keep(crew, 1, 1, put(a=(1.0, 1.0, 0.5)))
    pid = crew.pid("clerk", 1)
    crew.end()
    assert not os.path.exists(f"/proc/{pid}")
    assert sorted(each.name for each in file.parent.iterdir()) == [file.name]


def test_a_clerk_that_cannot_be_started_is_reported_lost(crew, numbers, monkeypatch):
    monkeypatch.setattr(sys, "executable", "/nowhere/python")
    number = next(numbers)
    crew.staff.spawn("clerk", number, {"do": "begin", "file": "/nowhere/site.sqlite"})
    assert crew.lost("clerk", number) == "was never there"


def test_a_long_commit_is_full_of_signs_of_life():
    ours, its = channel_pair()
    front, clerk = Channel(ours), Clerk(Channel(its))

    def work():
        for _ in range(5):
            time.sleep(0.11)
            yield

    clerk._with_signs_of_life(work())
    assert [message["say"] for message in front.take()] == ["alive"] * 3
    front.close()
    clerk._channel.close()
