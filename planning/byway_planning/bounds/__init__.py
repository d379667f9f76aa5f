"""Proven lower bounds of what any route costs; see `bound`."""

from byway_planning.bounds.bound import LowerBound, curve_bound, lower_bound
from byway_planning.bounds.outgrown import Outgrown, outgrown
from byway_planning.bounds.passing import passing_radius_m

__all__ = ["LowerBound", "Outgrown", "curve_bound", "lower_bound", "outgrown", "passing_radius_m"]
