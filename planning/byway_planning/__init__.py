"""
Planning for wheeled vehicles among obstacles: pure functions of their arguments.

No I/O, no threads, no clock (but `countdown`): time left comes in as a callable, randomness as
a seed. The same inputs give the same bits on one build and CPU type. `warm()` compiles all
kernels ahead; whatever is called without it compiles first and says so.
"""

from byway_planning import rehearsal as _rehearsal
from byway_planning.countdown import countdown
from byway_planning.kernel import warm
from byway_planning.outcome import Blockage, Outcome
from byway_planning.planner import plan
from byway_planning.route import ROUTE_TABLE, Leg, Route, make_route
from byway_planning.search.methods import METHODS
from byway_planning.search.sampling import SAMPLERS
from byway_planning.site import (
    DiscShape,
    LayerSettings,
    Memory,
    PolygonShape,
    Site,
    SiteError,
    SiteModel,
    SiteSettings,
    Snapshot,
)
from byway_planning.vehicles.models import Car, Disc, ForwardCar, Vehicle, vehicle_from_settings
from byway_planning.verify import verify

__all__ = [
    "METHODS",
    "ROUTE_TABLE",
    "SAMPLERS",
    "Blockage",
    "Car",
    "Disc",
    "DiscShape",
    "ForwardCar",
    "LayerSettings",
    "Leg",
    "Memory",
    "Outcome",
    "PolygonShape",
    "Route",
    "Site",
    "SiteError",
    "SiteModel",
    "SiteSettings",
    "Snapshot",
    "Vehicle",
    "countdown",
    "make_route",
    "plan",
    "vehicle_from_settings",
    "verify",
    "warm",
]

_ = _rehearsal  # imported for what it registers
