"""
Exact distances between outlines, for the simulated world.

The world judges what the daemon's routes lead to, so it has its own geometry, plain numpy, and
shares nothing with the planner.
"""

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from bywayd.outlines import Points, placed

Pose = tuple[float, float, float]


def advanced(pose: Pose, curvature_per_m: float, signed_m: float) -> Pose:
    """Return the pose after an arc; reverse has a negative length."""
    x_m, y_m, heading_rad = pose
    half_rad = 0.5 * curvature_per_m * signed_m
    # sin(a)/a: the series keeps all digits where the quotient would lose them.
    chord_ratio = (
        1 - half_rad * half_rad / 6 if abs(half_rad) < 1e-4 else math.sin(half_rad) / half_rad
    )
    chord_m = signed_m * chord_ratio
    towards_rad = heading_rad + half_rad
    return (
        x_m + chord_m * math.cos(towards_rad),
        y_m + chord_m * math.sin(towards_rad),
        heading_rad + 2 * half_rad,
    )


def wrapped(angle_rad: float) -> float:
    """Return the same direction in [-pi, pi)."""
    return (angle_rad + math.pi) % (2 * math.pi) - math.pi


def box_of(points_m: Points) -> Points:
    """Return x_min, y_min, x_max, y_max."""
    return np.concatenate((points_m.min(axis=0), points_m.max(axis=0)))


def boxes_within(boxes_m: Points, box_m: Points, reach_m: float) -> npt.NDArray[np.intp]:
    """Return the indices of the boxes (n, 4) nearer than `reach_m` to a box, axis by axis."""
    near = (
        (boxes_m[:, 0] <= box_m[2] + reach_m)
        & (boxes_m[:, 2] >= box_m[0] - reach_m)
        & (boxes_m[:, 1] <= box_m[3] + reach_m)
        & (boxes_m[:, 3] >= box_m[1] - reach_m)
    )
    return np.flatnonzero(near)


def hull(points_m: Points) -> Points:
    """Return the convex hull, counter-clockwise (Andrew's monotone chain, 1979)."""
    ordered = sorted(map(tuple, points_m.tolist()))
    halves: list[list[tuple[float, float]]] = []
    for direction in (ordered, ordered[::-1]):
        half: list[tuple[float, float]] = []
        for x, y in direction:
            while len(half) > 1:
                (ax, ay), (bx, by) = half[-2], half[-1]
                if (bx - ax) * (y - ay) - (by - ay) * (x - ax) > 0.0:
                    break
                half.pop()
            half.append((x, y))
        halves.append(half[:-1])
    return np.array(halves[0] + halves[1])


def grown(points_m: Points, by_m: float) -> Points:
    """Return a convex polygon that keeps at least `by_m` around points, and 8 % more at most."""
    turn_rad = np.arange(8) * (math.pi / 4)
    # An octagon around the circle: its sides, not its corners, have the distance.
    octagon = np.column_stack((np.cos(turn_rad), np.sin(turn_rad))) * (by_m / math.cos(math.pi / 8))
    return hull((points_m[:, None, :] + octagon).reshape(-1, 2))


def convex_apart(a_m: Points, b_m: Points, gap_m: float) -> bool:
    """
    Whether an edge of one of two convex polygons (counter-clockwise) keeps the other off.

    True proves a distance of at least `gap_m`. False proves nothing: two corners that face
    each other may be further apart than any edge shows.
    """
    for own, other in ((a_m, b_m), (b_m, a_m)):
        edges = _nexts(own) - own
        normals = np.column_stack((edges[:, 1], -edges[:, 0]))
        normals /= np.maximum(np.hypot(edges[:, 0], edges[:, 1]), 1e-12)[:, None]
        beyond = (normals @ other.T).min(axis=1) - (normals * own).sum(axis=1)
        if beyond.max() >= gap_m:
            return True
    return False


def distance_m(a_m: Points, b_m: Points) -> float:
    """Return the distance between two simple polygons; 0 when they touch, overlap or contain."""
    a_next, b_next = _nexts(a_m), _nexts(b_m)
    if _any_edges_cross(a_m, a_next, b_m, b_next) or contains(a_m, b_m[0]) or contains(b_m, a_m[0]):
        return 0.0
    return min(_to_edges_m(a_m, b_m, b_next), _to_edges_m(b_m, a_m, a_next))


def disc_distance_m(outline_m: Points, x_m: float, y_m: float, radius_m: float) -> float:
    """Return the distance between a simple polygon and a disc; 0 when they touch or overlap."""
    centre = np.array([[x_m, y_m]])
    if contains(outline_m, centre[0]):
        return 0.0
    return max(0.0, _to_edges_m(centre, outline_m, _nexts(outline_m)) - radius_m)


