"""
What is worked out once from the outline of a vehicle: discs inside and around it, offsets.

Outlines are simple polygons, convex or not, of at most 32 vertices, so everything here may be
quadratic or cubic in them. Radii are rounded to the safe side: a disc inside is never too
large, discs around are never too small.
"""

import math
from collections.abc import Sequence
from itertools import combinations, pairwise
from typing import Final

import numpy as np
import numpy.typing as npt

Points = npt.NDArray[np.float64]

VERTICES_MAX: Final = 32
COVER_DISCS_MAX: Final = 8

#: A footprint reaches no further from the vehicle's origin than this. Longer than any road
#: train; a millimetre drawing given in metres by mistake is beyond it.
REACH_M_MAX: Final = 100.0

_ROUNDING: Final = 1e-12  # of radii, relative; far above what their computation loses


def checked_outline(name: str, vertices_m: Sequence[Sequence[float]] | Points) -> Points:
    """
    Return the outline counter-clockwise, shape (n, 2), without a repeated closing vertex.

    Raises:
        ValueError: If it is not a simple polygon of 3 to 32 finite vertices with some area.
            The text begins with `name`.
    """
    try:
        outline = np.array(vertices_m, np.float64)
    except (TypeError, ValueError):
        raise ValueError(f"{name} must be a list of (x, y) pairs, got {vertices_m!r}") from None
    if outline.ndim != 2 or outline.shape[1] != 2:
        raise ValueError(f"{name} must be a list of (x, y) pairs, got shape {outline.shape}")
    if len(outline) > 1 and (outline[0] == outline[-1]).all():
        outline = outline[:-1]
    if not 3 <= len(outline) <= VERTICES_MAX:
        raise ValueError(
            f"{name} must have 3 to {VERTICES_MAX} vertices, got {len(outline)}; "
            "leave out what does not stick out"
        )
    if not np.isfinite(outline).all():
        raise ValueError(f"{name} must be finite, got {outline.tolist()}")
    if np.abs(outline).max() > REACH_M_MAX:
        raise ValueError(
            f"{name} reaches {np.abs(outline).max():g} m from the vehicle's origin, at most "
            f"{REACH_M_MAX:g} m; is it in metres?"
        )
    if abs(area_m2(outline)) < 1e-6:
        raise ValueError(f"{name} has no area; its vertices lie on a line or are all the same")
    _check_simple(name, outline)
    return outline if area_m2(outline) > 0.0 else np.ascontiguousarray(outline[::-1])


def area_m2(outline: Points) -> float:
    """Signed area, positive if counter-clockwise."""
    x, y = (outline - outline[0]).T
    return float(0.5 * (x @ np.roll(y, -1) - y @ np.roll(x, -1)))


def _check_simple(name: str, outline: Points) -> None:
    edges = list(zip(outline.tolist(), np.roll(outline, -1, axis=0).tolist(), strict=True))
    count = len(edges)
    for i, (a, b) in enumerate(edges):
        if a == b:
            raise ValueError(f"{name} repeats the vertex {tuple(a)}; give it once")
        c = edges[(i + 1) % count][1]
        if _turn(a, b, c) == 0.0 and _dot(a, b, c) > 0.0:
            raise ValueError(f"{name} folds back on itself at {tuple(b)}")
    for i, j in combinations(range(count), 2):
        if j - i in (1, count - 1):
            continue  # neighbours share a vertex
        if _touch(*edges[i], *edges[j]):
            raise ValueError(
                f"{name} crosses or touches itself: the edges from {tuple(edges[i][0])} and from "
                f"{tuple(edges[j][0])}; give the vertices in the order along the outline"
            )


def _turn(a: list[float], b: list[float], c: list[float]) -> float:
    return (b[0] - a[0]) * (c[1] - a[1]) - (b[1] - a[1]) * (c[0] - a[0])


def _dot(a: list[float], b: list[float], c: list[float]) -> float:
    """Positive if the way a, b, c doubles back at b."""
    return (a[0] - b[0]) * (c[0] - b[0]) + (a[1] - b[1]) * (c[1] - b[1])


def _touch(a: list[float], b: list[float], c: list[float], d: list[float]) -> bool:
    abc, abd = _turn(a, b, c), _turn(a, b, d)
    cda, cdb = _turn(c, d, a), _turn(c, d, b)
    if abc * abd < 0.0 and cda * cdb < 0.0:
        return True
    on = ((abc, a, b, c), (abd, a, b, d), (cda, c, d, a), (cdb, c, d, b))
    return any(turn == 0.0 and _dot(p, q, r) <= 0.0 for turn, p, r, q in on)


