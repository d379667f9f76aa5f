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
from matplotlib.lines import Line2D
from matplotlib.patches import Circle, Patch, PathPatch, Polygon
from matplotlib.path import Path as Outline

from bywayd.outlines import Points, disc_outline, placed

Box = tuple[float, float, float, float]


class Block(Protocol):
    """Where a guarded route is blocked."""

    @property
    def x_m(self) -> float: ...

    @property
    def y_m(self) -> float: ...

    @property
    def distance_m(self) -> float: ...

    @property
    def kind(self) -> str: ...

    @property
    def layer(self) -> str: ...

    @property
    def id(self) -> str: ...


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
#: Inks for routes and units. Colour-blind readers tell them apart too, and from `ALARM` and `INK`
#: (a test looks through their eyes); nothing is told by its colour alone.
INKS: Final = ("#3d16b0", "#9f1512", "#26816d", "#9a6ae1", "#981486")

#: What is in the way, and what moves; the ground that it may cover is a fifth of it on paper.
ALARM: Final = "#d06c1f"
SWEEP: Final = "#eed6bd"

_PIXELS_PER_INCH: Final = 110
_WIDTH_INCHES: Final = 11.0
#: The margin around the ground that is shown, as a share of its width.
_EDGE_RATIO: Final = 0.03
#: The strip below the ground: title and notes, and a line for every four entries of the legend.
_TITLE_INCHES: Final = 0.62
_NOTE_INCHES: Final = 0.17
_LEGEND_ROW_INCHES: Final = 0.21
_LEGEND_COLUMNS: Final = 5
#: Of a label, in points.
_LABEL_SIZE: Final = 7


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
        self._ground_inches = min(3 * _WIDTH_INCHES, 0.96 * _WIDTH_INCHES * height_m / width_m)
        self._figure = Figure(dpi=_PIXELS_PER_INCH, facecolor=PAPER)
        FigureCanvasAgg(self._figure)
        self._axes = self._figure.add_axes((0.0, 0.0, 1.0, 1.0))
        self._legend: dict[str, dict[str, Any]] = {}
        self._set_size()
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

    def _set_size(self) -> None:
        """Give the strip below the ground the room that it needs; the ground keeps its scale."""
        rows = -(-len(self._legend) // _LEGEND_COLUMNS)
        notes_inches = _NOTE_INCHES * len(self._notes)
        self._strip_inches = _TITLE_INCHES + notes_inches + _LEGEND_ROW_INCHES * rows + 0.12
        height_inches = 0.12 + self._ground_inches + self._strip_inches
        self._figure.set_size_inches(_WIDTH_INCHES, height_inches)
        share = 1.0 / height_inches
        self._axes.set_position(
            (0.04, self._strip_inches * share, 0.945, self._ground_inches * share)
        )

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
        self._axes.imshow(colours, extent=extent, origin="lower", interpolation="nearest", zorder=2)
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
                self._name(name, path, ring)

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
                ring = placed(disc_outline(radius_m, 24), (x_m, y_m, 0.0))
                self._name(name, _path_of([ring]), ring)

    def key(self, label: str, kind: str) -> None:
        """Say in the legend what a kind of mass stands for."""
        self._legend[label] = {"kind": kind}

    def sweep(self, ring_m: npt.ArrayLike) -> None:
        """Draw ground that something may cover in the next seconds."""
        ring = np.asarray(ring_m, np.float64)
        # All edges lie below all faces, so that of pieces that overlap only the outer edge shows.
        style: dict[str, Any] = {"edgecolor": ALARM, "linewidth": 1.8, "linestyle": (0, (1, 1.2))}
        self._axes.add_patch(Polygon(ring, fill=False, zorder=1.0, **style))
        self._axes.add_patch(Polygon(ring, facecolor=SWEEP, linewidth=0.0, zorder=1.1))
        self._legend["ground that it may cover"] = {"kind": "sweep"}

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
        self._label(name, (x_m, float(ring[:, 1].max())), above=True)
        self._legend["moves, and where to in a second"] = {"kind": "mover"}

    def guarded(
        self,
        unit: str,
        poses: npt.ArrayLike,
        progress_m: float,
        blocked: "Block | None",
        ink: str,
    ) -> None:
        """Draw a guarded route: what is driven thin, what is ahead strong, where it is blocked."""
        rows = np.asarray(poses, np.float64)
        along_m = np.concatenate([[0.0], np.hypot(*np.diff(rows[:, :2], axis=0).T).cumsum()])
        here = [float(np.interp(progress_m, along_m, rows[:, k])) for k in range(2)]
        row = max(0, min(int(np.searchsorted(along_m, progress_m)), len(rows) - 1))
        ahead = np.vstack([here, rows[row:, :2]])
        self.path(np.vstack([rows[:row, :2], here]), ink, width=0.8)
        self.path(ahead, ink, width=2.2)
        self._arrows(ahead, ink)
        self._legend["guarded route, ahead"] = {"color": INK, "linewidth": 2.2}
        self._legend["driven already"] = {"color": INK, "linewidth": 0.8}
        turned = float(np.degrees(rows[row, 2])) - 90.0
        self._axes.plot(
            *here, marker=(3, 0, turned), markersize=11, color=ink, markeredgecolor=PAPER, zorder=9
        )
        self._label(unit, here, above=True)
        if blocked is not None:
            style: dict[str, Any] = {"color": ALARM, "marker": "X", "markeredgecolor": INK}
            self._axes.plot(blocked.x_m, blocked.y_m, markersize=12, zorder=10, **style)
            text = f"{blocked.id or blocked.layer or blocked.kind} in {blocked.distance_m:.1f} m"
            self._label(text, (blocked.x_m, blocked.y_m), below=True)
            self._legend["where it is blocked"] = {**style, "linestyle": "none", "markersize": 9}

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
        self._label(text, place_m, below=True)

    def path(
        self, points_m: npt.ArrayLike, ink: str, label: str = "", *, width: float = 1.1
    ) -> None:
        """Draw where something went."""
        points = np.asarray(points_m, np.float64)
        self._axes.plot(
            points[:, 0], points[:, 1], color=ink, linewidth=width, zorder=5,
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
        self._set_size()
        self._title_block()
        self._figure.savefig(file, facecolor=PAPER)

    def _name(self, name: str, path: Outline, ring: Points) -> None:
        """Print the name of a mass where it has room for it, otherwise above it."""
        place, room_m = _roomiest(path, ring)
        (x_px, _), (reach_px, _) = self._axes.transData.transform([(0.0, 0.0), (room_m, 0.0)])
        # Letters are about 0.6 of their height wide.
        half_px = 0.3 * len(name) * _LABEL_SIZE * _PIXELS_PER_INCH / 72
        if reach_px - x_px > 0.55 * half_px:
            self._label(name, place, zorder=4)
        else:
            top = (0.5 * (ring[:, 0].min() + ring[:, 0].max()), ring[:, 1].max())
            self._label(name, top, above=True, zorder=4)

    def _label(
        self,
        text: str,
        place_m: Sequence[float],
        *,
        above: bool = False,
        below: bool = False,
        zorder: float = 11,
    ) -> None:
        box = {"boxstyle": "round,pad=0.15", "facecolor": PAPER, "edgecolor": "none", "alpha": 0.85}
        self._axes.annotate(
            text, (place_m[0], place_m[1]), (0, 7 * above - 9 * below), fontsize=_LABEL_SIZE,
            textcoords="offset points", color=INK, ha="center",
            va="bottom" if above else "top" if below else "center",
            zorder=zorder, bbox=box, annotation_clip=True,
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
        figure, share = self._figure, 1.0 / self._figure.get_figheight()
        top_inches = self._strip_inches - 0.3
        figure.text(0.04, top_inches * share, self._title, fontsize=13, color=INK, weight="bold",
                    va="top")  # fmt: skip
        figure.text(
            0.985, (top_inches - 0.04) * share, "metres from the origin of the site", fontsize=7,
            color=INK, ha="right", va="top",
        )  # fmt: skip
        for row, note in enumerate(self._notes):
            at = (top_inches - 0.27 - _NOTE_INCHES * row) * share
            figure.text(0.04, at, note, fontsize=8, color=INK, va="top")
        if self._legend:
            below_inches = top_inches - 0.27 - _NOTE_INCHES * len(self._notes)
            figure.legend(
                handles=[_swatch(label, style) for label, style in self._legend.items()],
                loc="upper left", bbox_to_anchor=(0.034, below_inches * share),
                ncols=_LEGEND_COLUMNS, fontsize=8, frameon=False, labelcolor=INK,
                borderpad=0.2, labelspacing=0.45, columnspacing=1.6,
            )  # fmt: skip


def _swatch(label: str, style: Mapping[str, Any]) -> Patch | Line2D:
    """What stands beside a label in the legend."""
    if "kind" not in style:
        return Line2D([], [], label=label, **style)
    if style["kind"] == "sweep":
        return Patch(facecolor=SWEEP, edgecolor=ALARM, linestyle=":", label=label)
    if style["kind"] == "mover":
        return Patch(facecolor=ALARM, edgecolor=INK, label=label)
    if style["kind"] == "cells":
        return Patch(facecolor=INK, edgecolor=INK, label=label)
    face, edge, hatch = PRINTS[style["kind"]]
    return Patch(facecolor=face, edgecolor=edge, hatch=hatch, label=label)


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


def _roomiest(path: Outline, ring: Points) -> tuple[tuple[float, float], float]:
    """Return a place well inside a mass, the best of a grid of 15 x 15, and its way to the edge."""
    low, high = ring.min(axis=0), ring.max(axis=0)
    shares = (np.arange(15) + 0.5) / 15
    grid = np.stack(np.meshgrid(*(low + (high - low) * shares[:, None]).T), axis=-1).reshape(-1, 2)
    inside = grid[_contains(path, grid)]
    if not len(inside):  # too thin for the grid
        middle = ring.mean(axis=0)
        return (float(middle[0]), float(middle[1])), 0.0
    away = np.min([_to_edges_m(inside, np.asarray(r)) for r in path.to_polygons()], axis=0)
    # Of places that are as good, the one in the middle.
    off = np.hypot(*(inside - 0.5 * (low + high)).T)
    best = int(np.where(away > 0.93 * away.max(), off, np.inf).argmin())
    return (float(inside[best, 0]), float(inside[best, 1])), float(away[best])


def _to_edges_m(points: Points, ring: Points) -> Points:
    """Return how far points are from a closed ring."""
    starts, along = ring[:-1], np.diff(ring, axis=0)
    length2 = np.maximum((along * along).sum(axis=1), 1e-12)
    to_point = points[:, None] - starts
    share = np.clip((to_point * along).sum(axis=-1) / length2, 0.0, 1.0)
    away: Points = np.hypot(*np.moveaxis(to_point - share[..., None] * along, -1, 0)).min(axis=1)
    return away


def _contains(path: Outline, points: Points) -> npt.NDArray[np.bool_]:
    """Which points lie in an outline and in none of its holes."""
    rings = path.to_polygons(closed_only=True)
    inside = [Outline(ring).contains_points(points) for ring in rings]
    held: npt.NDArray[np.bool_] = np.logical_xor.reduce(inside)
    return held
