"""
How a route has to begin, when it cannot begin freely.

Two reasons: the vehicle moves, and keeps its gear until it could stop; or it stands nearer to an
obstacle than its hard clearance (sensor noise, a dock), and may only get out of there. Both are
answered with short opening motions from which the search then goes on.
"""

import math
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning.collision import CONTACT_M, exact_excess, pose_excess
from byway_planning.curves.word import advance
from byway_planning.kernel import kernel
from byway_planning.motion import motion_reach
from byway_planning.profile import stopping_distance_m
from byway_planning.site.scene import Scene
from byway_planning.vehicles.body import CAR, DISC, Body, Limits
from byway_planning.vehicles.footprint import shrunk

Floats = npt.NDArray[np.float64]

#: An opening ends this much outside the hard clearance, so that the search has room to turn.
ROOM_M: Final = 0.01
STEP_M: Final = 0.01
#: A clearance that grows may shrink by less than this between two steps (rounding).
ROUNDING_M: Final = 1e-7


@kernel(Scene, Body, Body, "f8", "rf8[::1]", "f8", "f8", "f8")
def leave_kernel(
    scene: Scene,
    body: Body,
    core: Body,
    overlap: float,
    pose: Floats,
    curvature: float,
    sign: float,
    longest: float,
) -> float:
    """
    How far to drive along an arc until the hard clearance is kept, or -1.

    Args:
        core: The body drawn in by `overlap`, without clearance: its distance, less the
            overlap, is the signed distance of the body, which must not fall on the way.
    """
    # Exact: a bound that is only right in being below the distance would seem to fall.
    enough = overlap + body.clearance_m + CONTACT_M + ROOM_M
    best = -math.inf
    at = 0.0
    while at <= longest:
        x, y, h = advance(pose[0], pose[1], pose[2], curvature, sign * at)
        signed = exact_excess(scene, core, x, y, h, enough) - overlap
        if signed <= -overlap or signed < best - ROUNDING_M:
            return -1.0
        best = max(best, signed)
        if pose_excess(scene, body, x, y, h) > CONTACT_M + ROOM_M:
            return at
        at += STEP_M
    return -1.0


@kernel(Scene, Body, "rf8[::1]", "f8", "f8")
def reach_kernel(scene: Scene, body: Body, pose: Floats, curvature: float, length: float) -> float:
    """`motion_reach` from a pose."""
    return float(motion_reach(scene, body, pose[0], pose[1], pose[2], curvature, length))


def _curvatures(body: Body, most: float = math.inf) -> list[float]:
    if body.kind == DISC:
        return [0.0]
    k = min(1.0 / body.turn_radius_m, most)
    return [0.0, 0.5 * k, -0.5 * k, k, -k]


def leaving(
    scene: Scene, body: Body, pose: Floats, overlap_m: float, *, backward: bool = False
) -> list[Floats]:
    """
    Return opening paths (1, 5) out of a place that is too near to obstacles, shortest first.

    Args:
        overlap_m: How deep the body may overlap at the start.
        backward: The motions will be driven the other way round, from their end to the pose.
    """
    core = _core_of(body, overlap_m)
    longest = 2.0 * (body.outer_radius_m + body.turn_radius_m + body.clearance_m)
    found: list[tuple[float, Floats]] = []
    headings = [float(pose[2])]
    if body.kind == DISC:
        headings = [i * math.pi / 8 for i in range(16)]
    for heading in headings:
        at = np.array([pose[0], pose[1], heading])
        at.flags.writeable = False
        for k in _curvatures(body):
            one_way = -1.0 if backward else 1.0
            for sign in (1.0, -1.0) if body.kind == CAR else (one_way,):
                length = float(leave_kernel(scene, body, core, overlap_m, at, k, sign, longest))
                if length > 0.0:
                    found.append((length, np.array([[*at, k, sign * length]])))
    return [path for _, path in sorted(found, key=lambda entry: entry[0])]


def _core_of(body: Body, overlap_m: float) -> Body:
    if overlap_m == 0.0:
        return body._replace(clearance_m=0.0)
    if body.kind == DISC:
        return body._replace(clearance_m=0.0, skin_m=body.skin_m - overlap_m)
    outline = np.ascontiguousarray(shrunk(body.outline_m, overlap_m), np.float64)
    outline.flags.writeable = False
    return body._replace(
        clearance_m=0.0, outline_m=outline, inner_radius_m=body.inner_radius_m - overlap_m
    )


def rolling(
    scene: Scene,
    body: Body,
    pose: Floats,
    speed_mps: float,
    curvature_per_m: float,
    limits: Limits,
    *,
    overlap_m: float | None = None,
) -> list[Floats]:
    """
    Return opening paths (1, 5) along which a moving vehicle could still stop.

    Args:
        speed_mps: Signed. curvature_per_m: the steering as it stands, tried first.
        limits: They give the distance in which it stops, and the bends it can take.
        overlap_m: Given when the vehicle is too near to an obstacle and has to get away from
            it on the same arc: how deep it may overlap at the start.
    """
    sign = 1.0 if speed_mps > 0.0 else -1.0
    found = []
    stop_m = stopping_distance_m(speed_mps, limits)
    tightest = limits.lateral_acceleration_mps2_max / speed_mps**2
    for k in dict.fromkeys([curvature_per_m, *_curvatures(body, tightest)]):
        if abs(k) > tightest:
            continue
        away_m, at = 0.0, pose
        if overlap_m is not None:
            core = _core_of(body, overlap_m)
            away_m = float(leave_kernel(scene, body, core, overlap_m, pose, k, sign, stop_m))
            if away_m < 0.0:
                continue
            at = end_of(np.array([[*pose, k, sign * away_m]]))
        rest_m = stop_m - away_m
        if reach_kernel(scene, body, at, k, sign * rest_m) >= rest_m:
            found.append(np.array([[*pose, k, sign * stop_m]]))
    return found


def end_of(path: Floats) -> Floats:
    """Return the pose (3,) at the end of a path."""
    x, y, h, k, length = (float(v) for v in path[-1])
    end = np.array(end_kernel(x, y, h, k, length))
    end.flags.writeable = False
    return end


def reversed_path(path: Floats, body: Body) -> Floats:
    """Return a path (1, 5) driven the other way round; a disc turns about instead."""
    x, y, heading = end_of(path)
    _, _, begin, k, length = path[0]
    if body.kind == DISC:
        return np.array([[x, y, begin + math.pi, 0.0, length]])
    return np.array([[x, y, heading, k, -length]])


@kernel("f8", "f8", "f8", "f8", "f8")
def end_kernel(
    x: float, y: float, heading: float, curvature: float, length: float
) -> tuple[float, float, float]:
    """`advance`, for callers outside the kernels."""
    return advance(x, y, heading, curvature, length)
