"""
Obstacles that move, and the ground that they sweep in the next seconds.

A track moves with constant speed and constant turn rate: body and velocity turn together. How
far it may be from where that puts it grows with time. What it sweeps is covered by convex
polygons: of a piece of the motion, the hull of the body at both ends, grown by the uncertainty
at the later one and by what the motion bends in between. Nothing that the body can cover in the
piece lies outside.
"""

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel
from byway_planning.site.shapes import DiscShape, PolygonShape, Shape, SiteError

Points = npt.NDArray[np.float64]
Pose = tuple[float, float, float]

#: Pieces of a track's sweep are obstacles with its id, this, and a number.
PIECE: Final = "~"
#: A piece turns by no more than this.
TURN_RAD: Final = 0.25
#: Corners of a polygon around a disc.
CORNERS: Final = 12
PIECES_MAX: Final = 100
#: What nobody's vehicle does; it bounds the ground that a track may claim.
SPEED_MPS_MAX: Final = 100.0
TURN_RATE_RADPS_MAX: Final = 10.0
UNCERTAINTY_M_MAX: Final = 50.0
GROWTH_MPS_MAX: Final = 50.0


@dataclass(frozen=True)
class Track:
    """
    An obstacle that moves.

    Args:
        shape: In the frame of its own body.
        pose: x_m, y_m, heading_rad of the body at `at_s`, in the site's frame.
        velocity_mps: Along x and y of the site.
        turn_rate_radps: Of body and velocity.
        uncertainty_m: How far any point of it may be from where this says, at `at_s`.
        growth_mps: How fast that grows.
        at_s: When it was seen, by a clock of the caller's.

    Raises:
        SiteError: not_finite or bad_track.
    """

    shape: Shape
    pose: Pose
    velocity_mps: tuple[float, float] = (0.0, 0.0)
    turn_rate_radps: float = 0.0
    uncertainty_m: float = 0.0
    growth_mps: float = 0.0
    at_s: float = 0.0

    def __post_init__(self) -> None:
        told = (*self.pose, *self.velocity_mps, self.turn_rate_radps, self.uncertainty_m)
        if not all(map(math.isfinite, (*told, self.growth_mps, self.at_s))):
            raise SiteError("not_finite", f"a track is of finite numbers, got {told}")
        for name, value, most in (
            ("speed", math.hypot(*self.velocity_mps), SPEED_MPS_MAX),
            ("turn rate", abs(self.turn_rate_radps), TURN_RATE_RADPS_MAX),
            ("uncertainty", self.uncertainty_m, UNCERTAINTY_M_MAX),
            ("growth of uncertainty", self.growth_mps, GROWTH_MPS_MAX),
        ):
            if not 0.0 <= value <= most:
                raise SiteError(
                    "bad_track", f"its {name} must be within 0 and {most:g}, is {value}"
                )

    @property
    def moves(self) -> bool:
        """Whether anything about it changes with time."""
        return any((*self.velocity_mps, self.turn_rate_radps, self.growth_mps))

    def pose_at(self, now_s: float) -> Pose:
        """Return where it is by now."""
        t = now_s - self.at_s
        x, y, heading = self.pose
        vx, vy = self.velocity_mps
        turn = self.turn_rate_radps * t
        # The integral of a turning velocity: a chord, by series where there is hardly a turn.
        if abs(turn) < 1e-4:
            a, b = t * (1.0 - turn * turn / 6.0), t * (turn / 2.0)
        else:
            a = math.sin(turn) / self.turn_rate_radps
            b = (1.0 - math.cos(turn)) / self.turn_rate_radps
        return x + a * vx - b * vy, y + b * vx + a * vy, heading + turn

    def velocity_at(self, now_s: float) -> tuple[float, float]:
        """Return its velocity by now."""
        turn = self.turn_rate_radps * (now_s - self.at_s)
        vx, vy = self.velocity_mps
        c, s = math.cos(turn), math.sin(turn)
        return c * vx - s * vy, s * vx + c * vy

    def uncertainty_at(self, now_s: float) -> float:
        """Return by how much it may be elsewhere by now."""
        return self.uncertainty_m + self.growth_mps * max(0.0, now_s - self.at_s)

    def sweep(self, now_s: float, ahead_s: float) -> list[Shape]:
        """
        Return shapes that cover all it may cover from now on.

        Args:
            ahead_s: For how long.
        """
        if not self.moves and isinstance(self.shape, DiscShape):
            x, y = self._points_at(now_s)[0]
            radius = self.shape.radius_m + self.uncertainty_m
            return [DiscShape(float(x), float(y), radius)]
        turn = abs(self.turn_rate_radps) * ahead_s
        pieces = min(max(1, math.ceil(turn / TURN_RAD)), PIECES_MAX)
        return [self._piece(*ends) for ends in self._spans(now_s, ahead_s / pieces, pieces)]

    @staticmethod
    def _spans(now_s: float, step_s: float, pieces: int) -> Iterator[tuple[float, float]]:
        for i in range(pieces):
            yield now_s + i * step_s, now_s + (i + 1) * step_s

    def _piece(self, begin_s: float, end_s: float) -> PolygonShape:
        """
        The hull of the body at both ends, grown.

        A point of the body at r from its origin accelerates by |v| w + r w^2 at most; so between
        the ends it is no more than that times dt^2 / 8 beside the straight line, and its
        uncertainty grows along a line too.
        """
        corners = np.concatenate([self._points_at(begin_s), self._points_at(end_s)])
        w = abs(self.turn_rate_radps)
        reach = float(np.hypot(*self._outline().T).max())
        bend = (math.hypot(*self.velocity_mps) * w + reach * w * w) * (end_s - begin_s) ** 2 / 8.0
        radii = [self._skin_m() + self.uncertainty_at(when) + bend for when in (begin_s, end_s)]
        half = len(corners) // 2
        grown = [_around(corners[:half], radii[0]), _around(corners[half:], radii[1])]
        cloud = np.concatenate(grown)
        cloud = cloud[np.lexsort(cloud.T[::-1])]
        out = np.empty((len(cloud) + 1, 2))
        count = hull_kernel(np.ascontiguousarray(cloud), out)
        return PolygonShape.trusted(out[:count])

    def _outline(self) -> Points:
        if isinstance(self.shape, DiscShape):
            return np.array([[self.shape.x_m, self.shape.y_m]])
        return self.shape.vertices_m

    def _skin_m(self) -> float:
        return self.shape.radius_m if isinstance(self.shape, DiscShape) else 0.0

    def _points_at(self, when_s: float) -> Points:
        """Corners of the body, or the middle of a disc, in the site's frame."""
        x, y, heading = self.pose_at(when_s)
        c, s = math.cos(heading), math.sin(heading)
        outline = self._outline()
        placed: Points = outline @ np.array([[c, s], [-s, c]]) + np.array([x, y])
        return placed

    def outline_m(self, corners: int = 32) -> Points:
        """Return its outline (n, 2) in the frame of its own body, for pictures."""
        if isinstance(self.shape, PolygonShape):
            return self.shape.vertices_m
        angles = np.linspace(0.0, 2.0 * math.pi, corners, endpoint=False)
        ring = self.shape.radius_m * np.column_stack([np.cos(angles), np.sin(angles)])
        return np.array([self.shape.x_m, self.shape.y_m]) + ring


