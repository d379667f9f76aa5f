"""The shapes an obstacle may have, checked before they touch a site."""

import itertools
import math
from collections.abc import Sequence
from dataclasses import InitVar, dataclass, field
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel
from byway_planning.site.rings import bridged, split

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
    A polygon, convex or not, perhaps with holes.

    Args:
        vertices_m: Shape (n, 2), 3 <= n, metres in the site's frame, either orientation, without
            repeating the first vertex at the end. Kept counter-clockwise and read-only, with the
            holes joined to it (see `rings`).
        holes_m: Rings likewise, inside the outline; none touches another or the outline.

    Raises:
        SiteError: too_few_vertices, too_large, not_finite, crossing_polygon or bad_hole.
    """

    vertices_m: npt.NDArray[np.float64]
    holes_m: InitVar[Sequence[npt.ArrayLike]] = ()
    box_m: Limits = field(init=False)

    def __post_init__(self, holes_m: Sequence[npt.ArrayLike]) -> None:
        ring = _checked_ring(self.vertices_m)
        if len(holes_m):
            ring = _with_holes(ring, holes_m)
        self._keep(ring)

    def _keep(self, ring: npt.NDArray[np.float64]) -> None:
        ring = np.ascontiguousarray(ring)
        ring.flags.writeable = False
        object.__setattr__(self, "vertices_m", ring)
        low, high = ring.min(axis=0), ring.max(axis=0)
        box = (float(low[0]), float(low[1]), float(high[0]), float(high[1]))
        object.__setattr__(self, "box_m", box)

    @classmethod
    def trusted(cls, ring: npt.NDArray[np.float64]) -> "PolygonShape":
        """Return the shape of a copy of a ring that was checked: another shape's `vertices_m`."""
        shape = cls.__new__(cls)
        shape._keep(np.array(ring))
        return shape

    @property
    def rings_m(self) -> list[npt.NDArray[np.float64]]:
        """Outline and holes, a ring each."""
        return split(self.vertices_m)


def _checked_ring(vertices_m: npt.ArrayLike, what: str = "the outline") -> npt.NDArray[np.float64]:
    """Return a ring counter-clockwise, if it is one."""
    try:
        ring = np.array(vertices_m, np.float64)
    except (TypeError, ValueError) as fault:
        raise SiteError("too_few_vertices", f"vertices are pairs of numbers: {fault}") from None
    if ring.ndim != 2 or ring.shape[1:] != (2,) or len(ring) < 3:
        raise SiteError(
            "too_few_vertices",
            f"a polygon needs at least 3 vertices of 2 numbers, got shape {ring.shape}",
        )
    if len(ring) > VERTICES_MAX:
        raise SiteError("too_large", f"a polygon may have {VERTICES_MAX} vertices, got {len(ring)}")
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
        text = f"edge {i} meets edge {j}; {what} must not touch itself"
        same = np.flatnonzero((ring == np.roll(ring, -1, axis=0)).all(axis=1))
        if len(same):
            i, j = int(same[0]), (int(same[0]) + 1) % len(ring)
            text = f"vertices {i} and {j} are the same; leave one out"
        raise SiteError("crossing_polygon", text, edges=[i, j])
    if abs(area_m2) < 1e-8:
        raise SiteError("too_few_vertices", f"the polygon has no area ({area_m2:.3g} m2)")
    return ring if area_m2 > 0.0 else ring[::-1]


