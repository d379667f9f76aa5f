"""The shapes an obstacle may have, checked before they touch a site."""

from dataclasses import dataclass, field
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel

#: Corners of one polygon; a footprint is tested against every edge near it, so this bounds a check.
VERTICES_MAX: Final = 4096
#: Beyond this a site's own coordinates lose micrometres, and squares of them much more.
COORDINATE_M_MAX: Final = 1e6
#: Bytes of an obstacle's id in UTF-8; ids travel inside snapshots in slots of this size.
ID_BYTES_MAX: Final = 64

Limits = tuple[float, float, float, float]


class SiteError(ValueError):
    """A change that a site refuses; the site is as it was before."""

    def __init__(self, code: str, text: str, **facts: Any) -> None:
        super().__init__(text)
        self.code = code
        self.text = text
        self.facts = facts


@dataclass(frozen=True, eq=False)
class PolygonShape:
    """
    A simple polygon, convex or not.

    Args:
        vertices_m: Shape (n, 2), 3 <= n, metres in the site's frame, either orientation, without
            repeating the first vertex at the end. Kept counter-clockwise and read-only.

    Raises:
        SiteError: too_few_vertices, too_large, not_finite or crossing_polygon.
    """

    vertices_m: npt.NDArray[np.float64]
    box_m: Limits = field(init=False)

    def __post_init__(self) -> None:
        try:
            ring = np.array(self.vertices_m, np.float64)
        except (TypeError, ValueError) as fault:
            raise SiteError("too_few_vertices", f"vertices are pairs of numbers: {fault}") from None
        if ring.ndim != 2 or ring.shape[1:] != (2,) or len(ring) < 3:
            raise SiteError(
                "too_few_vertices",
                f"a polygon needs at least 3 vertices of 2 numbers, got shape {ring.shape}",
            )
        if len(ring) > VERTICES_MAX:
            raise SiteError(
                "too_large", f"a polygon may have {VERTICES_MAX} vertices, got {len(ring)}"
            )
        if not np.isfinite(ring).all():
            row = int(np.nonzero(~np.isfinite(ring).all(axis=1))[0][0])
            raise SiteError("not_finite", f"vertex {row} is {ring[row].tolist()}", vertex=row)
        _check_near(float(np.abs(ring).max()))
        if len(ring) > 3 and (ring[0] == ring[-1]).all():
            ring = ring[:-1]
        area_m2 = signed_area_m2(ring)
        crossing = first_crossing(ring)
        if crossing is not None:
            i, j = crossing
            text = f"edge {i} meets edge {j}; the outline must not touch itself"
            same = np.flatnonzero((ring == np.roll(ring, -1, axis=0)).all(axis=1))
            if len(same):
                i, j = int(same[0]), (int(same[0]) + 1) % len(ring)
                text = f"vertices {i} and {j} are the same; leave one out"
            raise SiteError("crossing_polygon", text, edges=[i, j])
        if abs(area_m2) < 1e-8:
            raise SiteError("too_few_vertices", f"the polygon has no area ({area_m2:.3g} m2)")
        if area_m2 < 0.0:
            ring = ring[::-1]
        ring = np.ascontiguousarray(ring)
        ring.flags.writeable = False
        object.__setattr__(self, "vertices_m", ring)
        low, high = ring.min(axis=0), ring.max(axis=0)
        box = (float(low[0]), float(low[1]), float(high[0]), float(high[1]))
        object.__setattr__(self, "box_m", box)


@dataclass(frozen=True)
class DiscShape:
    """
    A disc: centre and radius > 0, metres in the site's frame.

    Raises:
        SiteError: not_finite, bad_radius or too_large.
    """

    x_m: float
    y_m: float
    radius_m: float

    def __post_init__(self) -> None:
        if not np.isfinite([self.x_m, self.y_m, self.radius_m]).all():
            raise SiteError("not_finite", f"disc {self.x_m, self.y_m, self.radius_m}")
        if self.radius_m <= 0.0:
            raise SiteError("bad_radius", f"a disc needs a radius > 0 m, got {self.radius_m}")
        _check_near(max(abs(self.x_m), abs(self.y_m), self.radius_m))

    @property
    def box_m(self) -> Limits:
        r = self.radius_m
        return (self.x_m - r, self.y_m - r, self.x_m + r, self.y_m + r)


