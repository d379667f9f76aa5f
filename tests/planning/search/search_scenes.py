"""Questions for the searches, and what a path has to be, by plain formulas and shapely."""

import math
from collections.abc import Iterator, Mapping, Sequence

import numpy as np
import numpy.typing as npt
import shapely
from tests.planning.route_scenes import after

from byway_planning import Car, Disc, ForwardCar, Site
from byway_planning.collision import CONTACT_M
from byway_planning.search.floods import FloodGround, FloodRoom, used_tiles, window_for
from byway_planning.search.lattice import (
    Lattice,
    advance_lattice_kernel,
    new_lattice,
    path_of,
    restart,
)
from byway_planning.search.method import FOUND, RUNNING, Method
from byway_planning.search.paths import path_cost
from byway_planning.search.question import Question, excess_kernel, guide_for
from byway_planning.vehicles.models import Vehicle

Floats = npt.NDArray[np.float64]
Ring = Sequence[tuple[float, float]]

LIMITS = (0.0, 0.0, 40.0, 24.0)
RADIUS_M = 4.0
BOX = [(-1.0, -0.95), (3.5, -0.95), (3.5, 0.95), (-1.0, 0.95)]
#: Reaches backward round an empty slot, so it is not convex.
HOOK = [
    *((-1.2, -0.9), (3.0, -0.9), (3.0, 0.9), (-1.2, 0.9)),
    *((-1.2, 0.4), (0.4, 0.4), (0.4, -0.4), (-1.2, -0.4)),
]


def car(footprint_m: Ring = BOX, **more: float) -> Car:
    """A car whose cost is length, unless told otherwise."""
    settings = {"reverse_factor": 1.0, "direction_change_m": 0.0, "clearance_m": 0.0} | more
    return Car(footprint_m=footprint_m, turn_radius_m_min=RADIUS_M, **settings)


VEHICLES: Mapping[str, Vehicle] = {
    "car": car(),
    "dear reverse": car(HOOK, reverse_factor=1.7, direction_change_m=2.5),
    "forward": ForwardCar(footprint_m=BOX, turn_radius_m_min=RADIUS_M, clearance_m=0.1),
    "disc": Disc(radius_m=0.8, clearance_m=0.0),
}
WALLS: Mapping[str, Ring] = {
    "wall": [(18.0, 0.0), (19.0, 0.0), (19.0, 15.0), (18.0, 15.0)],
    "lid": [(26.0, 9.0), (27.0, 9.0), (27.0, 24.0), (26.0, 24.0)],
}
START, GOAL = (5.0, 5.0, 0.3), (34.0, 18.0, 1.2)


def box(x: float, y: float, width: float, height: float) -> Ring:
    return [(x, y), (x + width, y), (x + width, y + height), (x, y + height)]


def pen(x: float, y: float, side: float) -> dict[str, Ring]:
    """Four walls around a square room."""
    return {
        "south": box(x, y, side, 0.4),
        "north": box(x, y + side - 0.4, side, 0.4),
        "west": box(x, y, 0.4, side),
        "east": box(x + side - 0.4, y, 0.4, side),
    }


def read_only(values: npt.ArrayLike) -> Floats:
    array = np.array(values, np.float64)
    array.flags.writeable = False
    return array


def question(
    vehicle: Vehicle,
    polygons: Mapping[str, Ring] = WALLS,
    start: Sequence[float] = START,
    goal: Sequence[float] = GOAL,
    seed: int = 1,
    limits_m: tuple[float, float, float, float] = LIMITS,
) -> Question:
    scene = Site.from_shapes(polygons, limits_m=limits_m).snapshot.scene()
    body = vehicle.body()
    window = window_for(scene, used_tiles(scene), [tuple(start[:2]), tuple(goal[:2])], 12.0)
    ground = FloodGround(scene, body.inner_radius_m + body.clearance_m, window)
    begin, end = read_only(start), read_only(goal)
    guide = guide_for(ground, FloodRoom(), body, begin, end)
    return Question(scene, body, begin, end, seed, guide)