def depth_m(outline: Points, points: Points) -> Points:
    """
    How deep points lie inside a polygon: distance to its boundary, negative outside.

    Args:
        outline: Shape (n, 2), either orientation.
        points: Shape (k, 2).

    Returns:
        Shape (k,).
    """
    start = outline[None]
    along = np.roll(outline, -1, axis=0)[None] - start
    to = points[:, None] - start
    square = (along**2).sum(axis=2)
    share = np.clip((to * along).sum(axis=2) / square, 0.0, 1.0)
    distance = np.sqrt(((to - share[..., None] * along) ** 2).sum(axis=2)).min(axis=1)
    # even-odd rule: edges that cross the ray to the east
    above = to[..., 1] >= 0.0
    crosses = above != np.roll(above, -1, axis=1)
    east = along[..., 0] * to[..., 1] - along[..., 1] * to[..., 0]
    inside = (crosses & ((east > 0.0) == (along[..., 1] < 0.0))).sum(axis=1) % 2 == 1
    depth: Points = np.where(inside, distance, -distance)
    return depth


def largest_disc_inside(outline: Points) -> tuple[float, float, float]:
    """
    Centre and radius of the largest disc in a polygon, at most 1 mm too small.

    Squares that may hold a deeper point than the deepest found are split in four, all of a
    size at once; then the best point climbs to its peak.
    """
    low, high = outline.min(axis=0), outline.max(axis=0)
    half = 0.25 * float((high - low).min())
    columns, rows = np.ceil((high - low) / (2.0 * half)).astype(int)
    centres = np.array(
        [low + (2.0 * np.array([i, j]) + 1.0) * half for i in range(columns) for j in range(rows)]
    )
    best, deepest = outline[0], 0.0
    while len(centres):
        depth = depth_m(outline, centres)
        if depth.max() > deepest:
            best, deepest = centres[depth.argmax()], float(depth.max())
        may = depth + math.sqrt(2.0) * half > deepest + 0.5e-3
        half *= 0.5
        corners = half * np.array([(-1.0, -1.0), (1.0, -1.0), (-1.0, 1.0), (1.0, 1.0)])
        centres = (centres[may][:, None] + corners[None]).reshape(-1, 2)
    angles = np.arange(16) * (math.pi / 8.0)
    around = np.column_stack([np.cos(angles), np.sin(angles)])
    step = 1e-3
    while step > 1e-10:
        tries = best + step * around
        depth = depth_m(outline, tries)
        if depth.max() > deepest:
            best, deepest = tries[depth.argmax()], float(depth.max())
        else:
            step *= 0.5
    return float(best[0]), float(best[1]), deepest * (1.0 - _ROUNDING)


def smallest_disc_around(points: Points) -> tuple[float, float, float]:
    """
    Centre and radius of the smallest disc that holds all points, shape (n, 2).

    It has two of them as a diameter or three on its edge: all are tried.
    """
    if len(points) == 1:
        return float(points[0, 0]), float(points[0, 1]), 0.0
    pairs = np.array(list(combinations(range(len(points)), 2)))
    centres = [0.5 * (points[pairs[:, 0]] + points[pairs[:, 1]])]
    if len(points) > 2:
        triples = np.array(list(combinations(range(len(points)), 3)))
        a = points[triples[:, 0]]
        b, c = points[triples[:, 1]] - a, points[triples[:, 2]] - a
        twice = 2.0 * (b[:, 0] * c[:, 1] - b[:, 1] * c[:, 0])
        flat = np.abs(twice) < 1e-12
        twice[flat] = 1.0
        bb, cc = (b**2).sum(axis=1), (c**2).sum(axis=1)
        offset = (
            np.column_stack([c[:, 1] * bb - b[:, 1] * cc, b[:, 0] * cc - c[:, 0] * bb])
            / twice[:, None]
        )
        centres.append((a + offset)[~flat])
    centre = np.concatenate(centres)
    radius = np.sqrt(((centre[:, None] - points[None]) ** 2).sum(axis=2)).max(axis=1)
    best = int(radius.argmin())
    x, y = centre[best]
    return float(x), float(y), float(radius[best]) * (1.0 + _ROUNDING)


