"""
Distance of a moving body from one polygon, one disc, the limits of the site.

Boundaries alone are measured. Containment is looked at where a motion begins (`standing`):
a body that begins outside an obstacle, and whose boundary never meets the obstacle's, stays
outside. What is farther than `care` is passed over and counts as infinitely far.
"""

import math
from typing import Any, Final, NamedTuple

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import describe, kernel
from byway_planning.site.solids import Solids
from byway_planning.verify.geometry import (
    is_inside,
    obstacle_trace,
    segments_cross,
    trace_if_near,
)

Floats = npt.NDArray[np.float64]

#: What an overlap at a pose is reported as: below every real distance.
OVERLAP_M: Final = -1e9


class Hull(NamedTuple):
    """What is tested: a polygon (or a point) in the vehicle's frame, grown by a skin."""

    outline_m: Floats  # (n, 2) counter-clockwise
    skin_m: float
    reach_m: float  # no point of the body is farther from its origin


class Notes(NamedTuple):
    """Room for the work of one check, so that kernels allocate nothing."""

    traces: Floats  # (n, 4) ends of the traces of the outline's vertices
    polygons: npt.NDArray[np.int64]  # indexes of what is near the part being looked at
    discs: npt.NDArray[np.int64]
    rows: npt.NDArray[np.uint8]  # (2, columns) cells of two rows, from column -1 on
    runs: npt.NDArray[np.int64]  # (columns,) rows where runs of upright cell edges began, or -1


describe(Hull, "rf8[:, ::1]", "f8", "f8")
describe(Notes, "f8[:, ::1]", "i8[::1]", "i8[::1]", "u1[:, ::1]", "i8[::1]")


@kernel()
def swept_box(traces: Floats, n: int, bend: Any) -> Any:
    """Bounds, in the frame of the middle pose, of all that n vertices sweep."""
    x0, y0, x1, y1 = np.inf, np.inf, -np.inf, -np.inf
    bulge = 0.0
    for i in range(n):
        ax, ay, bx, by = traces[i, 0], traces[i, 1], traces[i, 2], traces[i, 3]
        x0, x1 = min(x0, ax, bx), max(x1, ax, bx)
        y0, y1 = min(y0, ay, by), max(y1, ay, by)
        bulge = max(bulge, abs(bx - ax) + abs(by - ay))
    bulge = 0.5 * bulge * bend[7] + 1e-9
    return x0 - bulge, y0 - bulge, x1 + bulge, y1 + bulge


@kernel()
def edge_distance(hull: Hull, traces: Floats, bend: Any, edge: Any, care: float) -> Any:
    """
    Distance of the moving outline from an edge: from its inside and its second end. In a ring
    the first end is the second one of the edge before.
    """
    outline = hull.outline_m
    n = outline.shape[0]
    best = np.inf
    for i in range(n):
        trace = (traces[i, 0], traces[i, 1], traces[i, 2], traces[i, 3])
        x, y = outline[i, 0], outline[i, 1]
        best = min(best, trace_if_near(bend, x, y, trace, edge, min(care, best)))
    if n > 1:
        best = min(best, point_distance(hull, bend, edge[2], edge[3], min(care, best)))
    return best


@kernel()
def point_distance(hull: Hull, bend: Any, x: float, y: float, care: float) -> Any:
    """Distance of a point of the ground from the moving outline."""
    outline = hull.outline_m
    n = outline.shape[0]
    trace = obstacle_trace(bend, x, y)
    best = np.inf
    j = n - 1
    for i in range(n):
        edge = (outline[j, 0], outline[j, 1], outline[i, 0], outline[i, 1])
        best = min(best, trace_if_near(bend, x, y, trace, edge, min(care, best)))
        j = i
    return best


@kernel()
def edge_overlaps(outline: Floats, edge: Any) -> bool:
    """Whether an edge begins inside the standing outline, or crosses it."""
    px, py, qx, qy = edge
    n = outline.shape[0]
    if n < 3:
        return False
    if is_inside(outline, 0, n, px, py):
        return True
    j = n - 1
    for i in range(n):
        if segments_cross(
            outline[j, 0], outline[j, 1], outline[i, 0], outline[i, 1], px, py, qx, qy
        ):
            return True
        j = i
    return False


