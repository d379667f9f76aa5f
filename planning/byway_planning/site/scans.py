"""
What one sweep of a range sensor says about the cells of a site.

Cells that a beam crosses are free up to the one in which it ends; that one is occupied. Ends are
written after all beams, so that no beam of the same sweep clears what another has met. Only
tiles that beams go through take memory, however far the sensor sees.
"""

import math
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel
from byway_planning.site.shapes import COORDINATE_M_MAX, Limits, SiteError

Floats = npt.NDArray[np.float64]
Marks = npt.NDArray[np.uint8]
Slots = npt.NDArray[np.int32]

UNSEEN: Final = 0
SEEN_FREE: Final = 1
SEEN_OCCUPIED: Final = 2

BEAMS_MAX: Final = 65_536
RANGE_M_MAX: Final = 1000.0
#: What the beams of one scan may be long together, in cells; that many take half a second.
LENGTH_CELLS_MAX: Final = 1e8


def checked_scan(
    origin: tuple[float, float, float],
    bearings_rad: npt.ArrayLike,
    ranges_m: npt.ArrayLike,
    range_m_max: float,
    range_m_min: float,
) -> tuple[Floats, Floats]:
    """
    Check a scan and return its beams.

    Returns:
        Directions of the beams in the site's frame, and their lengths: negative where the beam
        met nothing. Beams shorter than the least range are left out.

    Raises:
        SiteError: bad_scan, not_finite or too_large, with the first beam that is wrong.
    """
    try:
        bearings, ranges = np.array(bearings_rad, np.float64), np.array(ranges_m, np.float64)
    except (TypeError, ValueError) as fault:
        raise SiteError("bad_scan", f"bearings and ranges are numbers: {fault}") from None
    if bearings.ndim != 1 or bearings.shape != ranges.shape:
        text = f"as many bearings as ranges, got shapes {bearings.shape} and {ranges.shape}"
        raise SiteError("bad_scan", text)
    if len(bearings) > BEAMS_MAX:
        raise SiteError("too_large", f"a scan has {BEAMS_MAX} beams at most, got {len(bearings)}")
    if not np.isfinite([*origin, range_m_max, range_m_min]).all():
        raise SiteError("not_finite", f"origin {origin} and range limits must be finite")
    if not 0.0 <= range_m_min < range_m_max <= RANGE_M_MAX:
        raise SiteError(
            "bad_scan",
            f"ranges lie between 0 <= range_m_min < range_m_max <= {RANGE_M_MAX:g}, got "
            f"{range_m_min} and {range_m_max}",
        )
    if max(abs(origin[0]), abs(origin[1])) > COORDINATE_M_MAX:
        raise SiteError("too_large", f"a sensor at {origin} is far beyond any site")
    wrong = ~np.isfinite(bearings) | np.isnan(ranges) | (ranges < 0.0)
    if wrong.any():
        beam = int(np.argmax(wrong))
        text = f"beam {beam} has the bearing {bearings[beam]} and the range {ranges[beam]}"
        raise SiteError("bad_scan", f"{text}; leave out what was not measured", beam=beam)
    kept = ranges >= range_m_min
    lengths = np.where(ranges < range_m_max, ranges, -range_m_max)[kept]
    return origin[2] + bearings[kept], lengths


def inside(
    x_m: float, y_m: float, directions: Floats, lengths: Floats, limits_m: Limits, cell_m: float
) -> Floats:
    """
    Cut beams off where they leave the site, a little beyond its border.

    Args:
        x_m, y_m: Where they begin, inside the limits. directions, lengths: see `checked_scan`.

    Returns:
        Their lengths, negative for those that met nothing inside.

    Raises:
        SiteError: too_large, if they are too long all together.
    """
    ways = []
    for place, low, high, along in (
        (x_m, limits_m[0], limits_m[2], np.cos(directions)),
        (y_m, limits_m[1], limits_m[3], np.sin(directions)),
    ):
        border = np.where(along > 0.0, high + 2.0 * cell_m, low - 2.0 * cell_m)
        with np.errstate(divide="ignore", over="ignore"):
            ways.append((border - place) / along)
    way = np.minimum(np.abs(ways[0]), np.abs(ways[1]))
    cut: Floats = np.where(np.abs(lengths) < way, lengths, -way)
    total = float(np.abs(cut).sum()) / cell_m
    if total > LENGTH_CELLS_MAX:
        raise SiteError(
            "too_large",
            f"the beams go through {total:.3g} cells, {LENGTH_CELLS_MAX:.0g} at most; send fewer "
            f"beams, or a shorter range_m_max",
        )
    return cut


class Seen:
    """
    A scan laid over the tiles of a site.

    Attributes:
        tiles: (row, column) of each tile in which anything was seen.
        marks: uint8, shape (tiles, side, side): UNSEEN, SEEN_FREE or SEEN_OCCUPIED.
    """

    def __init__(
        self,
        x_m: float,
        y_m: float,
        directions: Floats,
        lengths: Floats,
        corner_m: tuple[float, float],
        cell_m: float,
        side: int,
        shape: tuple[int, int],
    ) -> None:
        """
        Args:
            x_m, y_m: Where the beams begin. directions, lengths: see `checked_scan`.
            corner_m: Lower left corner of tile (0, 0). side: cells along a tile. shape: tiles.
        """
        place = np.array([x_m, y_m, *corner_m, cell_m])
        slots = np.full(shape, -1, np.int32)
        used = number_tiles_kernel(place, directions, lengths, side, slots)
        self.marks = np.zeros((used, side, side), np.uint8)
        mark_kernel(place, directions, lengths, slots, self.marks)
        rows, columns = np.nonzero(slots >= 0)
        order = np.argsort(slots[rows, columns])
        self.tiles = list(zip(rows[order].tolist(), columns[order].tolist(), strict=True))


