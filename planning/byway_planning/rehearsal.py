"""
What is done once in a process behind the compiler, before the first answer.

The first call of a loaded kernel still takes milliseconds (its code is put in place then), so
short plans with each kind of vehicle are part of getting warm, and so are the tables that
searches read.
"""

import logging
from typing import Final

from byway_planning.kernel import rehearsal
from byway_planning.planner import plan
from byway_planning.search.lengths import lengths_of
from byway_planning.site.site import Site
from byway_planning.vehicles.models import Car, Disc, ForwardCar, Vehicle

_BOX: Final = [(-0.5, -0.5), (1.5, -0.5), (1.5, 0.5), (-0.5, 0.5)]
_WORK: Final = 3000


@rehearsal
def rehearse() -> None:
    """Fill the tables and call everything once."""
    log = logging.getLogger(__name__)
    for vehicle in _vehicles():
        lengths_of(vehicle.kind)
        site = Site.from_shapes(
            {"wall": [(6.0, 0.0), (7.0, 0.0), (7.0, 8.0), (6.0, 8.0)]},
            {"post": (3.0, 9.0, 0.3)},
            limits_m=(0.0, 0.0, 14.0, 14.0),
        )
        for method in ("auto", "rrt_connect"):
            outcome = plan(
                site,
                vehicle,
                (2.0, 3.0, 1.5),
                (11.0, 3.0, -1.5),
                time_left=lambda: 1.0,
                seed=1,
                method=method,
                work_max=_WORK,
            )
            log.debug("rehearsed %s with %s: %s", method, vehicle.model, outcome.kind)


def _vehicles() -> tuple[Vehicle, ...]:
    return (
        Car(footprint_m=_BOX, turn_radius_m_min=2.0),
        ForwardCar(footprint_m=_BOX, turn_radius_m_min=2.0),
        Disc(radius_m=0.5),
    )
