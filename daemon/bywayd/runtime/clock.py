"""The one clock of the front, and how its readings are told to other processes."""

import secrets
import time

from bywayd.core.instants import Instant

#: Up to four months: far more than two clocks of one host could ever differ by.
_origin_ns_max = 10**16


class SystemClock:
    """
    Monotonic time with an origin drawn at the start.

    Two clocks that are compared by mistake disagree by days, not by microseconds, so the first
    test that mixes them fails. `host_ns` is the way out of the process: the same instant on the
    system's own monotonic clock, which all processes of one host share.
    """

    def __init__(self) -> None:
        self._origin_ns = secrets.randbelow(_origin_ns_max)

    def now(self) -> Instant:
        return Instant(self._origin_ns + time.monotonic_ns())

    def host_ns(self, instant: Instant) -> int:
        """Return the reading of CLOCK_MONOTONIC at this instant, in nanoseconds."""
        return instant.ns - self._origin_ns

    @staticmethod
    def wall_s() -> float:
        """Return the wall clock, in seconds since 1970: for people, never for a deadline."""
        return time.time_ns() * 1e-9
