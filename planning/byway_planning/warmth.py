"""Everything that is made once in a process, before the first answer."""

from collections.abc import Callable

from byway_planning import kernel
from byway_planning.search.lengths import lengths_of
from byway_planning.vehicles.body import CAR, DISC, FORWARD_CAR


def warm(progress: Callable[[int, int, str], None] | None = None) -> None:
    """
    Compile every kernel, or load it from the cache, and fill the tables that searches read.

    Args:
        progress: Called before each kernel with (done, total, name).
    """
    kernel.warm(progress)
    for kind in (CAR, FORWARD_CAR, DISC):
        lengths_of(kind)


def ensure_warm() -> None:
    """For scripts that did not call `warm`: do it now, and say so once."""
    kernel.ensure_warm()
    warm()
