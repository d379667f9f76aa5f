"""
Drawings of a site with vehicles and routes, in the manner of a printed site plan.

Ink on paper: masses are hatched, routes are lines in few strong inks, drawn out when the vehicle
goes forward and dashed when it reverses. Everything is in metres of the site. matplotlib is
used without its global state and loads only when a drawing is made.
"""

import itertools
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any, Final, Protocol

import numpy as np
import numpy.typing as npt
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.patches import Circle, PathPatch, Polygon
from matplotlib.path import Path as Outline

from bywayd.outlines import Points, placed

Box = tuple[float, float, float, float]


class Block(Protocol):
    """Where a guarded route is blocked."""

    @property
    def x_m(self) -> float: ...

    @property
    def y_m(self) -> float: ...


PAPER: Final = "#f6f1e4"
INK: Final = "#2b2a28"
GRID: Final = "#ded5c0"
UNKNOWN: Final = "#cfc6b2"
#: How a kind of mass is printed: face, edge, hatch.
PRINTS: Final[dict[str, tuple[str, str, str]]] = {
    "building": ("#d9b8a4", INK, "////"),
    "stack": ("#e3cd97", "#6b5a2c", "xx"),
    "pack": ("#c9d3b4", "#4d5a2c", "++"),
    "other": ("#cdbfa8", INK, "\\\\\\\\"),
    "outline": ("none", INK, ""),
}
#: Inks for routes and units, told apart in print and by most colour-blind readers.
INKS: Final = ("#8c2f39", "#1f5673", "#5b7b3a", "#7a4b8f", "#a8642a")

#: What is in the way, and what moves.
ALARM: Final = "#d2691e"

_PIXELS_PER_INCH: Final = 110
_WIDTH_INCHES: Final = 11.0
#: The margin around the ground that is shown, as a share of its width.
_EDGE_RATIO: Final = 0.03


def box_around(
    points_m: Iterable[Sequence[float]], margin_m: float, within_m: Box | None = None
) -> Box:
    """Return the box around some points, grown on all sides, but not beyond another box."""
    points = np.array(list(points_m), np.float64)
    low, high = points.min(axis=0) - margin_m, points.max(axis=0) + margin_m
    if within_m is not None:
        low, high = np.maximum(low, within_m[:2]), np.minimum(high, within_m[2:])
    (x_m_min, y_m_min), (x_m_max, y_m_max) = low.tolist(), high.tolist()
    return x_m_min, y_m_min, x_m_max, y_m_max


