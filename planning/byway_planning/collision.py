"""
Is there room for the body at a pose?

Everything here is about the *excess*: how much farther than its hard clearance the body stays
from every obstacle, never overstated. The distance field answers most questions; where it
cannot decide, the outline is tested exactly against the items nearby. `motion` asks the same
along an arc.
"""

import math
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel
from byway_planning.site.edges import REFERENCE_X, REFERENCE_Y, item_crossed
from byway_planning.site.scene import FAR_PER_TILE, OPEN, SOLID, Scene
from byway_planning.vehicles.body import Body

Points = npt.NDArray[np.float64]

#: An excess up to this counts as contact. It bounds the steps of a motion check from below.
CONTACT_M: Final = 0.001
#: Above this excess a motion makes progress on the field alone; below, the exact test is worth it.
NEAR_M: Final = 0.12
#: The exact test looks this far; more would not make a motion check quicker.
EXACT_M: Final = 0.6
#: Between the corners of a cell the bilinear value exceeds the distance by less than this, in
#: cells: a distance is convex around each obstacle point, and a cone's worst case is
#: (1 + 1 + sqrt 2) / 4 - sqrt(1/2) = 0.147.
INTERPOLATION_CELLS: Final = 0.15
#: A distance of the raster is below the true one plus this many cells: half a diagonal for the
#: interpolation, a whole one because an obstacle may touch only the far corner of a cell.
RASTER_CELLS: Final = 2.13


@kernel()
def _is_within(scene: Scene, x: float, y: float) -> bool:
    """Is a point inside the limits of the site? NaN is nowhere."""
    if not (x > scene.x_m_min and x < scene.x_m_max):
        return False
    return bool(y > scene.y_m_min and y < scene.y_m_max)


@kernel()
def _cell_of(scene: Scene, x: float, y: float) -> tuple[float, float, int, int, int, int]:
    """
    Column and row of a point inside the limits, in cells; its tile; and its cell in the tile.

    A point next to the upper limits may by rounding come out on the border; it counts as inside.
    """
    # One division instead of four: it would take as long as all the rest. Tiles have 2^n cells,
    # so that the second factor is exact.
    per_m, per_cell = 1.0 / scene.cell_m, 1.0 / scene.tile_cells
    u, v = (x - scene.corner_x_m) * per_m, (y - scene.corner_y_m) * per_m
    rows, columns = scene.field_of.shape
    tr, tc = min(int(v * per_cell), rows - 1), min(int(u * per_cell), columns - 1)
    last = scene.tile_cells - 1
    row, column = int(v) - tr * scene.tile_cells, int(u) - tc * scene.tile_cells
    return u, v, tr, tc, min(row, last), min(column, last)


@kernel()
def field_at(scene: Scene, x: float, y: float) -> float:
    """Interpolated distance to the raster, cut off at the reach; inf beyond, 0 outside."""
    if not _is_within(scene, x, y):
        return 0.0
    u, v, tr, tc, row, column = _cell_of(scene, x, y)
    offset = scene.field_of[tr, tc]
    if offset == OPEN:
        return math.inf
    if offset == SOLID:
        return 0.0
    side = scene.tile_cells
    fu, fv = u - (tc * side + column), v - (tr * side + row)
    at = offset + row * (side + 1) + column
    low = scene.floats[at] * (1.0 - fu) + scene.floats[at + 1] * fu
    at += side + 1
    high = scene.floats[at] * (1.0 - fu) + scene.floats[at + 1] * fu
    return float(low * (1.0 - fv) + high * fv)


@kernel()
def free_around(scene: Scene, x: float, y: float) -> float:
    """A distance within which a point has no rastered obstacle; never overstated."""
    d = field_at(scene, x, y)
    if d < scene.reach_m - scene.cell_m:
        return d - INTERPOLATION_CELLS * scene.cell_m
    u, v, _, _, _, _ = _cell_of(scene, x, y)
    per_cell = FAR_PER_TILE / scene.tile_cells
    rows, columns = scene.far_m.shape
    far = scene.far_m[min(int(v * per_cell), rows - 1), min(int(u * per_cell), columns - 1)]
    near = scene.reach_m - scene.cell_m if d < math.inf else scene.reach_m
    return max(float(far), near)


@kernel()
def _point_segment2(
    px: float, py: float, ax: float, ay: float, dx: float, dy: float, length2: float
) -> float:
    """Squared distance of a point to the segment from a along d."""
    ex, ey = px - ax, py - ay
    t = ex * dx + ey * dy
    if t > 0.0:
        if t >= length2:
            ex -= dx
            ey -= dy
        else:
            t /= length2
            ex -= t * dx
            ey -= t * dy
    return ex * ex + ey * ey