def contains(ring_m: Points, point_m: Points) -> bool:
    """Whether a point lies inside a simple polygon (even-odd rule; the edge itself is open)."""
    x, y = point_m
    ends_m = _nexts(ring_m)
    ax, ay, bx, by = ring_m[:, 0], ring_m[:, 1], ends_m[:, 0], ends_m[:, 1]
    straddles = (ay > y) != (by > y)
    if not straddles.any():
        return False
    ax, ay, bx, by = ax[straddles], ay[straddles], bx[straddles], by[straddles]
    return bool((x < ax + (y - ay) * (bx - ax) / (by - ay)).sum() % 2)


def _nexts(ring_m: Points) -> Points:
    # Half of the time of numpy's roll, and this module has little else to do.
    return np.concatenate((ring_m[1:], ring_m[:1]))


def _to_edges_m(points: Points, starts: Points, ends: Points) -> float:
    along = ends - starts
    length2 = np.maximum((along * along).sum(axis=1), 1e-24)
    to_point = points[:, None, :] - starts[None, :, :]
    share = np.clip((to_point * along).sum(axis=2) / length2, 0.0, 1.0)
    off = to_point - share[:, :, None] * along
    return math.sqrt(float((off * off).sum(axis=2).min()))


def _any_edges_cross(a: Points, a_next: Points, b: Points, b_next: Points) -> bool:
    def sides(p: Points, q: Points, r: Points) -> Points:
        """Which side of each edge p-q each point r lies on, shape (edges, points)."""
        along = q - p
        to_x, to_y = r[None, :, 0] - p[:, None, 0], r[None, :, 1] - p[:, None, 1]
        return np.asarray(along[:, None, 0] * to_y - along[:, None, 1] * to_x)

    of_b, of_b_next = sides(a, a_next, b), sides(a, a_next, b_next)
    of_a, of_a_next = sides(b, b_next, a).T, sides(b, b_next, a_next).T
    return bool(((of_b * of_b_next < 0) & (of_a * of_a_next < 0)).any())


@dataclass(frozen=True)
class Mass:
    """Something that stands on the yard: a polygon, or a disc when `ring_m` has one row."""

    name: str
    ring_m: Points
    radius_m: float = 0.0

    def distance_m(self, outline_m: Points) -> float:
        """Return how far an outline is away; 0 when it touches or overlaps."""
        if len(self.ring_m) > 1:
            return distance_m(outline_m, self.ring_m)
        x_m, y_m = self.ring_m[0].tolist()
        return disc_distance_m(outline_m, x_m, y_m, self.radius_m)


class Masses:
    """Many masses, asked for the nearest. Immutable: make a new one when something changes."""

    def __init__(self, masses: Iterable[Mass]) -> None:
        self.masses = tuple(masses)
        grown = [box_of(m.ring_m) + m.radius_m * np.array([-1, -1, 1, 1]) for m in self.masses]
        self._boxes_m = np.array(grown).reshape(-1, 4)

    def nearest(self, outline_m: Points, reach_m: float) -> tuple[float, str]:
        """Return distance and name of the nearest mass, or (inf, "") beyond `reach_m`."""
        found = (math.inf, "")
        for index in boxes_within(self._boxes_m, box_of(outline_m), reach_m):
            mass = self.masses[index]
            away_m = mass.distance_m(outline_m)
            if away_m < min(found[0], reach_m):
                found = (away_m, mass.name)
        return found


def polygons_of(masses: Iterable[Mass]) -> dict[str, Points]:
    """Return the outlines of those that are polygons, by name."""
    return {mass.name: mass.ring_m for mass in masses if len(mass.ring_m) > 1}


def discs_of(masses: Iterable[Mass]) -> dict[str, tuple[float, float, float]]:
    """Return x, y and radius of those that are discs, by name."""
    return {
        mass.name: (float(mass.ring_m[0, 0]), float(mass.ring_m[0, 1]), mass.radius_m)
        for mass in masses
        if len(mass.ring_m) == 1
    }


def rectangle(
    x_m: float, y_m: float, length_m: float, width_m: float, turn_rad: float = 0.0
) -> Points:
    """Return a rectangle around its centre, `length_m` along the turned x axis."""
    half = np.array(
        [[-length_m, -width_m], [length_m, -width_m], [length_m, width_m], [-length_m, width_m]]
    )
    return placed(half / 2, (x_m, y_m, turn_rad))


def as_points(corners: Sequence[Sequence[float]]) -> Points:
    """Return corners as a read-only array of shape (n, 2)."""
    points = np.array(corners, np.float64)
    points.flags.writeable = False
    return points