class Plan:
    """
    One drawing. Draw what lies below first; `save` writes the file.

    Args:
        title: Printed in the corner, with `notes` below it.
        box_m: The ground to show: x_min, y_min, x_max, y_max.
        notes: Further lines of the title block.
    """

    def __init__(self, title: str, box_m: Box, notes: Iterable[str] = ()) -> None:
        x_m_min, y_m_min, x_m_max, y_m_max = box_m
        edge_m = _EDGE_RATIO * (x_m_max - x_m_min)
        width_m, height_m = x_m_max - x_m_min + 2 * edge_m, y_m_max - y_m_min + 2 * edge_m
        self._title, self._notes = title, list(notes)
        # The strip below the ground holds the title block; it does not grow with the site.
        strip_inches = 1.15
        height_inches = min(3 * _WIDTH_INCHES, _WIDTH_INCHES * height_m / width_m) + strip_inches
        self._figure = Figure((_WIDTH_INCHES, height_inches), _PIXELS_PER_INCH, facecolor=PAPER)
        FigureCanvasAgg(self._figure)
        strip_ratio = strip_inches / height_inches
        self._axes = self._figure.add_axes((0.045, strip_ratio, 0.94, 0.985 - strip_ratio))
        self._axes.set(
            xlim=(x_m_min - edge_m, x_m_max + edge_m),
            ylim=(y_m_min - edge_m, y_m_max + edge_m),
            aspect="equal",
            facecolor=PAPER,
        )
        self._axes.set_axisbelow(True)
        self._axes.grid(True, color=GRID, linewidth=0.6)
        self._axes.tick_params(colors=INK, labelsize=7, direction="in")
        for spine in self._axes.spines.values():
            spine.set(color=INK, linewidth=1.2)
        self._legend: dict[str, dict[str, Any]] = {}

    def limits(self, box_m: Box) -> None:
        """Draw the border of the site."""
        x_m_min, y_m_min, x_m_max, y_m_max = box_m
        corners = [(x_m_min, y_m_min), (x_m_max, y_m_min), (x_m_max, y_m_max), (x_m_min, y_m_max)]
        self._axes.add_patch(Polygon(corners, fill=False, edgecolor=INK, linewidth=2.2, zorder=2))

    def cells(self, corner_m: tuple[float, float], cell_m: float, cells: npt.ArrayLike) -> None:
        """Draw cells (0 free, 1 occupied, 2 unknown), row 0 at the lowest y."""
        values = np.asarray(cells)
        rows, columns = values.shape
        colours = np.zeros((rows, columns, 4))
        for value, colour in ((1, INK), (2, UNKNOWN)):
            rgb = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
            colours[values == value] = (*rgb, 1.0)
        x_m, y_m = corner_m
        extent = (x_m, x_m + columns * cell_m, y_m, y_m + rows * cell_m)
        limits = (*self._axes.get_xlim(), *self._axes.get_ylim())
        self._axes.imshow(colours, extent=extent, origin="lower", interpolation="nearest", zorder=1)
        self._axes.axis(limits)  # imshow would zoom in on the cells

    def polygons(
        self,
        polygons: Mapping[str, npt.ArrayLike],
        kind: str = "other",
        *,
        named: bool = False,
        holes: Mapping[str, Sequence[npt.ArrayLike]] | None = None,
    ) -> None:
        """Draw masses of one of the kinds in `PRINTS`, with their ids when `named`."""
        face, edge, hatch = PRINTS[kind]
        for name, corners_m in polygons.items():
            ring = np.asarray(corners_m, np.float64)
            style = {"facecolor": face, "edgecolor": edge, "hatch": hatch, "linewidth": 0.9}
            path = _path_of([ring, *(holes or {}).get(name, ())])
            self._axes.add_patch(PathPatch(path, zorder=3, **style))
            if named:
                self._label(name, _inside(path, ring))

    def discs(
        self,
        discs: Mapping[str, tuple[float, float, float]],
        kind: str = "other",
        *,
        named: bool = False,
    ) -> None:
        """Draw discs (x, y, radius), with their ids when `named`."""
        face, edge, hatch = PRINTS[kind]
        for name, (x_m, y_m, radius_m) in discs.items():
            style = {"facecolor": face, "edgecolor": edge, "hatch": hatch, "linewidth": 0.9}
            self._axes.add_patch(Circle((x_m, y_m), radius_m, zorder=3, **style))
            if named:
                self._label(name, (x_m, y_m))

    def sweep(self, ring_m: npt.ArrayLike) -> None:
        """Draw ground that something may cover in the next seconds."""
        ring = np.asarray(ring_m, np.float64)
        self._axes.add_patch(Polygon(ring, facecolor=ALARM, alpha=0.13, linewidth=0.0, zorder=4))
        self._axes.add_patch(
            Polygon(ring, fill=False, edgecolor=ALARM, linewidth=0.8, linestyle=":", zorder=4)
        )

    def mover(
        self,
        name: str,
        outline_m: npt.ArrayLike,
        pose: Sequence[float],
        velocity_mps: Sequence[float],
    ) -> None:
        """Draw something that moves, with an arrow to where it is in a second."""
        ring = placed(outline_m, pose)
        self._axes.add_patch(
            Polygon(ring, facecolor=ALARM, edgecolor=INK, linewidth=1.0, alpha=0.9, zorder=7)
        )
        x_m, y_m = float(pose[0]), float(pose[1])
        vx, vy = (float(value) for value in velocity_mps[:2])
        tip = (x_m + vx, y_m + vy)
        if np.hypot(vx, vy) > 0.05:
            style = {"arrowstyle": "-|>", "color": INK, "mutation_scale": 9}
            self._axes.annotate("", xy=tip, xytext=(x_m, y_m), arrowprops=style, zorder=8)
        top = float(ring[:, 1].max())
        self._label(name, (x_m, top + 0.02 * float(np.ptp(self._axes.get_ylim()))))

    def guarded(
        self,
        unit: str,
        poses: npt.ArrayLike,
        progress_m: float,
        blocked: "Block | None",
        ink: str,
    ) -> None:
        """Draw a guarded route: what is driven thin, what is ahead strong, where it is blocked."""
        points = np.asarray(poses, np.float64)[:, :2]
        along = np.concatenate([[0.0], np.hypot(*np.diff(points, axis=0).T).cumsum()])
        ahead = int(np.searchsorted(along, progress_m))
        self.path(points[: ahead + 1], ink, width=0.7)
        self.path(points[max(ahead - 1, 0) :], ink, f"guarded route of {unit}", width=2.0)
        self._arrows(points[max(ahead - 1, 0) :], ink)
        at = points[min(ahead, len(points) - 1)]
        self._axes.plot(*at, marker="o", markersize=6, color=ink, zorder=9)
        if blocked is not None:
            self._axes.plot(
                blocked.x_m, blocked.y_m, marker="X", markersize=13, color=ALARM,
                markeredgecolor=INK, zorder=10,
            )  # fmt: skip
            self._legend["blocked"] = {"color": ALARM, "marker": "X", "linestyle": "none"}

    def way(self, points_m: npt.ArrayLike, label: str) -> None:
        """Draw a way that would be open if something moved."""
        points = np.asarray(points_m, np.float64)
        style: dict[str, Any] = {"color": ALARM, "linewidth": 1.8, "linestyle": (0, (1, 1.5))}
        self._axes.plot(points[:, 0], points[:, 1], zorder=8, **style)
        self._legend[label] = style

    def mark(self, place_m: Sequence[float], text: str) -> None:
        """Point at something that would have to move."""
        self._axes.plot(
            place_m[0], place_m[1], marker="X", markersize=12, color=ALARM, markeredgecolor=INK,
            zorder=10,
        )  # fmt: skip
        offset = 0.03 * float(np.ptp(self._axes.get_ylim()))
        self._label(text, (place_m[0], place_m[1] - offset))

    def path(
        self, points_m: npt.ArrayLike, ink: str, label: str = "", *, width: float = 1.1
    ) -> None:
        """Draw where something went."""
        points = np.asarray(points_m, np.float64)
        self._axes.plot(
            points[:, 0], points[:, 1], color=ink, linewidth=width, alpha=0.85, zorder=5,
            solid_capstyle="round",
        )  # fmt: skip
        if label:
            self._legend[label] = {"color": ink, "linewidth": 2.0}

    def route(self, table: npt.NDArray[Any], ink: str = INKS[0], label: str = "route") -> None:
        """Draw a route table: forward drawn out, reverse dashed, an arrow now and then."""
        points = np.column_stack((table["x_m"], table["y_m"]))
        gears = table["gear"][:-1]
        turns = [0, *(np.flatnonzero(np.diff(gears)) + 1).tolist(), len(gears)]
        for first, last in itertools.pairwise(turns):
            # One line a leg: a dash must not begin anew at every row.
            leg, way = points[first : last + 1], "forward" if gears[first] > 0 else "in reverse"
            style = "-" if gears[first] > 0 else (0, (2.2, 1.2))
            self._axes.plot(
                leg[:, 0], leg[:, 1], color=ink, linewidth=2.0, linestyle=style, zorder=6
            )
            self._legend[f"{label}, {way}"] = {"color": ink, "linewidth": 2.0, "linestyle": style}
        self._arrows(points, ink)

    def swath(
        self, outline_m: npt.ArrayLike, table: npt.NDArray[Any], every_m: float = 1.5
    ) -> None:
        """Draw where the vehicle will stand on its way, as ghosts."""
        along_m = np.hypot(np.diff(table["x_m"]), np.diff(table["y_m"])).cumsum()
        rows = np.searchsorted(along_m, np.arange(0.0, along_m[-1:].sum(), every_m)) + 1
        for row in table[rows]:
            self.vehicle(outline_m, (row["x_m"], row["y_m"], row["heading_rad"]), ghost=True)

    def vehicle(
        self,
        outline_m: npt.ArrayLike,
        pose: Sequence[float],
        ink: str = INK,
        *,
        ghost: bool = False,
    ) -> None:
        """Draw a vehicle at a pose; a ghost is where it may be, not where it is."""
        ring = placed(outline_m, pose)
        width = 0.7 if ghost else 1.5
        self._axes.add_patch(
            Polygon(
                ring, facecolor=PAPER, fill=not ghost, edgecolor=ink, linewidth=width, zorder=5,
                alpha=0.5 if ghost else 1.0,
            )
        )  # fmt: skip
        if ghost:
            return
        # A bar from the rear axle to the front says which way it looks.
        x_m, y_m, heading_rad = (float(value) for value in pose[:3])
        nose_m = 0.7 * float(np.asarray(outline_m, np.float64)[:, 0].max())
        tip = (x_m + nose_m * np.cos(heading_rad), y_m + nose_m * np.sin(heading_rad))
        self._axes.plot((x_m, tip[0]), (y_m, tip[1]), color=ink, linewidth=1.3, zorder=8)
        self._axes.plot(x_m, y_m, marker="o", markersize=3.0, color=ink, zorder=8)

    def goal(self, outline_m: npt.ArrayLike, pose: Sequence[float], ink: str = INK) -> None:
        """Draw where a vehicle is to stand: its outline dashed, a cross on its origin."""
        ring = placed(outline_m, pose)
        self._axes.add_patch(
            Polygon(ring, fill=False, edgecolor=ink, linewidth=1.3, linestyle=(0, (4, 2)), zorder=7)
        )
        self._axes.plot(pose[0], pose[1], marker="+", markersize=9, color=ink, zorder=8)

    def save(self, file: Path) -> None:
        """Write the drawing; the suffix says the format (png, svg, pdf)."""
        self._title_block()
        self._figure.savefig(file, facecolor=PAPER)

    def _label(self, text: str, place_m: Sequence[float]) -> None:
        box = {"boxstyle": "round,pad=0.15", "facecolor": PAPER, "edgecolor": "none", "alpha": 0.85}
        self._axes.text(
            place_m[0], place_m[1], text, fontsize=7, color=INK, ha="center", va="center",
            zorder=9, bbox=box, clip_on=True,
        )  # fmt: skip

    def _arrows(self, points: Points, ink: str) -> None:
        steps_m = np.hypot(*np.diff(points, axis=0).T)
        along_m = np.concatenate(([0.0], np.cumsum(steps_m)))
        every_m = max(2.0, along_m[-1] / 8)
        for at_m in np.arange(every_m / 2, along_m[-1], every_m):
            row = int(np.searchsorted(along_m, at_m))
            (x0, y0), (x1, y1) = points[row - 1], points[row]
            if np.hypot(x1 - x0, y1 - y0) > 1e-3:
                style = {"arrowstyle": "-|>", "color": ink, "mutation_scale": 11}
                self._axes.annotate("", xy=(x1, y1), xytext=(x0, y0), arrowprops=style, zorder=8)

    def _title_block(self) -> None:
        figure = self._figure
        inches = figure.get_figheight()
        top = 0.78 / inches
        figure.text(0.045, top, self._title, fontsize=13, color=INK, weight="bold", va="top")
        for row, note in enumerate(self._notes[:3]):
            at = top - (0.26 + 0.17 * row) / inches
            figure.text(0.045, at, note, fontsize=8, color=INK, va="top")
        figure.text(
            0.985, 0.12 / inches, "metres from the origin of the site", fontsize=7, color=INK,
            ha="right",
        )  # fmt: skip
        if self._legend:
            lines = [
                self._axes.plot([], [], label=label, **style)[0]
                for label, style in self._legend.items()
            ]
            figure.legend(
                handles=lines, loc="upper right", bbox_to_anchor=(0.985, top + 0.06 / inches),
                ncols=min(4, len(lines)), fontsize=8, frameon=False, labelcolor=INK,
            )  # fmt: skip


