"""
The benchmark: seeded questions to the planner, and a daemon of our own under load.

`measure` runs it, `tables` shows what came out, `bywayd.commands.bench` is the command. The cases
are of our own invention and always the same for the same salt; times of planning are CPU of this
process, those of the daemon are compared within one run.
"""

from bywayd.bench.report import tables
from bywayd.bench.run import PARTS, measure

__all__ = ["PARTS", "measure", "tables"]
