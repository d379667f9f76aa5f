"""Plain Python twins of what the kernels do with paths: slow, and short enough to be seen right."""

import math
from collections.abc import Iterable

import numpy as np
import numpy.typing as npt
from tests.planning.route_scenes import after

from byway_planning.vehicles.body import CAR, Body

Floats = npt.NDArray[np.float64]


def sums_along(path: Floats, body: Body) -> tuple[list[float], list[float]]:
    """Arc length and cost before each element and at the end, entries included."""
    lengths, costs = [0.0], []
    cost, gear = 0.0, 0.0
    for *_, length in path:
        reverse = length < 0.0
        changed = body.kind == CAR and gear != 0.0 and reverse != (gear < 0.0)
        cost += body.direction_change_m if changed else 0.0
        costs.append(cost)
        cost += -length * body.reverse_factor if reverse else length
        lengths.append(lengths[-1] + abs(length))
        gear = -1.0 if reverse else 1.0
    return lengths, [*costs, cost]


def merged(path: Iterable[Floats]) -> list[list[float]]:
    """Elements that go on like the one before joined to it, and those of no length left out."""
    rows: list[list[float]] = []
    for row in path:
        x, y, h, k, length = (float(v) for v in row)
        if abs(length) < 1e-9:
            continue
        if rows:
            last = rows[-1]
            end = last[2] + last[3] * last[4]
            same = last[3] == k and (last[4] < 0.0) == (length < 0.0)
            if same and abs(math.remainder(end - h, 2.0 * math.pi)) < 1e-9:
                last[4] += length
                continue
        rows.append([x, y, h, k, length])
    return rows


def pose_at(path: Floats, s: float) -> tuple[float, float, float]:
    """The pose at an arc length, by the circle's own coordinates."""
    left = s
    for row in path:
        if left <= abs(row[4]):
            return after(row[:3], row[3], math.copysign(left, row[4]))
        left -= abs(row[4])
    return after(path[-1, :3], path[-1, 3], path[-1, 4])


def cost_until(path: Floats, body: Body, s: float) -> float:
    """Cost of what is driven up to an arc length, changes on the way included."""
    cut, left = [], s
    for row in path:
        if left <= 0.0:
            break
        part = row.copy()
        part[4] = math.copysign(min(left, abs(row[4])), row[4])
        cut.append(part)
        left -= abs(row[4])
    return sums_along(np.array(cut).reshape(-1, 5), body)[1][-1]
