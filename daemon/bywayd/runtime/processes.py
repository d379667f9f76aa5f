"""Processes that are started afresh, not forked from the template."""

import os
import signal
import sys
from collections.abc import Sequence
from typing import Final

#: Signals that end the front in order; the crew must outlive them until the front says so.
signals_of_the_front: Final = frozenset({signal.SIGINT, signal.SIGTERM, signal.SIGHUP})

#: One thread each: the crew shares the cores by being processes.
single_threaded: Final = dict.fromkeys(
    ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS"), "1"
)


def start_module(module: str, arguments: Sequence[str], keep: int, said_to: int) -> int:
    """
    Start a module of ours in a fresh interpreter, and return its process number.

    Not a `Popen`: whoever holds the process waits for it through a pidfd, and nobody else may.

    Args:
        keep: A descriptor that it inherits under the same number; no other does.
        said_to: Where it writes what it has to say.
    """
    actions = [
        (os.POSIX_SPAWN_OPEN, 0, os.devnull, os.O_RDONLY, 0),
        (os.POSIX_SPAWN_DUP2, said_to, 1),
        (os.POSIX_SPAWN_DUP2, said_to, 2),
        # Onto itself: this takes the mark off that would close it.
        (os.POSIX_SPAWN_DUP2, keep, keep),
    ]
    return os.posix_spawn(
        sys.executable,
        [sys.executable, "-m", module, *arguments],
        {**os.environ, **single_threaded},
        file_actions=actions,
        setsigmask=signals_of_the_front,
    )
