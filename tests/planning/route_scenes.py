"""Paths, solids and slow twins for the tests of routes and of their check."""

import itertools
import math
from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt
import shapely
from scipy import optimize

from byway_planning.route import make_route
from byway_planning.site.solids import Solids
from byway_planning.vehicles.models import Car, Disc, ForwardCar
from byway_planning.verify import Faults, verify

Floats = npt.NDArray[np.float64]
Pose = tuple[float, float, float]

BOX = ((-1.0, -0.95), (3.5, -0.95), (3.5, 0.95), (-1.0, 0.95))
#: Open to the left between two arms: a concave outline around the space (0..2, -0.2..0.9).
U_SHAPE = (
    *((-1.0, -0.9), (3.0, -0.9), (3.0, 0.9), (2.0, 0.9)),
    *((2.0, -0.2), (0.0, -0.2), (0.0, 0.9), (-1.0, 0.9)),
)
EVERYWHERE = (-math.inf, -math.inf, math.inf, math.inf)


def car(**changes: Any) -> Car:
    """A tug whose clearance is 0 and whose cost is length, unless told otherwise."""
    settings: dict[str, Any] = {
        "footprint_m": BOX,
        "turn_radius_m_min": 5.0,
        "reverse_factor": 1.0,
        "direction_change_m": 0.0,
        "clearance_m": 0.0,
        "start_overlap_m": 0.0,
    }
    return Car(**(settings | changes))


def forward_car(**changes: Any) -> ForwardCar:
    settings: dict[str, Any] = {"footprint_m": BOX, "turn_radius_m_min": 5.0, "clearance_m": 0.0}
    return ForwardCar(**(settings | changes))


def disc(**changes: Any) -> Disc:
    return Disc(**({"radius_m": 0.5, "clearance_m": 0.0} | changes))


def after(pose: Sequence[float], curvature: float, length: float) -> Pose:
    """The pose after an arc, by the circle's own coordinates."""
    x, y, h = pose
    if abs(curvature) < 1e-9:
        return x + length * math.cos(h), y + length * math.sin(h), h + curvature * length
    end = h + curvature * length
    return (
        x + (math.sin(end) - math.sin(h)) / curvature,
        y - (math.cos(end) - math.cos(h)) / curvature,
        end,
    )


def path_of(start: Pose, pieces: Iterable[tuple[float, float]]) -> tuple[Floats, Pose]:
    """A path of (curvature, signed length) pieces, and where it ends."""
    rows, pose = [], start
    for curvature, length in pieces:
        rows.append((*pose, curvature, length))
        pose = after(pose, curvature, length)
    return np.array(rows), pose


def line_of(points: Sequence[Sequence[float]]) -> tuple[Floats, Pose]:
    """A disc's path along points, and where it ends."""
    rows = []
    for (ax, ay), (bx, by) in itertools.pairwise(points):
        rows.append((ax, ay, math.atan2(by - ay, bx - ax), 0.0, math.hypot(bx - ax, by - ay)))
    return np.array(rows), (points[-1][0], points[-1][1], rows[-1][2])


def _fixed(values: Any, dtype: Any, shape: tuple[int, ...]) -> Any:
    array = np.ascontiguousarray(values, dtype).reshape(shape)
    array.flags.writeable = False
    return array