@kernel()
def edge_if_near(
    hull: Hull,
    traces: Floats,
    bend: Any,
    box: Any,
    edge: Any,
    care: float,
    standing: bool,
) -> Any:
    """`edge_distance` less the skin; inf if the edge is clear of the box by `care`."""
    px, py, qx, qy = edge
    x0, y0, x1, y1 = box
    care += hull.skin_m
    if max(px, qx) < x0 - care or min(px, qx) > x1 + care:
        return np.inf
    if max(py, qy) < y0 - care or min(py, qy) > y1 + care:
        return np.inf
    if standing and edge_overlaps(hull.outline_m, edge):
        return OVERLAP_M
    return edge_distance(hull, traces, bend, edge, care) - hull.skin_m


@kernel()
def polygon_distance(
    solids: Solids, p: int, hull: Hull, traces: Floats, place: Any, care: float, standing: bool
) -> float:
    """Distance of the moving body from polygon p; inf if it is clear of it by `care`."""
    bend, box, x, y, c, s = place
    first, last = solids.starts[p], solids.starts[p + 1]
    if standing:
        a, b = hull.outline_m[0, 0], hull.outline_m[0, 1]
        if is_inside(solids.vertices_m, first, last, x + c * a - s * b, y + s * a + c * b):
            return OVERLAP_M
    best = np.inf
    dx, dy = solids.vertices_m[last - 1, 0] - x, solids.vertices_m[last - 1, 1] - y
    px, py = c * dx + s * dy, c * dy - s * dx
    for i in range(first, last):
        dx, dy = solids.vertices_m[i, 0] - x, solids.vertices_m[i, 1] - y
        qx, qy = c * dx + s * dy, c * dy - s * dx
        edge = (px, py, qx, qy)
        near = min(care, best)
        best = min(best, edge_if_near(hull, traces, bend, box, edge, near, standing))
        px, py = qx, qy
    return best


@kernel()
def disc_distance(
    solids: Solids, d: int, hull: Hull, place: Any, care: float, standing: bool
) -> Any:
    """Distance of the moving body from disc d."""
    bend, _, x, y, c, s = place
    dx, dy = solids.discs_m[d, 0] - x, solids.discs_m[d, 1] - y
    px, py = c * dx + s * dy, c * dy - s * dx
    n = hull.outline_m.shape[0]
    if standing and n > 2 and is_inside(hull.outline_m, 0, n, px, py):
        return OVERLAP_M
    thick = solids.discs_m[d, 2] + hull.skin_m
    return point_distance(hull, bend, px, py, care + thick) - thick


@kernel()
def limits_distance(solids: Solids, hull: Hull, traces: Floats, place: Any) -> float:
    """Distance of the moving body from the limits of the site; negative outside."""
    bend, _, x, y, c, s = place
    curved, cy, cos_half = bend[0], bend[1], bend[2]
    best = np.inf
    for side in range(4):
        # (gx, gy): the outward direction of this side in the frame of the middle pose
        if side == 0:
            gx, gy, room = -c, s, x - solids.x_m_min
        elif side == 1:
            gx, gy, room = c, -s, solids.x_m_max - x
        elif side == 2:
            gx, gy, room = -s, -c, y - solids.y_m_min
        else:
            gx, gy, room = s, c, solids.y_m_max - y
        for i in range(hull.outline_m.shape[0]):
            out = max(gx * traces[i, 0] + gy * traces[i, 1], gx * traces[i, 2] + gy * traces[i, 3])
            if curved:
                ux, uy = hull.outline_m[i, 0], hull.outline_m[i, 1] - cy
                radius = math.sqrt(ux * ux + uy * uy)
                if gx * ux + gy * uy >= radius * cos_half:
                    out = max(out, gy * cy + radius)
            best = min(best, room - out - bend[3])
    return best - hull.skin_m