def cover_discs(outline: Points, inner_radius_m: float) -> Points:
    """
    Few discs that together hold the polygon: shape (k, 3) x, y, radius, k at most 8.

    The polygon is cut across into slabs about as thick as the largest disc inside, and each
    gets its smallest disc; the cuts run across the edge that leaves the least area to discs.
    """
    best = np.empty((0, 3))
    least = math.inf
    for angle in _edge_angles(outline):
        along = np.array([math.cos(angle), math.sin(angle)])
        reach = outline @ along
        length_m = float(np.ptp(reach))
        count = math.ceil(length_m / (2.0 * inner_radius_m) * (1.0 - 1e-6))
        cuts = np.linspace(reach.min(), reach.max(), min(COVER_DISCS_MAX, max(1, count)) + 1)
        discs = []
        for low, high in pairwise(cuts.tolist()):
            piece = _cut(_cut(outline, along, low), -along, -high)
            discs.append(smallest_disc_around(np.array(_without_spikes(piece.tolist()))))
        found = np.array(discs)
        area = float((found[:, 2] ** 2).sum())
        if area < least * (1.0 - 1e-9):
            best, least = found, area
    return best


def _edge_angles(outline: Points) -> list[float]:
    """Directions of the edges in [0, pi), each once."""
    edges = np.roll(outline, -1, axis=0) - outline
    kept: list[float] = []
    for angle in np.sort(np.arctan2(edges[:, 1], edges[:, 0]) % math.pi).tolist():
        if all(abs(math.sin(angle - other)) > 1e-9 for other in kept):
            kept.append(angle)
    return kept


def _cut(outline: Points, normal: Points, least: float) -> Points:
    """The part of a polygon with point @ normal >= least (Sutherland and Hodgman 1974)."""
    height = outline @ normal - least
    height[np.abs(height) < 1e-9] = 0.0
    kept: list[Points] = []
    for i in range(len(outline)):
        j = (i + 1) % len(outline)
        if height[i] >= 0.0:
            kept.append(outline[i])
        if (height[i] >= 0.0) != (height[j] >= 0.0):
            share = height[i] / (height[i] - height[j])
            kept.append(outline[i] + share * (outline[j] - outline[i]))
    return np.array(kept)


def _without_spikes(ring: list[list[float]]) -> list[list[float]]:
    """
    Leave out edges that double back, as a cut along an edge of a concave polygon leaves them.

    They have no area and belong to the piece on the other side of the cut.
    """
    i = 0
    while i < len(ring) and len(ring) > 3:
        a, b, c = ring[i - 1], ring[i], ring[(i + 1) % len(ring)]
        doubles_back = abs(_turn(a, b, c)) <= 1e-9 and _dot(a, b, c) > 0.0
        if a == b or doubles_back:
            del ring[i]
            i = max(0, i - 2)
        else:
            i += 1
    return ring


def shrunk(outline: Points, by_m: float) -> Points:
    """
    Return the outline with every edge moved inward (outward if negative), corners mitred.

    Args:
        outline: Shape (n, 2), counter-clockwise.
        by_m: How far. Outward, a sharp corner moves by much more than this.

    Returns:
        Shape (n, 2), counter-clockwise.

    Raises:
        ValueError: If nothing is left, or an edge is used up: move it less.
    """
    before = outline - np.roll(outline, 1, axis=0)
    after = np.roll(before, -1, axis=0)
    before = before / np.hypot(before[:, 0], before[:, 1])[:, None]
    after = after / np.hypot(after[:, 0], after[:, 1])[:, None]
    # inward normals, and the point where the two moved edges meet: o + by (n1 + n2) / (1 + n1.n2)
    first = np.column_stack([-before[:, 1], before[:, 0]])
    second = np.column_stack([-after[:, 1], after[:, 0]])
    stretch = 1.0 + (first * second).sum(axis=1)
    if (stretch < 1e-9).any():
        raise ValueError("an outline with a needle cannot be offset")
    moved = outline + by_m * (first + second) / stretch[:, None]
    edges = np.roll(moved, -1, axis=0) - moved
    if ((edges * after).sum(axis=1) <= 0.0).any():
        raise ValueError(f"an edge is used up when the outline moves by {by_m} m; move it less")
    try:
        return checked_outline("the moved outline", moved)
    except ValueError as fault:
        raise ValueError(f"cannot move the outline by {by_m} m: {fault}") from None
