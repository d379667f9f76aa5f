"""Outlines of vehicles in a plane, as drawings and the simulated yard need them."""

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

Points = npt.NDArray[np.float64]


def placed(outline_m: npt.ArrayLike, pose: Sequence[float]) -> Points:
    """Return an outline (n, 2) of the vehicle's frame at a pose x, y, heading on the site."""
    x_m, y_m, heading_rad = pose
    c, s = math.cos(heading_rad), math.sin(heading_rad)
    turned: Points = np.asarray(outline_m, np.float64) @ np.array([[c, s], [-s, c]])
    turned += (x_m, y_m)
    return turned


def disc_outline(radius_m: float, corners: int = 48) -> Points:
    """Return a polygon that stands for a disc around the origin in drawings."""
    turn_rad = np.arange(corners) * (2 * np.pi / corners)
    ring: Points = radius_m * np.column_stack((np.cos(turn_rad), np.sin(turn_rad)))
    return ring


def outline_of(vehicle: Mapping[str, Any]) -> Points:
    """Return the outline of a vehicle from its settings, as the daemon tells them."""
    if "radius_m" in vehicle:
        return disc_outline(float(vehicle["radius_m"]))
    return np.array(vehicle["footprint_m"], np.float64)
