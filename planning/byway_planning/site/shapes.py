"""The shapes an obstacle may have, checked before they touch a site."""

from dataclasses import dataclass, field
from typing import Any, Final

import numpy as np
import numpy.typing as npt

#: Corners of one polygon; a footprint is tested against every edge near it, so this bounds a check.
VERTICES_MAX: Final = 4096
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
        ring = np.array(self.vertices_m, np.float64)
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
        if len(ring) > 3 and (ring[0] == ring[-1]).all():
            ring = ring[:-1]
        area_m2 = signed_area_m2(ring)
        crossing = first_crossing(ring)
        if crossing is not None:
            raise SiteError(
                "crossing_polygon",
                f"edge {crossing[0]} meets edge {crossing[1]}; the outline must not touch itself",
                edges=list(crossing),
            )
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
        SiteError: not_finite or bad_radius.
    """

    x_m: float
    y_m: float
    radius_m: float

    def __post_init__(self) -> None:
        if not np.isfinite([self.x_m, self.y_m, self.radius_m]).all():
            raise SiteError("not_finite", f"disc {self.x_m, self.y_m, self.radius_m}")
        if self.radius_m <= 0.0:
            raise SiteError("bad_radius", f"a disc needs a radius > 0 m, got {self.radius_m}")

    @property
    def box_m(self) -> Limits:
        r = self.radius_m
        return (self.x_m - r, self.y_m - r, self.x_m + r, self.y_m + r)


Shape = PolygonShape | DiscShape


def signed_area_m2(ring: npt.NDArray[np.float64]) -> float:
    """Return the area of a ring (n, 2), positive when counter-clockwise (shoelace formula)."""
    # Around the first vertex, so that survey coordinates lose nothing.
    x, y = (ring - ring[0]).T
    return float(np.dot(x, np.roll(y, -1)) - np.dot(y, np.roll(x, -1))) / 2.0


def first_crossing(ring: npt.NDArray[np.float64]) -> tuple[int, int] | None:
    """Return the first pair of edges of a ring that touch though they are not neighbours."""
    count = len(ring)
    a = ring - ring[0]
    b = np.roll(a, -1, axis=0)
    if (a == b).all(axis=1).any():
        edge = int(np.nonzero((a == b).all(axis=1))[0][0])
        return edge, (edge + 1) % count
    low, high = np.minimum(a, b), np.maximum(a, b)
    for i in range(count - 1):
        j = np.arange(i + 1, count)
        near = (low[j] <= high[i]).all(axis=1) & (high[j] >= low[i]).all(axis=1)
        j = j[near]
        if not len(j):
            continue
        one = _side(a[i], b[i], a[j]), _side(a[i], b[i], b[j])
        two = _side(a[j], b[j], a[i]), _side(a[j], b[j], b[i])
        meets = (one[0] * one[1] <= 0) & (two[0] * two[1] <= 0)
        neighbour = (j == i + 1) | ((i == 0) & (j == count - 1))
        # Neighbours share a corner; they cross only when one folds back along the other.
        fold = np.array([_folds_back(a, i, int(k), count) for k in j[neighbour]], bool)
        bad = meets & ~neighbour
        bad[neighbour] = fold
        if bad.any():
            return i, int(j[bad][0])
    return None


def _side(
    a: npt.NDArray[np.float64], b: npt.NDArray[np.float64], p: npt.NDArray[np.float64]
) -> npt.NDArray[np.float64]:
    d, e = b - a, p - a
    cross: npt.NDArray[np.float64] = d[..., 0] * e[..., 1] - d[..., 1] * e[..., 0]
    return np.sign(cross)


def _folds_back(a: npt.NDArray[np.float64], i: int, k: int, count: int) -> bool:
    first, corner = (i, k) if k == i + 1 else (k, i)
    before, at, after = a[first], a[corner], a[(corner + 1) % count]
    d, e = at - before, after - at
    return bool(d[0] * e[1] - d[1] * e[0] == 0.0 and d @ e < 0.0)
