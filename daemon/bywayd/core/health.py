"""
Counts and times since the start, for the health record and for tests.

Histograms are on fixed bounds that suit answers between one millisecond and two and a half
seconds: an observation costs a search in eleven numbers, and records of different daemons can be
added up.
"""

from __future__ import annotations

from bisect import bisect_left
from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final, Literal, TypeAlias

from byway import messages
from bywayd.core.instants import Duration
from bywayd.core.invariant import invariant

#: Seconds. Each count is of what lies above the bound before and not above its own; the last
#: count, one more than there are bounds, is of everything above.
BOUNDS_S: Final = (0.001, 0.0025, 0.005, 0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1.0, 2.5)

#: What is timed.
Timed: TypeAlias = Literal[
    "answer_s",  # from the arrival of a replan to its answer
    "first_s",  # ... to its first verified route
    "waited_s",  # ... to the beginning of its first job
    "recheck_s",  # from sending a route to be checked on a newer revision to the verdict
    "alert_s",  # from the acknowledgement of a revision to an alert that it brought about
    "visible_s",  # from the arrival of a change to the snapshot that has it
    "kept_s",  # ... to its being on the disk, for durable layers
    "late_s",  # by how much an answer missed the end of its budget
]
TIMED: Final[tuple[Timed, ...]] = (
    "answer_s",
    "first_s",
    "waited_s",
    "recheck_s",
    "alert_s",
    "visible_s",
    "kept_s",
    "late_s",
)


class Histogram:
    """How often a time fell between two bounds."""

    __slots__ = ("counts", "sum_ns")

    def __init__(self) -> None:
        self.counts = [0] * (len(BOUNDS_S) + 1)
        self.sum_ns = 0

    def observe(self, duration: Duration) -> None:
        """Count one duration in."""
        self.counts[bisect_left(BOUNDS_S, duration.s)] += 1
        self.sum_ns += duration.ns

    @property
    def total(self) -> int:
        """How many were counted."""
        return sum(self.counts)

    def message(self) -> messages.Histogram:
        """Return it as it travels."""
        return messages.Histogram(
            bounds_s=list(BOUNDS_S), counts=list(self.counts), sum_s=Duration(self.sum_ns).s
        )


@dataclass(frozen=True, slots=True)
class HealthStatistics:
    """A copy of all counts, and how many durations were observed of each kind."""

    counts: Mapping[str, int]
    observed: Mapping[str, int]


class Health:
    """Owned by the front. Names of counts come from code, never from outside: they are bounded."""

    __slots__ = ("_counts", "_histograms")

    def __init__(self) -> None:
        self._counts: Counter[str] = Counter()
        self._histograms: dict[Timed, Histogram] = {timed: Histogram() for timed in TIMED}

    def count(self, name: str, by: int = 1) -> None:
        """Add to a count. The name says what, such as `replans_total` or `answers_route_total`."""
        self._counts[name] += by

    def observe(self, timed: Timed, duration: Duration) -> None:
        """Add to a histogram."""
        self._histograms[timed].observe(duration)

    def counts(self) -> dict[str, int]:
        """Return a copy of all counts."""
        return dict(self._counts)

    def histograms(self) -> dict[str, messages.Histogram]:
        """Return all histograms as they travel."""
        return {timed: histogram.message() for timed, histogram in self._histograms.items()}

    def statistics(self) -> HealthStatistics:
        """Return all counts, for tests."""
        observed = {str(timed): found.total for timed, found in self._histograms.items()}
        return HealthStatistics(self.counts(), observed)

    def check(self) -> None:
        """Stop with a `Defect` if memory is not bounded."""
        invariant(len(self._counts) <= 400, "names of counts come from code")