def _with_holes(
    outline: npt.NDArray[np.float64], holes_m: Sequence[npt.ArrayLike]
) -> npt.NDArray[np.float64]:
    holes = [_checked_ring(hole, f"hole {i}") for i, hole in enumerate(holes_m)]
    count = len(outline) + sum(len(hole) + 2 for hole in holes)
    if count > VERTICES_MAX:
        raise SiteError(
            "too_large",
            f"outline, holes and what joins them may have {VERTICES_MAX} vertices, got {count}",
        )
    rings = [outline, *holes]
    around = np.concatenate(rings) - outline[0]
    around.flags.writeable = False
    starts = np.concatenate([[0], np.cumsum([len(ring) for ring in rings])])
    i, j = rings_meet_kernel(around, starts)
    if i >= 0:
        names = ["the outline" if k == 0 else f"hole {k - 1}" for k in (i, j)]
        raise SiteError("bad_hole", f"{names[1]} touches {names[0]}", hole=j - 1)
    for k, hole in enumerate(holes):
        x, y = hole[0] - outline[0]
        inside = [
            bool(ring_holds_kernel(around, first, last, x, y))
            for first, last in itertools.pairwise(starts.tolist())
        ]
        if not inside[0]:
            raise SiteError("bad_hole", f"hole {k} lies outside the outline", hole=k)
        for n in range(1, len(rings)):
            if n != k + 1 and inside[n]:
                raise SiteError("bad_hole", f"hole {k} lies inside hole {n - 1}", hole=k)
    return bridged(outline, [np.ascontiguousarray(hole[::-1]) for hole in holes])


def box_shape(
    x_m: float, y_m: float, heading_rad: float, length_m: float, width_m: float
) -> PolygonShape:
    """
    Return an oriented box.

    Args:
        x_m, y_m: Its middle. heading_rad: of its length.
        length_m, width_m: Full sides, > 0.

    Raises:
        SiteError: not_finite, bad_size or too_large.
    """
    told = (x_m, y_m, heading_rad, length_m, width_m)
    if not all(map(math.isfinite, told)):
        raise SiteError("not_finite", f"a box is five finite numbers, got {told}")
    if length_m <= 0.0 or width_m <= 0.0:
        text = f"a box needs a length and a width > 0 m, got {length_m} and {width_m}"
        raise SiteError("bad_size", text)
    c, s = math.cos(heading_rad), math.sin(heading_rad)
    a, b = 0.5 * length_m, 0.5 * width_m
    corners = [(-a, -b), (a, -b), (a, b), (-a, b)]
    return PolygonShape(np.array([(x_m + c * u - s * v, y_m + s * u + c * v) for u, v in corners]))


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


@kernel("rf8[:, ::1]", "i8[::1]")
def rings_meet_kernel(
    vertices: npt.NDArray[np.float64], starts: npt.NDArray[np.int64]
) -> tuple[int, int]:
    """The first two of several rings that touch, or (-1, -1)."""
    rings = starts.shape[0] - 1
    for r in range(rings):
        for q in range(r + 1, rings):
            before = starts[r + 1] - 1
            for i in range(starts[r], starts[r + 1]):
                if _meets_ring(vertices, before, i, starts[q], starts[q + 1]):
                    return r, q
                before = i
    return -1, -1


@kernel()
def _meets_ring(
    vertices: npt.NDArray[np.float64], before: int, i: int, first: int, last: int
) -> bool:
    """Does the edge between two vertices touch the ring of others?"""
    ax, ay, bx, by = vertices[before, 0], vertices[before, 1], vertices[i, 0], vertices[i, 1]
    other = last - 1
    for j in range(first, last):
        cx, cy, dx, dy = vertices[other, 0], vertices[other, 1], vertices[j, 0], vertices[j, 1]
        other = j
        if min(cx, dx) > max(ax, bx) or max(cx, dx) < min(ax, bx):
            continue
        if min(cy, dy) > max(ay, by) or max(cy, dy) < min(ay, by):
            continue
        one, two = _side(ax, ay, bx, by, cx, cy), _side(ax, ay, bx, by, dx, dy)
        three, four = _side(cx, cy, dx, dy, ax, ay), _side(cx, cy, dx, dy, bx, by)
        if one * two <= 0 and three * four <= 0:
            return True
    return False


@kernel("rf8[:, ::1]", "i8", "i8", "f8", "f8")
def ring_holds_kernel(
    vertices: npt.NDArray[np.float64], first: int, last: int, x: float, y: float
) -> bool:
    """Is a point inside a ring, the vertices from `first` up to `last`? Even-odd rule."""
    inside = False
    before = last - 1
    for i in range(first, last):
        ax, ay, bx, by = vertices[before, 0], vertices[before, 1], vertices[i, 0], vertices[i, 1]
        before = i
        if (ay > y) != (by > y) and x < ax + (bx - ax) * (y - ay) / (by - ay):
            inside = not inside
    return inside
