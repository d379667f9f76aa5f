"""
Who dies with whom, and who may disturb whom.

Every process of the crew is a child of the front (the template forks twice and the front
adopts the grandchild), and asks the system to be killed when its parent is gone. So nothing is
left behind after `kill -9` of the front, even where a kernel never comes back, and the death
of the template costs nobody else their life.
"""

import contextlib
import ctypes
import os
import signal
import time
from collections.abc import Sequence
from typing import Final

_PR_SET_PDEATHSIG: Final = 1
_PR_SET_NAME: Final = 15
_PR_SET_CHILD_SUBREAPER: Final = 36

_libc = ctypes.CDLL(None, use_errno=True)


def _prctl(option: int, argument: int | bytes) -> None:
    if _libc.prctl(option, argument, 0, 0, 0) != 0:
        number = ctypes.get_errno()
        raise OSError(number, os.strerror(number))


def adopt_orphans() -> None:
    """Become the parent of processes whose own parent ends: for the front."""
    _prctl(_PR_SET_CHILD_SUBREAPER, 1)


def die_with(parent_pid: int, wait_s: float = 1.0) -> None:
    """
    Be killed as soon as the parent is gone, and exit now if it is gone already.

    Args:
        parent_pid: The process that must be the parent.
        wait_s: How long to wait until it is (a grandchild is adopted when its parent exits).
    """
    give_up_s = time.monotonic() + wait_s
    while os.getppid() != parent_pid:
        if time.monotonic() > give_up_s:
            os._exit(1)
        time.sleep(0.0002)
    _prctl(_PR_SET_PDEATHSIG, signal.SIGKILL)
    # It may have died between the look and the request.
    if os.getppid() != parent_pid:
        os._exit(1)


def call_oneself(name: str) -> None:
    """Set the name that `ps` and `top` show, at most 15 bytes."""
    _prctl(_PR_SET_NAME, ctypes.create_string_buffer(name.encode()[:15]).raw)


def step_back(nice: int, cores: Sequence[int]) -> None:
    """
    Lower the priority and keep to some cores, as far as the system lets us.

    Args:
        nice: Added to the priority number; 0 leaves it.
        cores: Numbers of the allowed cores; empty leaves it.
    """
    if nice:
        os.nice(nice)
    if cores:
        # Cores that do not exist here are a mistake of the settings, not a reason to fail.
        with contextlib.suppress(OSError):
            os.sched_setaffinity(0, set(cores))
