"""
A path in arrays that a search can edit: elements, and sums along them.

An element is a row (x, y, heading, curvature, signed length); the sums hold the arc length and
the cost up to the start of each element. A change of direction is paid at the element that it
leads into.
"""

import math
from typing import Final, NamedTuple

import numpy as np
import numpy.typing as npt

from byway_planning.curves.word import advance, wrap
from byway_planning.kernel import describe, kernel
from byway_planning.vehicles.body import CAR, Body

Floats = npt.NDArray[np.float64]

ELEMENTS_MAX: Final = 4096
#: Elements shorter than this are left out: rounding, not driving.
SHORT_M: Final = 1e-9


class Course(NamedTuple):
    """An editable path; `used` (1,) elements are in use."""

    rows: Floats  # (ELEMENTS_MAX, 5)
    lengths: Floats  # (ELEMENTS_MAX + 1,) arc length before each element; the total at the end
    costs: Floats  # (ELEMENTS_MAX + 1,) cost before each element, entry included
    used: npt.NDArray[np.int64]


describe(Course, "f8[:, ::1]", "f8[::1]", "f8[::1]", "i8[::1]")


def new_course() -> Course:
    """Return room for a path."""
    return Course(
        np.zeros((ELEMENTS_MAX, 5)),
        np.zeros(ELEMENTS_MAX + 1),
        np.zeros(ELEMENTS_MAX + 1),
        np.zeros(1, np.int64),
    )


@kernel()
def price(body: Body, length: float) -> float:
    """Cost of driving a signed length."""
    return length if length >= 0.0 else -length * body.reverse_factor


@kernel()
def sum_up(body: Body, course: Course) -> None:
    """Recompute the sums."""
    at = 0.0
    cost = 0.0
    n = course.used[0]
    for i in range(n):
        length = course.rows[i, 4]
        if i > 0 and body.kind == CAR and (length < 0.0) != (course.rows[i - 1, 4] < 0.0):
            cost += body.direction_change_m
        course.lengths[i], course.costs[i] = at, cost
        at += abs(length)
        cost += price(body, length)
    course.lengths[n], course.costs[n] = at, cost


@kernel()
def append(course: Course, x: float, y: float, heading: float, k: float, length: float) -> None:
    """Add an element, for which there is room; one that goes on like the last one lengthens it."""
    if abs(length) < SHORT_M:
        return
    n = course.used[0]
    if n > 0:
        last = course.rows[n - 1]
        same = last[3] == k and (last[4] < 0.0) == (length < 0.0)
        if same and abs(wrap(last[2] + last[3] * last[4] - heading)) < 1e-9:
            last[4] += length
            return
    course.rows[n, 0], course.rows[n, 1], course.rows[n, 2] = x, y, heading
    course.rows[n, 3], course.rows[n, 4] = k, length
    course.used[0] = n + 1


@kernel()
def element_at(course: Course, s: float) -> int:
    """The element that holds an arc length (the later one at a border)."""
    low, high = 0, course.used[0] - 1
    while low < high:
        middle = (low + high + 1) // 2
        if course.lengths[middle] <= s:
            low = middle
        else:
            high = middle - 1
    return int(low)


@kernel()
def pose_along(course: Course, element: int, s: float) -> tuple[float, float, float]:
    """The pose at an arc length inside an element."""
    row = course.rows[element]
    into = s - course.lengths[element]
    return advance(row[0], row[1], row[2], row[3], into if row[4] >= 0.0 else -into)


@kernel()
def cost_along(body: Body, course: Course, element: int, s: float) -> float:
    """Cost from the start to an arc length inside an element."""
    into = s - course.lengths[element]
    return float(course.costs[element]) + price(
        body, into if course.rows[element, 4] >= 0.0 else -into
    )


@kernel()
def copy_course(source: Course, target: Course) -> None:
    """Overwrite a path with another."""
    n = source.used[0]
    target.used[0] = n
    for i in range(n):
        for k in range(5):
            target.rows[i, k] = source.rows[i, k]
    for i in range(n + 1):
        target.lengths[i] = source.lengths[i]
        target.costs[i] = source.costs[i]


@kernel("rf8[:, ::1]", Body, Course)
def load_course_kernel(path: Floats, body: Body, course: Course) -> bool:
    """
    Fill a course from a path (n, 5); headings of a vehicle on wheels are made continuous.

    Returns:
        Whether it found room; if not, the course is of no use.
    """
    course.used[0] = 0
    end = math.nan
    for i in range(path.shape[0]):
        heading = path[i, 2]
        if i > 0 and body.turn_radius_m > 0.0:
            heading = end + wrap(heading - end)
        if course.used[0] == course.rows.shape[0]:
            return False
        append(course, path[i, 0], path[i, 1], heading, path[i, 3], path[i, 4])
        end = heading + path[i, 3] * path[i, 4]
    if course.used[0] == 0:
        for k in range(5):
            course.rows[0, k] = path[0, k]
        course.rows[0, 4] = 0.0
        course.used[0] = 1
    sum_up(body, course)
    return True


def path_from(course: Course) -> Floats:
    """Return a copy of the path (n, 5)."""
    return np.array(course.rows[: course.used[0]])


def cost_of(course: Course) -> float:
    """Return the cost of the whole path."""
    return float(course.costs[course.used[0]])


def path_cost(path: Floats, body: Body) -> float:
    """Return the cost of a path (n, 5): length, reversing and changes of direction."""
    lengths = path[:, 4]
    cost = float(np.where(lengths >= 0.0, lengths, -lengths * body.reverse_factor).sum())
    if body.kind == CAR:
        signs = np.sign(lengths[lengths != 0.0])
        cost += float((np.diff(signs) != 0.0).sum()) * body.direction_change_m
    return cost
