"""
The independent check that every route passes before it leaves.

It shares no code with the search, its collision tests, its curves or the making of the table:
a mistake there is found here. `geometry` measures circular traces, `body` and `cells` a moving
body against obstacles, `motion` one stretch against everything, `drive` a whole table, `rows`
the rules of a table; `check` puts faults into words.
"""

from byway_planning.verify.check import (
    CLEARANCE_TOLD_M,
    Fault,
    Faults,
    Nearest,
    clearance_m,
    verify,
)

__all__ = ["CLEARANCE_TOLD_M", "Fault", "Faults", "Nearest", "clearance_m", "verify"]