@kernel()
def _begin(x: float, direction: float) -> tuple[int, float, float]:
    """Step, way to the first border and way between borders, along one axis of a grid."""
    if direction > 0.0:
        return 1, (math.floor(x) + 1.0 - x) / direction, 1.0 / direction
    if direction < 0.0:
        return -1, (x - math.floor(x)) / -direction, -1.0 / direction
    return 0, math.inf, math.inf


@kernel()
def _end_cell(place: Floats, direction: float, length: float) -> tuple[int, int]:
    """Row and column of the cell in which a beam ends."""
    x = place[0] + abs(length) * math.cos(direction) - place[2]
    y = place[1] + abs(length) * math.sin(direction) - place[3]
    return math.floor(y / place[4]), math.floor(x / place[4])


@kernel("f8[::1]", "f8[::1]", "f8[::1]", "i8", "i4[:, ::1]")
def number_tiles_kernel(
    place: Floats, directions: Floats, lengths: Floats, side: int, slots: Slots
) -> int:
    """Number the tiles along beams in the order in which they are met; returns how many."""
    tile = place[4] * side
    x, y = (place[0] - place[2]) / tile, (place[1] - place[3]) / tile
    rows, columns = slots.shape
    used = 0
    for i in range(directions.shape[0]):
        dx, dy = math.cos(directions[i]), math.sin(directions[i])
        left = abs(lengths[i]) / tile
        step_x, next_x, apart_x = _begin(x, dx)
        step_y, next_y, apart_y = _begin(y, dy)
        r, c = math.floor(y), math.floor(x)
        while True:
            if 0 <= r < rows and 0 <= c < columns and slots[r, c] < 0:
                slots[r, c] = used
                used += 1
            if min(next_x, next_y) > left:
                break
            if next_x < next_y:
                c += step_x
                next_x += apart_x
            else:
                r += step_y
                next_y += apart_y
        # Rounded on its own: it may lie beside the last tile.
        r, c = _end_cell(place, directions[i], lengths[i])
        r, c = r // side, c // side
        if 0 <= r < rows and 0 <= c < columns and slots[r, c] < 0:
            slots[r, c] = used
            used += 1
    return used


@kernel()
def _mark(slots: Slots, marks: Marks, r: int, c: int, value: int) -> None:
    side = marks.shape[1]
    if r < 0 or c < 0:
        return
    tr, tc = r // side, c // side
    if tr < slots.shape[0] and tc < slots.shape[1] and slots[tr, tc] >= 0:
        marks[slots[tr, tc], r - tr * side, c - tc * side] = value


@kernel("f8[::1]", "f8[::1]", "f8[::1]", "i4[:, ::1]", "u1[:, :, ::1]")
def mark_kernel(
    place: Floats, directions: Floats, lengths: Floats, slots: Slots, marks: Marks
) -> None:
    """
    Mark what beams say: Amanatides and Woo, A fast voxel traversal algorithm, 1987.

    Args:
        place: x, y of the sensor, corner of the tiles, side of a cell.
        slots: Numbers of the tiles. marks: (tiles, side, side), filled.
    """
    cell = place[4]
    x, y = (place[0] - place[2]) / cell, (place[1] - place[3]) / cell
    for i in range(directions.shape[0]):
        dx, dy = math.cos(directions[i]), math.sin(directions[i])
        left = abs(lengths[i]) / cell
        step_x, next_x, apart_x = _begin(x, dx)
        step_y, next_y, apart_y = _begin(y, dy)
        r, c = math.floor(y), math.floor(x)
        while True:
            _mark(slots, marks, r, c, SEEN_FREE)
            if min(next_x, next_y) > left:
                break
            if next_x < next_y:
                c += step_x
                next_x += apart_x
            else:
                r += step_y
                next_y += apart_y
    for i in range(directions.shape[0]):
        if lengths[i] >= 0.0:
            r, c = _end_cell(place, directions[i], lengths[i])
            _mark(slots, marks, r, c, SEEN_OCCUPIED)


@kernel("ru1[:, ::1]", "u1[:, ::1]", "f8[:, ::1]", "f8")
def apply_marks_kernel(marks: Marks, cells: Marks, stamps: Floats, at_s: float) -> bool:
    """Write what was seen into the cells of a tile and when it was; tells whether any changed."""
    changed = False
    for r in range(cells.shape[0]):
        for c in range(cells.shape[1]):
            if marks[r, c] == UNSEEN:
                continue
            value = 1 if marks[r, c] == SEEN_OCCUPIED else 0
            changed |= cells[r, c] != value
            cells[r, c] = value
            if stamps.shape[0] > 0:
                stamps[r, c] = at_s
    return changed


@kernel("u1[:, ::1]", "f8[:, ::1]", "f8", "u1")
def fade_kernel(cells: Marks, stamps: Floats, before_s: float, unknown: int) -> tuple[bool, float]:
    """
    Forget what was last seen before an instant.

    Args:
        stamps: When each cell was last seen, inf for those that nobody scanned.

    Returns:
        Whether a cell changed, and the earliest stamp that is left (inf: none).
    """
    changed, first = False, math.inf
    for r in range(cells.shape[0]):
        for c in range(cells.shape[1]):
            if stamps[r, c] <= before_s:
                changed |= cells[r, c] != unknown
                cells[r, c] = unknown
                stamps[r, c] = math.inf
            else:
                first = min(first, stamps[r, c])
    return changed, first
