"""
Curves between two poses in an empty world: straight lines, Dubins, Reeds-Shepp.

Kernels for searches are in the modules; here are the checked functions for scripts.
"""

import math
from collections.abc import Callable, Sequence
from typing import NamedTuple

import numpy as np

from byway_planning.curves.steer import steer
from byway_planning.curves.word import SEGMENTS_MAX, Segments, advance
from byway_planning.kernel import kernel
from byway_planning.vehicles.body import CAR, DISC, FORWARD_CAR
from byway_planning.vehicles.models import Vehicle

__all__ = ["Curve", "Pose", "pose_at", "shortest_curve"]

Pose = tuple[float, float, float]

# interpreted: a script that asks for one pose should not wait for the compiler
_advance: Callable[[float, float, float, float, float], Pose] = getattr(advance, "py_func", advance)

_KINDS = {"car": CAR, "forward_car": FORWARD_CAR, "disc": DISC}


class Curve(NamedTuple):
    """A curve as segments: rows of curvature_per_m and signed length_m (negative: reverse)."""

    segments: Segments
    length_m: float
    cost_m: float


def shortest_curve(
    vehicle: Vehicle | str,
    start: Sequence[float],
    goal: Sequence[float],
    *,
    turn_radius_m: float = 0.0,
    reverse_factor: float = 1.0,
    direction_change_m: float = 0.0,
) -> Curve:
    """
    Return the cheapest curve between two poses in an empty world.

    Args:
        vehicle: A vehicle, which brings its turning radius and costs; or one of "car" (Reeds
            and Shepp 1990), "forward_car" (Dubins 1957), "disc" (straight), with the
            following given.
        start: x_m, y_m, heading_rad.
        goal: The same; a disc does not look at the headings.
        turn_radius_m: Least turning radius, above 0 except for a disc.
        reverse_factor: What a metre in reverse costs, in metres, at least 1.
        direction_change_m: What a change of direction costs, in metres, at least 0.

    Returns:
        Segments of shape (count, 2), none where the goal is the start; length; cost.

    Raises:
        ValueError: If a value is not finite or out of its range.
    """
    if isinstance(vehicle, str):
        kind = vehicle
    else:
        body = vehicle.body()
        kind, turn_radius_m = vehicle.model, body.turn_radius_m
        reverse_factor, direction_change_m = body.reverse_factor, body.direction_change_m
    if kind not in _KINDS:
        raise ValueError(f"the vehicle must be one of {', '.join(_KINDS)}, got {kind!r}")
    a = _checked_pose("start", start)
    b = _checked_pose("goal", goal)
    if kind != "disc" and not 0.0 < turn_radius_m < math.inf:
        raise ValueError(f"turn_radius_m must be above 0 for a {kind}, got {turn_radius_m}")
    if not 1.0 <= reverse_factor < math.inf:
        raise ValueError(f"reverse_factor must be at least 1, got {reverse_factor}")
    if not 0.0 <= direction_change_m < math.inf:
        raise ValueError(f"direction_change_m must be at least 0, got {direction_change_m}")
    out = np.zeros((SEGMENTS_MAX, 2))
    count, length_m, cost_m = _steer(
        _KINDS[kind],
        float(turn_radius_m),
        np.array([reverse_factor, direction_change_m], np.float64),
        np.array([a, b]),
        out,
    )
    return Curve(out[:count], length_m, cost_m)


def pose_at(start: Sequence[float], segments: Segments, at_m: float) -> Pose:
    """
    Return the pose after some metres of driving along a curve, heading not wrapped.

    Args:
        start: x_m, y_m, heading_rad where the curve begins.
        segments: Shape (n, 2): curvature_per_m, signed length_m.
        at_m: Metres driven, in [0, length of the curve].

    Raises:
        ValueError: If at_m lies outside the curve by more than a nanometre.
    """
    x, y, heading = _checked_pose("start", start)
    length_m = float(np.abs(segments[:, 1]).sum())
    if not -1e-9 <= at_m <= length_m + 1e-9:
        raise ValueError(f"at_m must be within 0 and {length_m}, got {at_m}")
    left_m = at_m
    for curvature, piece_m in segments:
        driven_m = min(abs(float(piece_m)), max(0.0, left_m))
        left_m -= driven_m
        signed_m = math.copysign(driven_m, float(piece_m))
        x, y, heading = _advance(x, y, heading, float(curvature), signed_m)
    return x, y, heading


def _checked_pose(name: str, pose: Sequence[float]) -> Pose:
    if len(pose) != 3 or not all(math.isfinite(value) for value in pose):
        raise ValueError(f"{name} must be three finite numbers x_m, y_m, heading_rad, got {pose}")
    return float(pose[0]), float(pose[1]), float(pose[2])


@kernel("i8", "f8", "f8[::1]", "f8[:, ::1]", "f8[:, ::1]")
def _steer(
    kind: int, radius_m: float, costs: Segments, ends: Segments, out: Segments
) -> tuple[int, float, float]:
    return steer(
        kind,
        radius_m,
        costs[0],
        costs[1],
        ends[0, 0],
        ends[0, 1],
        ends[0, 2],
        ends[1, 0],
        ends[1, 1],
        ends[1, 2],
        out,
    )