Shape = PolygonShape | DiscShape


def _check_near(largest_m: float) -> None:
    if largest_m > COORDINATE_M_MAX:
        raise SiteError(
            "too_large",
            f"{largest_m:.6g} m is more than {COORDINATE_M_MAX:.0f} m from the origin of the site; "
            f"survey coordinates need origin_m",
        )


def signed_area_m2(ring: npt.NDArray[np.float64]) -> float:
    """Return the area of a ring (n, 2), positive when counter-clockwise (shoelace formula)."""
    # Around the first vertex, so that survey coordinates lose nothing.
    x, y = (ring[1:] - ring[0]).T
    return float(x[:-1] @ y[1:] - y[:-1] @ x[1:]) / 2.0


def first_crossing(ring: npt.NDArray[np.float64]) -> tuple[int, int] | None:
    """Return the first pair of edges of a ring that touch though they are not neighbours."""
    around = np.ascontiguousarray(ring - ring[0])
    around.flags.writeable = False
    i, j = crossing_kernel(around)
    return (i, j) if i >= 0 else None


@kernel("rf8[:, ::1]")
def crossing_kernel(ring: npt.NDArray[np.float64]) -> tuple[int, int]:
    """
    The first pair of edges of a ring (n, 2), n >= 3, that touch where they must not, or (-1, -1).

    Neighbours share a corner; they must not fold back along each other, nor have no length.
    Every pair is looked at: 4096 edges take some 10 ms, and obstacles mostly have a few dozen.
    """
    n = ring.shape[0]
    for i in range(n):
        k = i + 1 if i + 1 < n else 0
        ax, ay, bx, by = ring[i, 0], ring[i, 1], ring[k, 0], ring[k, 1]
        if ax == bx and ay == by:
            return i, k
        low_x, high_x = min(ax, bx), max(ax, bx)
        low_y, high_y = min(ay, by), max(ay, by)
        for j in range(i + 1, n):
            m = j + 1 if j + 1 < n else 0
            cx, cy, dx, dy = ring[j, 0], ring[j, 1], ring[m, 0], ring[m, 1]
            if min(cx, dx) > high_x or max(cx, dx) < low_x:
                continue
            if min(cy, dy) > high_y or max(cy, dy) < low_y:
                continue
            if j == k:
                if _folds_back(ax, ay, bx, by, dx, dy):
                    return i, j
            elif m == i:
                if _folds_back(cx, cy, ax, ay, bx, by):
                    return i, j
            else:
                one, two = _side(ax, ay, bx, by, cx, cy), _side(ax, ay, bx, by, dx, dy)
                three, four = _side(cx, cy, dx, dy, ax, ay), _side(cx, cy, dx, dy, bx, by)
                if one * two <= 0 and three * four <= 0:
                    return i, j
    return -1, -1


@kernel()
def _side(ax: float, ay: float, bx: float, by: float, px: float, py: float) -> int:
    """1 where p lies left of the line from a to b, -1 right of it, 0 on it."""
    cross = (bx - ax) * (py - ay) - (by - ay) * (px - ax)
    return 1 if cross > 0.0 else -1 if cross < 0.0 else 0


@kernel()
def _folds_back(ax: float, ay: float, bx: float, by: float, cx: float, cy: float) -> bool:
    """Does the way from a over b to c turn back on itself at b?"""
    dx, dy, ex, ey = bx - ax, by - ay, cx - bx, cy - by
    return bool(dx * ey - dy * ex == 0.0 and dx * ex + dy * ey < 0.0)