@kernel()
def segment_outline(outline: Points, ax: float, ay: float, bx: float, by: float) -> float:
    """Distance of a segment to a polygon (n, 2), or to a point (n = 1); 0 where they overlap."""
    n = outline.shape[0]
    dx, dy = bx - ax, by - ay
    d2 = dx * dx + dy * dy
    if n == 1:
        return math.sqrt(_point_segment2(outline[0, 0], outline[0, 1], ax, ay, dx, dy, d2))
    inside = False
    best = math.inf
    px, py = outline[n - 1, 0], outline[n - 1, 1]
    sp = dx * (py - ay) - dy * (px - ax)
    for i in range(n):
        qx, qy = outline[i, 0], outline[i, 1]
        ex, ey = qx - px, qy - py
        e2 = ex * ex + ey * ey
        sq = dx * (qy - ay) - dy * (qx - ax)
        sa = ex * (ay - py) - ey * (ax - px)
        sb = ex * (by - py) - ey * (bx - px)
        if sp * sq < 0.0 and sa * sb < 0.0:
            return 0.0
        if (py > ay) != (qy > ay) and (sa > 0.0) == (qy > py):
            inside = not inside
        best = min(best, _point_segment2(ax, ay, px, py, ex, ey, e2))
        if d2 > 0.0:
            best = min(best, _point_segment2(bx, by, px, py, ex, ey, e2))
        best = min(best, _point_segment2(qx, qy, ax, ay, dx, dy, d2))
        px, py, sp = qx, qy, sq
    return 0.0 if inside else math.sqrt(best)


@kernel()
def _item_distance(
    outline: Points,
    skin: float,
    box: tuple[float, float, float, float],
    pose: tuple[float, float, float, float],
    item: tuple[float, float, float, float, float],
    best: float,
) -> float:
    """
    The smaller of `best` and the distance of an outline at a pose to an item.

    Args:
        box: Bounding box of the outline in its own frame: x_min, y_min, x_max, y_max.
        pose: x, y, cosine and sine of the heading.
        item: x0, y0, x1, y1, radius.
    """
    x, y, c, s = pose
    grow = item[4] + skin
    dx, dy = item[0] - x, item[1] - y
    ax, ay = c * dx + s * dy, c * dy - s * dx
    dx, dy = item[2] - x, item[3] - y
    bx, by = c * dx + s * dy, c * dy - s * dx
    reach = best + grow
    if (
        max(ax, bx) < box[0] - reach
        or min(ax, bx) > box[2] + reach
        or max(ay, by) < box[1] - reach
        or min(ay, by) > box[3] + reach
    ):
        return best
    return min(best, segment_outline(outline, ax, ay, bx, by) - grow)


@kernel()
def _outline_box(outline: Points) -> tuple[float, float, float, float]:
    low_x, low_y, high_x, high_y = math.inf, math.inf, -math.inf, -math.inf
    for i in range(outline.shape[0]):
        low_x, high_x = min(low_x, outline[i, 0]), max(high_x, outline[i, 0])
        low_y, high_y = min(low_y, outline[i, 1]), max(high_y, outline[i, 1])
    return low_x, low_y, high_x, high_y