def solids_of(
    polygons: Sequence[Any] = (),
    discs: Sequence[Sequence[float]] = (),
    limits: Sequence[float] = EVERYWHERE,
    cells: npt.NDArray[np.uint8] | None = None,
    cells_of: npt.NDArray[np.int64] | None = None,
    cell_m: float = 0.1,
    corner_m: tuple[float, float] = (0.0, 0.0),
) -> Solids:
    """
    Solids of polygons (turned counter-clockwise), discs, limits, and tiles of cells.

    `cells` (rows, columns) is cut into tiles of 8 x 8; or give `cells_of` as well, with
    `cells` (tiles, 8, 8).
    """
    rings = [np.array(p, float) for p in polygons]
    rings = [r if shapely.LinearRing(r).is_ccw else r[::-1] for r in rings]
    boxes = [(*r.min(axis=0), *r.max(axis=0)) for r in rings]
    if cells is None:
        tiles, places = np.zeros((0, 8, 8), np.uint8), np.zeros((0, 0), np.int64)
    elif cells_of is None:
        rows, columns = -(-cells.shape[0] // 8), -(-cells.shape[1] // 8)
        whole = np.zeros((rows * 8, columns * 8), np.uint8)
        whole[: cells.shape[0], : cells.shape[1]] = cells
        tiles = whole.reshape(rows, 8, columns, 8).swapaxes(1, 2)
        places = np.arange(rows * columns).reshape(rows, columns) * 64
    else:
        tiles, places = cells, cells_of
    return Solids(
        _fixed(np.concatenate(rings) if rings else [], np.float64, (-1, 2)),
        _fixed(np.cumsum([0, *map(len, rings)]), np.int64, (-1,)),
        _fixed(boxes, np.float64, (-1, 4)),
        _fixed(discs, np.float64, (-1, 3)),
        _fixed(tiles, np.uint8, (-1,)),
        _fixed(places, np.int64, places.shape),
        cell_m,
        8,
        *corner_m,
        *(float(limit) for limit in limits),
    )


def star(rng: np.random.Generator, middle: Sequence[float], size: float) -> Floats:
    """A random polygon around a point, mostly concave, never crossing itself."""
    while True:
        angles = np.sort(rng.uniform(0.0, 2.0 * np.pi, rng.integers(3, 9)))
        gaps = np.diff(angles, append=angles[0] + 2.0 * np.pi)
        if gaps.max() < 2.8 and gaps.min() > 0.05:
            break
    radii = size * rng.uniform(0.3, 1.0, len(angles))
    return np.array(middle) + np.column_stack([np.cos(angles), np.sin(angles)]) * radii[:, None]


class Twin:
    """Distances of a vehicle on a table from shapes, by shapely, pose by pose."""

    def __init__(
        self,
        vehicle: Car | ForwardCar | Disc,
        table: npt.NDArray[Any],
        polygons: Sequence[Any] = (),
        discs: Sequence[Sequence[float]] = (),
        limits: Sequence[float] = EVERYWHERE,
    ) -> None:
        self._table, self._limits, self._discs = table, limits, discs
        self._shapes = [shapely.Polygon(p) for p in polygons]
        shapely.prepare(self._shapes)
        self._round = vehicle.radius_m if isinstance(vehicle, Disc) else 0.0
        self._outline = np.array([(0.0, 0.0)] if self._round else vehicle.footprint_m)
        v, t = table["speed_mps"], table["t_s"]
        self._arcs = 0.5 * (v[1:] + v[:-1]) * np.diff(t)

    def poses(self, places: Floats) -> Floats:
        """Poses (n, 3) at row numbers with fractions of the way to the next row."""
        row = np.minimum(places.astype(int), len(self._table) - 2)
        t = self._table[row]
        turn = t["curvature_per_m"] * self._arcs[row] * (places - row)
        length = self._arcs[row] * (places - row)
        chord = length * np.sinc(turn / (2.0 * np.pi))
        along = t["heading_rad"] + 0.5 * turn
        return np.column_stack(
            [
                t["x_m"] + chord * np.cos(along),
                t["y_m"] + chord * np.sin(along),
                t["heading_rad"] + turn,
            ]
        )

    def distances(self, places: Floats) -> Floats:
        """Distance from everything at each place; 0 where it overlaps a shape."""
        p = self.poses(np.atleast_1d(places))
        c, s = np.cos(p[:, 2])[:, None], np.sin(p[:, 2])[:, None]
        x = self._outline[:, 0] * c - self._outline[:, 1] * s + p[:, :1]
        y = self._outline[:, 0] * s + self._outline[:, 1] * c + p[:, 1:2]
        corners = np.stack([x, y], axis=-1)
        bodies = shapely.points(corners[:, 0]) if self._round else shapely.polygons(corners)
        limits = self._limits
        least = np.minimum(x.min(axis=1) - limits[0], limits[2] - x.max(axis=1))
        least = np.minimum(least, y.min(axis=1) - limits[1])
        least = np.minimum(least, limits[3] - y.max(axis=1))
        for shape in self._shapes:
            least = np.minimum(least, shapely.distance(bodies, shape))
        for dx, dy, radius in self._discs:
            least = np.minimum(least, shapely.distance(bodies, shapely.Point(dx, dy)) - radius)
        return least - self._round

    def least(self, per_row: int = 8) -> float:
        """The least distance: sampled, then refined around the three lowest dips."""
        places = np.linspace(0.0, len(self._table) - 1.0, (len(self._table) - 1) * per_row + 1)
        sampled = self.distances(places)
        best = float(sampled.min())
        padded = np.pad(sampled, 1, constant_values=np.inf)
        dips = np.nonzero((sampled <= padded[:-2]) & (sampled <= padded[2:]))[0]
        for i in dips[np.argsort(sampled[dips])][:3]:
            low, high = places[max(i - 1, 0)], places[min(i + 1, len(places) - 1)]
            found = optimize.minimize_scalar(
                lambda place: float(self.distances(np.array([place]))[0]),
                bounds=(low, high),
                method="bounded",
                options={"xatol": 1e-9},
            )
            best = min(best, float(found.fun))
        return best


def driven(
    solids: Solids,
    vehicle: Car | ForwardCar | Disc,
    pieces: list[tuple[float, float]],
    start: Pose = (0.0, 0.0, 0.0),
    **how: float,
) -> Faults:
    """The faults of driving pieces from a start as fast as possible."""
    path, goal = path_of(start, pieces)
    return verify(solids, vehicle, path, make_route(path, vehicle), start, goal, **how)


def codes(faults: Faults) -> list[str]:
    """What is wrong, in the order found."""
    return [fault.code for fault in faults]


def random_scene(rng: np.random.Generator, number: int) -> tuple[Any, ...]:
    """A vehicle, a path, and a few shapes about as far from it as it is large."""
    radius = rng.uniform(2.0, 6.0)
    pieces = [
        (float(rng.choice([0.0, 1.0, -1.0, rng.uniform(-1, 1)]) / radius), float(length))
        for length in rng.uniform(0.3, 3.5, rng.integers(1, 4)) * rng.choice([-1.0, 1.0])
    ]
    if number % 4 == 3:
        vehicle: Car | Disc = disc(radius_m=float(rng.uniform(0.2, 1.5)))
        corners = np.cumsum(rng.uniform(-3.0, 3.0, (rng.integers(2, 5), 2)), axis=0)
        path, goal = line_of([tuple(map(float, corner)) for corner in corners])
    else:
        outline = [BOX, U_SHAPE, star(rng, (0.3, 0.1), 2.0).tolist()][number % 4]
        vehicle = car(footprint_m=outline, turn_radius_m_min=radius)
        start = (*rng.uniform(-50.0, 50.0, 2).tolist(), float(rng.uniform(-9.0, 9.0)))
        path, goal = path_of(start, pieces)
    route = make_route(path, vehicle)
    polygons, discs = [], []
    for _ in range(rng.integers(1, 5)):
        row, angle = rng.integers(len(route.table)), rng.uniform(0.0, 7.0)
        middle = np.array([route.table["x_m"][row], route.table["y_m"][row]])
        middle += rng.uniform(1.0, 6.0) * np.array([math.cos(angle), math.sin(angle)])
        if rng.random() < 0.7:
            polygons.append(star(rng, middle, rng.choice([0.1, 0.6, 2.0])))
        else:
            discs.append((*middle.tolist(), float(rng.uniform(0.02, 1.0))))
    limits = EVERYWHERE
    if rng.random() < 0.3:
        room = rng.uniform(2.0, 7.0, 4)
        x, y = route.table["x_m"], route.table["y_m"]
        limits = (x.min() - room[0], y.min() - room[1], x.max() + room[2], y.max() + room[3])
    return vehicle, path, goal, route, polygons, discs, limits
