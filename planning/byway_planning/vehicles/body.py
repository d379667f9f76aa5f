"""What the kernels know of a vehicle: its outline and costs, and its limits in time."""

from typing import Final, NamedTuple

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import describe

CAR: Final = 0
FORWARD_CAR: Final = 1
DISC: Final = 2


class Body(NamedTuple):
    """
    Shape and geometric costs of a vehicle, in its own frame (x forward, y left).

    The body is the polygon `outline_m`, grown by `skin_m` (a disc is a single point with its
    radius as skin; every other vehicle has skin 0). All arrays are read-only.
    """

    kind: int  # CAR, FORWARD_CAR or DISC
    turn_radius_m: float  # least turning radius; 0 for a disc
    outline_m: npt.NDArray[np.float64]  # (n, 2) counter-clockwise, n >= 1
    skin_m: float
    cover_m: npt.NDArray[np.float64]  # (k, 3) x, y, radius: discs that together cover the body
    outer_x_m: float  # one disc around the body: centre and radius
    outer_y_m: float
    outer_radius_m: float
    inner_x_m: float  # the largest disc inside the body
    inner_y_m: float
    inner_radius_m: float
    clearance_m: float  # hard clearance, kept around the body everywhere
    reverse_factor: float  # a metre in reverse costs this many metres, >= 1
    direction_change_m: float  # a change of direction costs this many metres, >= 0


describe(
    Body,
    *("i8", "f8", "rf8[:, ::1]", "f8", "rf8[:, ::1]"),
    *("f8", "f8", "f8", "f8", "f8", "f8", "f8", "f8", "f8"),
)


class Limits(NamedTuple):
    """Limits of a vehicle in time."""

    speed_mps_max: float
    reverse_speed_mps_max: float
    acceleration_mps2_max: float
    deceleration_mps2_max: float
    lateral_acceleration_mps2_max: float


describe(Limits, "f8", "f8", "f8", "f8", "f8")