@kernel()
def exact_raster(
    scene: Scene,
    outline: Points,
    skin: float,
    x: float,
    y: float,
    c: float,
    s: float,
    best: float,
) -> float:
    """
    The smaller of `best` and the distance of an outline to the items around and to the limits.

    Items farther than `best` are not looked at, so a small one makes a quick yes or no.
    """
    box = _outline_box(outline)
    pose = (x, y, c, s)
    wx0, wy0, wx1, wy1 = math.inf, math.inf, -math.inf, -math.inf
    for i in range(outline.shape[0]):
        px, py = outline[i, 0], outline[i, 1]
        wx, wy = x + c * px - s * py, y + s * px + c * py
        wx0, wx1 = min(wx0, wx), max(wx1, wx)
        wy0, wy1 = min(wy0, wy), max(wy1, wy)
    best = min(best, wx0 - skin - scene.x_m_min, wy0 - skin - scene.y_m_min)
    best = min(best, scene.x_m_max - wx1 - skin, scene.y_m_max - wy1 - skin)
    if best <= 0.0:
        return best
    grow = best + skin
    per = scene.bucket_side
    bucket = scene.tile_cells * scene.cell_m / per
    tile_rows, tile_columns = scene.edges_of.shape
    c0 = max(math.floor((wx0 - grow - scene.corner_x_m) / bucket), 0)
    r0 = max(math.floor((wy0 - grow - scene.corner_y_m) / bucket), 0)
    c1 = min(math.floor((wx1 + grow - scene.corner_x_m) / bucket), tile_columns * per - 1)
    r1 = min(math.floor((wy1 + grow - scene.corner_y_m) / bucket), tile_rows * per - 1)
    for tr in range(r0 // per, r1 // per + 1):
        for tc in range(c0 // per, c1 // per + 1):
            offset = scene.edges_of[tr, tc]
            if offset < 0:
                continue
            base = offset + 2 * per * per + 1
            first_column, last_column = max(c0 - tc * per, 0), min(c1 - tc * per, per - 1)
            for r in range(max(r0 - tr * per, 0), min(r1 - tr * per, per - 1) + 1):
                # The buckets of a row lie behind each other.
                low = scene.wholes[offset + r * per + first_column]
                high = scene.wholes[offset + r * per + last_column + 1]
                for at in range(base + 5 * low, base + 5 * high, 5):
                    item = (
                        scene.numbers[at],
                        scene.numbers[at + 1],
                        scene.numbers[at + 2],
                        scene.numbers[at + 3],
                        scene.numbers[at + 4],
                    )
                    best = _item_distance(outline, skin, box, pose, item, best)
                    if best <= 0.0:
                        return best
    return best


@kernel()
def inside_raster(scene: Scene, x: float, y: float) -> bool:
    """
    Does a point lie in a polygon or in a blocked cell?

    For points that lie on no edge; discs are left to the exact distance. Only a point in a
    filled cell is looked at closely, which few are.
    """
    _, _, tr, tc, row, column = _cell_of(scene, x, y)
    side = scene.tile_cells
    offset = scene.field_of[tr, tc]
    if offset == OPEN:
        return False
    if offset != SOLID:
        at = offset + row * (side + 1) + column
        above = at + side + 1
        if scene.floats[at] + scene.floats[at + 1] > 0.0:
            return False
        if scene.floats[above] + scene.floats[above + 1] > 0.0:
            return False
    offset = scene.edges_of[tr, tc]
    if offset < 0:
        return True  # a whole tile without an edge
    per = scene.bucket_side
    bucket = side * scene.cell_m / per
    q = max(min(int((x - scene.corner_x_m) / bucket), (tc + 1) * per - 1), tc * per)
    r = max(min(int((y - scene.corner_y_m) / bucket), (tr + 1) * per - 1), tr * per)
    b = (r - tr * per) * per + (q - tc * per)
    rx = scene.corner_x_m + (q + REFERENCE_X) * bucket
    ry = scene.corner_y_m + (r + REFERENCE_Y) * bucket
    around = scene.wholes[offset + per * per + 1 + b]
    base = offset + 2 * per * per + 1
    for i in range(scene.wholes[offset + b], scene.wholes[offset + b + 1]):
        at = base + 5 * i
        if scene.numbers[at + 4] == 0.0:
            x0, y0 = scene.numbers[at], scene.numbers[at + 1]
            x1, y1 = scene.numbers[at + 2], scene.numbers[at + 3]
            around += item_crossed(x0, y0, x1, y1, rx, ry, x, y)
    return bool(around > 0)


@kernel()
def exact_outlines(
    scene: Scene,
    body: Body,
    outline: Points,
    x: float,
    y: float,
    c: float,
    s: float,
    reach: float,
    best: float,
) -> float:
    """
    The same for obstacles that are never rastered; a body inside one counts as overlap.

    Args:
        outline: The body's own, or what it sweeps.
        reach: How far the outline goes beyond the disc around the body.
    """
    box = _outline_box(outline)
    pose = (x, y, c, s)
    skin = body.skin_m
    ox = x + c * body.outer_x_m - s * body.outer_y_m
    oy = y + s * body.outer_x_m + c * body.outer_y_m
    ix = x + c * body.inner_x_m - s * body.inner_y_m
    iy = y + s * body.inner_x_m + c * body.inner_y_m
    for k in range(scene.outline_discs.shape[0]):
        disc = scene.outline_discs[k]
        away = math.hypot(disc[0] - ox, disc[1] - oy) - disc[2] - body.outer_radius_m
        if away - reach >= best:
            continue
        inside = False
        for i in range(scene.outline_starts[k], scene.outline_starts[k + 1]):
            item = scene.outline_items[i]
            if (item[1] > iy) != (item[3] > iy):
                cut = item[0] + (item[2] - item[0]) * (iy - item[1]) / (item[3] - item[1])
                if ix < cut:
                    inside = not inside
            place = (item[0], item[1], item[2], item[3], item[4])
            best = _item_distance(outline, skin, box, pose, place, best)
        if inside:
            return 0.0
        if best <= 0.0:
            return best
    return best


@kernel()
def _limit_distance(scene: Scene, x: float, y: float) -> float:
    return min(min(x - scene.x_m_min, scene.x_m_max - x), min(y - scene.y_m_min, scene.y_m_max - y))


@kernel()
def quick_excess(
    scene: Scene, body: Body, x: float, y: float, c: float, s: float, enough: float
) -> float:
    """
    A lower bound of the excess at a pose from the distance field alone.

    Above 0 it is proved room; -inf is a proved collision; anything else decides nothing.

    Args:
        enough: The disc around the body answers when it gives more than this; otherwise the
            discs that cover it are asked.
    """
    hard = body.clearance_m
    ox = x + c * body.outer_x_m - s * body.outer_y_m
    oy = y + s * body.outer_x_m + c * body.outer_y_m
    limit = _limit_distance(scene, ox, oy)
    if not _is_within(scene, ox, oy):
        return -math.inf
    near = math.inf
    for k in range(scene.outline_discs.shape[0]):
        disc = scene.outline_discs[k]
        near = min(near, math.hypot(disc[0] - ox, disc[1] - oy) - disc[2])
    near -= body.outer_radius_m + hard
    quick = min(free_around(scene, ox, oy), limit) - body.outer_radius_m - hard
    if quick > enough:
        return min(quick, near)
    ix = x + c * body.inner_x_m - s * body.inner_y_m
    iy = y + s * body.inner_x_m + c * body.inner_y_m
    if field_at(scene, ix, iy) + RASTER_CELLS * scene.cell_m < body.inner_radius_m + hard:
        return -math.inf
    free = math.inf
    for i in range(body.cover_m.shape[0]):
        dx, dy = body.cover_m[i, 0], body.cover_m[i, 1]
        px, py = x + c * dx - s * dy, y + s * dx + c * dy
        around = min(free_around(scene, px, py), _limit_distance(scene, px, py))
        free = min(free, around - body.cover_m[i, 2] - hard)
        if free <= 0.0:
            break
    return min(max(free, quick), near)


@kernel()
def pose_excess(scene: Scene, body: Body, x: float, y: float, heading: float) -> float:
    """
    How much more than its hard clearance the body keeps at a pose; never overstated.

    Exact when small, a lower bound when large; at most 0 in a collision (not its depth).
    """
    c, s = math.cos(heading), math.sin(heading)
    quick = quick_excess(scene, body, x, y, c, s, NEAR_M)
    if quick > NEAR_M:
        return quick
    if quick == -math.inf:
        return 0.0
    return _exact_excess(scene, body, x, y, c, s, EXACT_M)


@kernel()
def exact_excess(scene: Scene, body: Body, x: float, y: float, heading: float, cap: float) -> float:
    """The excess at a pose, exact up to a cap; slower where there is much room."""
    return _exact_excess(scene, body, x, y, math.cos(heading), math.sin(heading), cap)


@kernel()
def _exact_excess(
    scene: Scene, body: Body, x: float, y: float, c: float, s: float, cap: float
) -> float:
    hard, outline = body.clearance_m, body.outline_m
    best = exact_raster(scene, outline, body.skin_m, x, y, c, s, hard + cap)
    if scene.outline_discs.shape[0] > 0 and best > 0.0:
        best = exact_outlines(scene, body, outline, x, y, c, s, 0.0, best)
    if best > hard and _is_swallowed(scene, body, x, y, c, s):
        return 0.0
    return best - hard


@kernel()
def _is_swallowed(scene: Scene, body: Body, x: float, y: float, c: float, s: float) -> bool:
    """Does a body that touches no edge lie inside an obstacle? Then any of its points does."""
    ix = x + c * body.inner_x_m - s * body.inner_y_m
    iy = y + s * body.inner_x_m + c * body.inner_y_m
    return inside_raster(scene, ix, iy)


@kernel()
def pose_free(scene: Scene, body: Body, x: float, y: float, heading: float) -> bool:
    """Is the excess at a pose above CONTACT_M? The same answer as `pose_excess`, sooner."""
    c, s = math.cos(heading), math.sin(heading)
    quick = quick_excess(scene, body, x, y, c, s, CONTACT_M)
    if quick > CONTACT_M:
        return True
    if quick == -math.inf:
        return False
    wanted, outline = body.clearance_m + CONTACT_M, body.outline_m
    cap = wanted * (1.0 + 1e-12)
    best = exact_raster(scene, outline, body.skin_m, x, y, c, s, cap)
    if scene.outline_discs.shape[0] > 0 and best > wanted:
        best = exact_outlines(scene, body, outline, x, y, c, s, 0.0, best)
    return bool(best > wanted) and not _is_swallowed(scene, body, x, y, c, s)


@kernel(Scene, Body, "rf8[:, ::1]", "f8[::1]")
def excesses_kernel(scene: Scene, body: Body, poses: Points, out: Points) -> None:
    """`pose_excess` of many poses (n, 3)."""
    for i in range(poses.shape[0]):
        out[i] = pose_excess(scene, body, poses[i, 0], poses[i, 1], poses[i, 2])
