"""
A descriptor that becomes readable at an instant.

zmq counts timeouts in whole milliseconds, which is too coarse for the end of a budget: rounded
up, the answer is late, rounded down, the loop spins. The system's own timers are exact to some
50 microseconds and are waited for like everything else.
"""

import contextlib
import ctypes
import os
from typing import Final

_CLOCK_MONOTONIC: Final = 1
_TFD_NONBLOCK_CLOEXEC: Final = os.O_NONBLOCK | os.O_CLOEXEC
_TFD_TIMER_ABSTIME: Final = 1

_libc = ctypes.CDLL(None, use_errno=True)
#: struct itimerspec: interval (none) and instant, each in seconds and nanoseconds.
_Times = ctypes.c_long * 4


class Alarm:
    """One timer on the host's monotonic clock."""

    def __init__(self) -> None:
        self._descriptor = _checked(_libc.timerfd_create(_CLOCK_MONOTONIC, _TFD_NONBLOCK_CLOEXEC))

    def fileno(self) -> int:
        return self._descriptor

    def set(self, host_ns: int) -> None:
        """Become readable at this reading of the clock, at once if it has passed."""
        # All zero would switch the timer off.
        seconds, ns = divmod(max(host_ns, 1), 1_000_000_000)
        times = _Times(0, 0, seconds, ns)
        _checked(_libc.timerfd_settime(self._descriptor, _TFD_TIMER_ABSTIME, times, None))

    def clear(self) -> None:
        """Be no longer readable until set again."""
        _checked(_libc.timerfd_settime(self._descriptor, 0, _Times(0, 0, 0, 0), None))
        with contextlib.suppress(BlockingIOError):
            os.read(self._descriptor, 8)

    def close(self) -> None:
        os.close(self._descriptor)


def _checked(result: int) -> int:
    if result < 0:
        number = ctypes.get_errno()
        raise OSError(number, os.strerror(number))
    return result