def random_questions(
    vehicle: Vehicle, seed: int, count: int
) -> Iterator[tuple[Question, dict[str, Ring]]]:
    """Yield questions among random boxes: the ends free, joined by a flood, but not by a curve."""
    rng = np.random.default_rng(seed)
    while count > 0:
        corners = rng.uniform((0.0, 0.0), (36.0, 20.0), (int(rng.integers(2, 14)), 2))
        boxes = {f"b{i}": box(x, y, *rng.uniform(0.1, 4.0, 2)) for i, (x, y) in enumerate(corners)}
        start, goal = rng.uniform((2.0, 2.0, -4.0), (38.0, 22.0, 4.0), (2, 3))
        q = question(vehicle, boxes, tuple(start), tuple(goal))
        ends = [excess_kernel(q.scene, q.body, pose) for pose in (q.start, q.goal)]
        if min(ends) > CONTACT_M and q.guide.reached and q.direct() is None:
            count -= 1
            yield q, boxes


def drive(path: Floats, step_m: float) -> Floats:
    """Poses (n, 3) along a path, both ends of each element included."""
    poses = []
    for x, y, h, k, length in path:
        for s in np.linspace(0.0, length, int(abs(length) / step_m) + 2):
            poses.append(after((x, y, h), k, s))
    return np.array(poses)


def turn_between(a: float, b: float) -> float:
    return abs(math.remainder(a - b, 2.0 * math.pi))


def check_path(path: Floats, vehicle: Vehicle, start: Floats, goal: Floats) -> None:
    """Ends, joints, curvature and direction."""
    on_wheels = not isinstance(vehicle, Disc)
    ends = [after(row[:3], row[3], row[4]) for row in path]
    befores = [*([tuple(start)]), *ends]
    afters = [*(tuple(row[:3]) for row in path), tuple(goal)]
    for before, now in zip(befores, afters, strict=True):
        assert math.hypot(before[0] - now[0], before[1] - now[1]) < 1e-7
        if on_wheels:
            assert turn_between(before[2], now[2]) < 1e-7
    if on_wheels:
        assert np.abs(path[:, 3]).max() <= 1.0 / vehicle.body().turn_radius_m + 1e-12
    else:
        assert not path[:, 3].any()
    if not isinstance(vehicle, Car):
        assert (path[:, 4] >= 0.0).all()


def check_free(path: Floats, vehicle: Vehicle, polygons: Mapping[str, Ring] = WALLS) -> None:
    """Room for the body and its clearance, at close poses, by shapely."""
    frame = shapely.box(-5, -5, 45, 29).difference(shapely.box(*LIMITS))
    world = shapely.union_all([*[shapely.Polygon(p) for p in polygons.values()], frame])
    shapely.prepare(world)
    body = vehicle.body()
    poses = drive(path, 0.05)
    c, s = np.cos(poses[:, 2:]), np.sin(poses[:, 2:])
    x, y = body.outline_m.T
    ring = np.stack([poses[:, :1] + c * x - s * y, poses[:, 1:2] + s * x + c * y], axis=-1)
    shapes = shapely.polygons(ring) if len(x) > 1 else shapely.points(ring[:, 0])
    assert shapely.distance(shapes, world).min() > body.skin_m + body.clearance_m


def check_drivable(
    path: Floats, vehicle: Vehicle, q: Question, polygons: Mapping[str, Ring] = WALLS
) -> None:
    check_path(path, vehicle, q.start, q.goal)
    check_free(path, vehicle, polygons)


KNOBS = {"cell_m": 0.7, "headings": 64, "arc_m": 1.1, "weight": 2.0, "change_m": 0.5}


def run_lattice(
    lattice: Lattice, q: Question, *, backward: bool, step: int = 1000, expansions_max: int = 40_000
) -> int:
    """Run a lattice that was set up, in slices; return how it ended."""
    flood = q.to_start if backward else q.to_goal
    status = RUNNING
    for _ in range(expansions_max // step):
        status = advance_lattice_kernel(q.scene, q.body, lattice, flood, q.lengths, step)
        if status != RUNNING:
            break
    return int(status)


def lattice_path(
    q: Question, *, backward: bool = False, step: int = 1000, **knobs: float
) -> Floats:
    """The path of a fresh lattice."""
    lattice = new_lattice(60_000)
    settings = KNOBS | knobs
    restart(lattice, backward=backward, start=q.start, goal=q.goal, **settings)  # type: ignore[arg-type]
    assert run_lattice(lattice, q, backward=backward, step=step) == FOUND
    return path_of(lattice, q.body)


def costs_found(search: Method, q: Question, step: int, calls: int) -> list[float]:
    """Costs of the paths found, in order, until the search ends or was called so often."""
    costs = []
    for _ in range(calls):
        status = search.advance(step)
        if status == FOUND:
            costs.append(path_cost(search.path(), q.body))
        elif status != RUNNING:
            break
    return costs
