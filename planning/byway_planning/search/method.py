"""What a search method is, and how one ended."""

from typing import Final, Protocol

import numpy as np
import numpy.typing as npt

RUNNING: Final = 0  # goes on when advanced again
FOUND: Final = 1  # `path()` has a route; advancing on looks for another, where that makes sense
EXHAUSTED: Final = 2  # nothing is left to try, at this resolution
FULL: Final = 3  # out of the memory that it was given


class Method(Protocol):
    """
    A resumable search: all its state lives in arrays, time is the caller's business.

    What it does next depends on the work done and on nothing else, so a search that is
    advanced in other slices finds the same.
    """

    @property
    def name(self) -> str:
        """The published name."""
        ...

    def advance(self, iterations: int) -> int:
        """Do at most so much work; return RUNNING, FOUND, EXHAUSTED or FULL."""
        ...

    def path(self) -> npt.NDArray[np.float64]:
        """The path (n, 5) of the last FOUND."""
        ...

    @property
    def states_checked(self) -> int:
        """Poses tested for collision so far."""
        ...
