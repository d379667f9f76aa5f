"""
The vehicles of the benchmark.

Of our own invention, and different from those of the built-in settings on purpose: here a route
costs its length and no clearance is kept, so that costs can be compared with anybody's.
"""

from collections.abc import Mapping
from typing import Any, Final

from byway_planning import Car, Disc, ForwardCar, Vehicle

#: Cost is length.
_LENGTH_ONLY: Final[Mapping[str, Any]] = {"reverse_factor": 1.0, "direction_change_m": 0.0}


def _box(rear_m: float, front_m: float, width_m: float) -> list[tuple[float, float]]:
    half_m = 0.5 * width_m
    return [(-rear_m, -half_m), (front_m, -half_m), (front_m, half_m), (-rear_m, half_m)]


VEHICLES: Final[Mapping[str, Vehicle]] = {
    # short and nimble
    "shunter": Car(
        footprint_m=_box(0.7, 2.3, 1.5), turn_radius_m_min=2.8, clearance_m=0.0, **_LENGTH_ONLY
    ),
    # long, wide, with a long way from axle to axle
    "timber_truck": Car(
        footprint_m=_box(1.7, 5.5, 2.3),
        wheelbase_m=4.0,
        steer_rad_max=0.56,
        clearance_m=0.0,
        **_LENGTH_ONLY,
    ),
    # two forks make the outline concave
    "brick_fork": Car(
        footprint_m=[
            (-1.4, -1.0), (2.1, -1.0), (2.1, -0.6), (3.2, -0.6), (3.2, -0.35), (2.1, -0.35),
            (2.1, 0.35), (3.2, 0.35), (3.2, 0.6), (2.1, 0.6), (2.1, 1.0), (-1.4, 1.0),
        ],
        turn_radius_m_min=3.8,
        clearance_m=0.0,
        **_LENGTH_ONLY,
    ),
    # forward only
    "van": ForwardCar(footprint_m=_box(1.0, 3.3, 1.8), turn_radius_m_min=4.4, clearance_m=0.0),
    # turns on the spot
    "trolley": Disc(radius_m=0.6, clearance_m=0.0),
}  # fmt: skip

REVERSING: Final = ("shunter", "timber_truck", "brick_fork")
FORWARD: Final = ("van",)
EVERY: Final = (*REVERSING, *FORWARD, "trolley")
