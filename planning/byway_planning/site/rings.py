"""
Polygons with holes as one closed ring.

A hole is joined to its outline by a bridge: a line there and back again, inside the polygon. The
bridge encloses nothing, so which places are inside stays as it was (its two edges cancel each
other), and lies in the polygon, so no distance from outside becomes smaller. Whatever handles a
ring handles polygons with holes in this way.
"""

import math
from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel

Ring = npt.NDArray[np.float64]


def bridged(outline: Ring, holes: Sequence[Ring]) -> Ring:
    """
    Join holes to their outline.

    Args:
        outline: Shape (n, 2), counter-clockwise. holes: the same, clockwise; no ring touches
            another, and all holes lie inside the outline.

    Returns:
        One ring. The hole that reaches farthest to the right is joined first, each by the
        shortest line to a vertex that it can see (Eberly, Triangulation by ear clipping, 2008,
        takes a visible vertex likewise).
    """
    ring = outline
    waiting = sorted(holes, key=lambda hole: -float(hole[:, 0].max()))
    for i, hole in enumerate(waiting):
        others = waiting[i + 1 :]
        edges = [ring, hole, *others]
        a, b = _bridge(ring, hole, edges)
        around = np.roll(hole, -b, axis=0)
        ring = np.concatenate([ring[: a + 1], around, around[:1], ring[a:]])
    return np.ascontiguousarray(ring)


def _bridge(ring: Ring, hole: Ring, edges: Sequence[Ring]) -> tuple[int, int]:
    """Vertices of ring and hole, the nearest between which nothing lies."""
    starts = np.concatenate(edges)
    ends = np.concatenate([np.roll(each, -1, axis=0) for each in edges])
    for array in (starts, ends):
        array.flags.writeable = False
    squares = ((ring[:, None, :] - hole[None, :, :]) ** 2).sum(axis=2)
    for flat in np.argsort(squares, axis=None, kind="stable"):
        a, b = divmod(int(flat), len(hole))
        p, q = ring[a], hole[b]
        if sees_kernel(starts, ends, p[0], p[1], q[0], q[1]) and _leads_in(ring, a, q):
            return a, b
    raise AssertionError("a hole inside its outline can be reached")  # pragma: no cover


def _leads_in(ring: Ring, a: int, towards: Ring) -> bool:
    """Does a line from a vertex begin inside the ring? Bridges make some corners twice."""
    before, at, after = ring[a - 1], ring[a], ring[(a + 1) % len(ring)]
    out, back, line = after - at, before - at, towards - at
    turn = math.atan2(_cross(out, line), float(out @ line)) % (2.0 * math.pi)
    return 0.0 < turn < math.atan2(_cross(out, back), float(out @ back)) % (2.0 * math.pi)


def _cross(a: Ring, b: Ring) -> float:
    return float(a[0] * b[1] - a[1] * b[0])


@kernel("rf8[:, ::1]", "rf8[:, ::1]", "f8", "f8", "f8", "f8")
def sees_kernel(starts: Ring, ends: Ring, px: float, py: float, qx: float, qy: float) -> bool:
    """Does nothing lie between two points? Edges that end at one of them are in nobody's way."""
    for i in range(starts.shape[0]):
        ax, ay, bx, by = starts[i, 0], starts[i, 1], ends[i, 0], ends[i, 1]
        at_a = (ax == px and ay == py) or (ax == qx and ay == qy)
        at_b = (bx == px and by == py) or (bx == qx and by == qy)
        one = (bx - ax) * (py - ay) - (by - ay) * (px - ax)
        two = (bx - ax) * (qy - ay) - (by - ay) * (qx - ax)
        three = (qx - px) * (ay - py) - (qy - py) * (ax - px)
        four = (qx - px) * (by - py) - (qy - py) * (bx - px)
        if at_a and at_b:
            continue
        if at_a or at_b:
            # The other end on the line between the points would be in the way.
            far = four if at_a else three
            x, y = (bx, by) if at_a else (ax, ay)
            within = (x - px) * (x - qx) + (y - py) * (y - qy) < 0.0
            if far == 0.0 and within:
                return False
            continue
        if one * two <= 0.0 and three * four <= 0.0:
            if one == 0.0 and two == 0.0:  # on one line: beside each other, or over each other?
                if max(ax, bx) < min(px, qx) or min(ax, bx) > max(px, qx):
                    continue
                if max(ay, by) < min(py, qy) or min(ay, by) > max(py, qy):
                    continue
            return False
    return True


def split(ring: Ring) -> list[Ring]:
    """
    Take the bridges out again.

    Returns:
        The outline, then the holes; the ring itself where there are none. In a ring without
        bridges no vertex is there twice.
    """
    found: list[Ring] = []
    stack: list[tuple[float, float]] = []
    places: dict[tuple[float, float], int] = {}
    for x, y in [*map(tuple, ring.tolist())]:
        at = places.get((x, y))
        if at is None:
            places[x, y] = len(stack)
            stack.append((x, y))
            continue
        loop = stack[at:]
        for corner in stack[at + 1 :]:
            del places[corner]
        del stack[at + 1 :]
        if len(loop) > 2:
            found.append(np.array(loop))
    return [np.array(stack), *found]