#: Corners of a polygon around the unit disc.
_UNIT: Final = np.array(
    [
        (math.cos(a) / math.cos(math.pi / CORNERS), math.sin(a) / math.cos(math.pi / CORNERS))
        for a in np.arange(CORNERS) * (2.0 * math.pi / CORNERS)
    ]
)


def _around(points: Points, radius_m: float) -> Points:
    """Return corners of polygons around discs around points."""
    if radius_m <= 0.0:
        return points
    ring: Points = (points[:, None, :] + radius_m * _UNIT[None, :, :]).reshape(-1, 2)
    return ring


@kernel("f8[:, ::1]", "f8[:, ::1]")
def hull_kernel(points: Points, out: Points) -> int:
    """
    Convex hull, counter-clockwise (Andrew's monotone chain, 1979).

    Args:
        points: Shape (n, 2), sorted by x, then by y. out: (n + 1, 2).

    Returns:
        How many corners it has.
    """
    n = points.shape[0]
    count = 0
    floor = 2  # corners that the other half of the way round must leave alone
    for k in range(2 * n - 1):
        i = k if k < n else 2 * n - 2 - k  # to the right below, and back above
        if k == n:
            floor = count + 1
        while count >= floor:
            ax, ay = out[count - 2, 0], out[count - 2, 1]
            bx, by = out[count - 1, 0], out[count - 1, 1]
            if (bx - ax) * (points[i, 1] - ay) - (by - ay) * (points[i, 0] - ax) > 0.0:
                break
            count -= 1
        out[count, 0], out[count, 1] = points[i, 0], points[i, 1]
        count += 1
    return count - 1  # the first is there again


def piece_id(track_id: str, piece: int) -> str:
    """Return the id under which a piece of a sweep is kept."""
    return f"{track_id}{PIECE}{piece}"


def base_id(name: str) -> str:
    """Return the id of a track from that of a piece; any other id as it is."""
    return name.partition(PIECE)[0]
