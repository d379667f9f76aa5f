"""
Time as a type: an instant of one monotonic clock, and a duration, both whole nanoseconds.

Instants can be subtracted, never added: a sum of two readings means nothing, and mixing up
"when" and "how long" is the usual way to get a deadline wrong. A duration is never negative, so
that time left is always asked for by a method that says what happens when none is left.
"""

from __future__ import annotations

from dataclasses import dataclass

from bywayd.core.invariant import invariant

#: Nanoseconds in a second.
SECOND_NS = 1_000_000_000


@dataclass(frozen=True, slots=True, order=True)
class Duration:
    """A length of time in whole nanoseconds, never negative."""

    ns: int

    def __post_init__(self) -> None:
        invariant(self.ns >= 0, "a duration is not negative")

    @classmethod
    def of_s(cls, seconds: float) -> Duration:
        """Return the duration nearest to so many seconds (finite, not negative)."""
        return cls(round(seconds * SECOND_NS))

    @property
    def s(self) -> float:
        """The same in seconds, for messages and people."""
        return self.ns / SECOND_NS

    def times(self, ratio: float) -> Duration:
        """Return this duration multiplied by a ratio that is not negative."""
        return Duration(round(self.ns * ratio))


@dataclass(frozen=True, slots=True, order=True)
class Instant:
    """A reading of the front's monotonic clock. The number alone means nothing."""

    ns: int

    def __add__(self, duration: Duration) -> Instant:
        return Instant(self.ns + duration.ns)

    def __sub__(self, duration: Duration) -> Instant:
        return Instant(self.ns - duration.ns)

    def since(self, earlier: Instant) -> Duration:
        """Return how long after `earlier` this is; a `Defect` if it is not after it."""
        return Duration(self.ns - earlier.ns)

    def until(self, later: Instant) -> Duration:
        """Return the time left until `later`: zero when that has passed."""
        return Duration(max(0, later.ns - self.ns))


#: No time at all.
NO_TIME = Duration(0)
