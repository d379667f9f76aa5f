"""Processes die with their parent, are adopted by the front, and step back when told to."""

import os
import subprocess
import sys
from pathlib import Path

from tests.daemon.daemon_harness import ROOT, eventually

PARENT = """
import os, sys, time
from bywayd.crew.kinship import adopt_orphans, die_with
front = os.getpid()
adopt_orphans()
if os.fork() == 0:
    if os.fork() == 0:
        die_with(front)
        print(os.getpid(), os.getppid() == front, flush=True)
        while True:
            pass
    os._exit(0)
os.wait()
time.sleep(60)
"""


def _run(code: str) -> subprocess.Popen:
    return subprocess.Popen([sys.executable, "-c", code], stdout=subprocess.PIPE, cwd=ROOT)


def test_a_grandchild_is_adopted_and_dies_with_the_front_even_in_an_endless_loop():
    front = _run(PARENT)
    assert front.stdout is not None
    number, adopted = front.stdout.readline().split()
    assert adopted == b"True"
    front.kill()
    front.wait()
    front.stdout.close()
    eventually(lambda: not _runs(int(number)))


def _runs(pid: int) -> bool:
    try:
        return Path(f"/proc/{pid}/stat").read_text().rsplit(")", 1)[1].split()[0] != "Z"
    except OSError:
        return False


def test_who_has_lost_the_parent_already_ends_at_once():
    told = "from bywayd.crew.kinship import die_with; die_with(1, wait_s=0.01); print('lives')"
    process = _run(told)
    assert process.communicate()[0] == b""
    assert process.returncode == 1


def test_stepping_back_goes_as_far_as_the_system_lets_it():
    told = (
        "import os; from bywayd.crew.kinship import step_back;"
        "before = os.nice(0);"
        "step_back(7, [999]);"  # no such core: stays where it was
        "print(os.nice(0) - before, len(os.sched_getaffinity(0)));"
        "first = min(os.sched_getaffinity(0)); step_back(0, [first]);"
        "print(os.nice(0) - before, os.sched_getaffinity(0) == {first})"
    )
    process = _run(told)
    printed = process.communicate()[0].split()
    assert printed == [b"7", str(len(os.sched_getaffinity(0))).encode(), b"7", b"True"]


def test_a_name_is_cut_to_what_the_system_keeps():
    told = (
        "from bywayd.crew.kinship import call_oneself; call_oneself('byway-surveyor-12345');"
        "print(open('/proc/self/comm').read())"
    )
    assert _run(told).communicate()[0].strip() == b"byway-surveyor-"