def _path_of(rings: Sequence[npt.ArrayLike]) -> Outline:
    """Return rings as one outline; those inside others are holes, whichever way they turn."""
    parts = [np.asarray(ring, np.float64) for ring in rings]
    # Holes turn the other way round from the outline, or they would be filled.
    turned = [ring if _is_left(ring) == (i == 0) else ring[::-1] for i, ring in enumerate(parts)]
    closed = [Outline(np.vstack([ring, ring[:1]]), closed=True) for ring in turned]
    return Outline.make_compound_path(*closed)


def _is_left(ring: Points) -> bool:
    x, y = ring.T
    return bool((x * np.roll(y, -1) - y * np.roll(x, -1)).sum() > 0.0)


def _inside(path: Outline, ring: Points) -> tuple[float, float]:
    """Return a place well inside a mass, for its label: the best of a grid of 15 x 15."""
    low, high = ring.min(axis=0), ring.max(axis=0)
    shares = (np.arange(15) + 0.5) / 15
    grid = np.stack(np.meshgrid(*(low + (high - low) * shares[:, None]).T), axis=-1).reshape(-1, 2)
    edges = np.vstack([p.vertices for p in [path]])
    inside = grid[_contains(path, grid)]
    if not len(inside):  # too thin for the grid
        middle = ring.mean(axis=0)
        return float(middle[0]), float(middle[1])
    apart = np.hypot(inside[:, None, 0] - edges[:, 0], inside[:, None, 1] - edges[:, 1])
    best = inside[apart.min(axis=1).argmax()]
    return float(best[0]), float(best[1])


def _contains(path: Outline, points: Points) -> npt.NDArray[np.bool_]:
    """Which points lie in an outline and in none of its holes."""
    rings = path.to_polygons(closed_only=True)
    inside = [Outline(ring).contains_points(points) for ring in rings]
    held: npt.NDArray[np.bool_] = np.logical_xor.reduce(inside)
    return held
