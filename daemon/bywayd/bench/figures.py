"""What the parts of the benchmark have in common: clocks, summaries, and what they find wrong."""

import math
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Any, Final

Figures = dict[str, Any]
Progress = Callable[[str], None]

MS: Final = 1e3
US: Final = 1e6


class CpuBudget:
    """
    Seconds of CPU of this process that are left, from the first reading on.

    CPU and not the wall clock: on a shared machine a planner that had to wait is not a slow one.
    """

    def __init__(self, seconds: float) -> None:
        self._seconds = seconds
        self._end_s: float | None = None
        self._is_over = False

    def __call__(self) -> float:
        now_s = time.process_time()
        if self._end_s is None:
            self._end_s = now_s + self._seconds
        return 0.0 if self._is_over else self._end_s - now_s

    def end(self, _better: object = None) -> None:
        """Nothing is left from now on; fits `on_better`."""
        self._is_over = True


def cpu_s(work: Callable[[], object]) -> float:
    """Return how many seconds of CPU something takes."""
    before_s = time.process_time()
    work()
    return time.process_time() - before_s


def wall_s(work: Callable[[], object]) -> float:
    """Return how many seconds something takes, waiting included."""
    before_s = time.perf_counter()
    work()
    return time.perf_counter() - before_s


def quantile(values: Sequence[float], share: float) -> float | None:
    """
    Return the value that this share of the values does not exceed (nearest rank).

    None for no values, and where it is infinite: JSON has no word for it.
    """
    if not values:
        return None
    found = sorted(values)[max(0, math.ceil(share * len(values)) - 1)]
    return found if math.isfinite(found) else None


def spread(values: Sequence[float], factor: float = 1.0) -> dict[str, float | None]:
    """Return p50, p90 and p99 of values, each times a factor."""
    scaled = [value * factor for value in values]
    return {name: quantile(scaled, q) for name, q in (("p50", 0.5), ("p90", 0.9), ("p99", 0.99))}


def ratio(one: float | None, other: float | None) -> float | None:
    """Return one / other where both are there."""
    return None if one is None or not other else one / other


@dataclass
class Findings:
    """What a run found wrong."""

    #: Promises that were broken: the run ends with a no.
    faults: list[str] = field(default_factory=list)
    #: What somebody should look at: nothing found in the time, routes that `verify` turned down.
    anomalies: list[str] = field(default_factory=list)

    def told(self) -> Figures:
        """Return both lists."""
        return {"faults": self.faults, "anomalies": self.anomalies}
