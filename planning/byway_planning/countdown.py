"""The one clock of the planning room, for scripts and tests; a daemon passes its own."""

import time
from collections.abc import Callable


def countdown(seconds: float) -> Callable[[], float]:
    """
    Return a callable that tells how many seconds are left.

    It starts at its first reading, so that kernels which still had to be compiled
    do not use up the budget.

    Args:
        seconds: Length of the countdown, >= 0.

    Raises:
        ValueError: If `seconds` is negative or not finite.
    """
    if not 0.0 <= seconds < float("inf"):
        raise ValueError(f"a countdown needs a finite time >= 0 s, got {seconds}")
    deadline_s: float | None = None

    def time_left_s() -> float:
        nonlocal deadline_s
        now_s = time.perf_counter()
        if deadline_s is None:
            deadline_s = now_s + seconds
        return deadline_s - now_s

    return time_left_s
