"""
What the crew can do, for real: the skills that the template imports and warms.

Only the template and its children import this; it is the one door from the daemon to
`byway_planning` and to the compiler behind it.
"""

import time
from typing import Final

from byway_planning import Car, Site
from byway_planning import plan as plan_route
from byway_planning import warm as warm_kernels
from bywayd.crew.planning import attach, check, plan, vehicle
from bywayd.crew.site_keeping import new_site, recover_site
from bywayd.crew.skills import Progress

__all__ = ["attach", "check", "new_site", "plan", "recover_site", "vehicle", "warm"]

#: What the first replan of a process costs more than the second, it costs here.
_rehearsal_s: Final = 0.02


def warm(progress: Progress) -> None:
    """Compile or load every kernel, then plan once, so that what is forked has done it before."""
    warm_kernels(progress)
    began_s = time.monotonic()
    tug = Car(
        footprint_m=((-0.6, -0.7), (2.2, -0.7), (2.2, 0.7), (-0.6, 0.7)), turn_radius_m_min=2.6
    )
    site = Site.from_shapes(
        {"post": [(9.0, -1.0), (10.0, -1.0), (10.0, 1.0), (9.0, 1.0)]},
        limits_m=(-20.0, -20.0, 40.0, 20.0),
    )
    plan_route(
        site,
        tug,
        (0.0, 0.0, 0.0),
        (18.0, 0.0, 3.0),
        time_left=lambda: began_s + _rehearsal_s - time.monotonic(),
        seed=1,
    )
