"""Figures of the benchmark as pictures: how costs grow, how methods converge."""

from collections.abc import Sequence
from pathlib import Path
from typing import Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from bywayd.bench.figures import Figures
from bywayd.bench.growth import KINDS
from bywayd.picture import INK, INKS, PAPER

_MARKS: Final = ("o", "s", "^")
_WORDS: Final = {
    "patch": "patch of cells",
    "move": "polygon moved",
    "scan": "range scan",
    "small": "after a small change",
    "whole": "everything anew",
}


def plot_growth(growth: Figures, path: Path) -> None:
    """
    Draw the three tables of `measure_growth` side by side; the suffix of the file says the kind.

    Raises:
        ValueError: A kind of picture that cannot be made.
        OSError: The file cannot be written.
    """
    figure = Figure(figsize=(13.0, 4.2), facecolor=PAPER, layout="constrained")
    FigureCanvasAgg(figure)
    sheets = figure.subplots(1, 3)
    _sheet(sheets[0], growth["obstacles"], "stacks", "stacks on the site", KINDS)
    _sheet(sheets[1], growth["sides"], "side_m", "side of the site, m", KINDS)
    _sheet(sheets[2], growth["guards"], "guards", "guarded routes of 100 m", ("small", "whole"))
    sheets[0].set_ylabel("CPU until visible, ms", color=INK)
    sheets[2].set_ylabel("CPU of checking them all, ms", color=INK)
    figure.savefig(path, dpi=110)


def _sheet(
    axes: Axes, rows: Sequence[Figures], across: str, title: str, kinds: Sequence[str]
) -> None:
    axes.set_facecolor(PAPER)
    along = [row[across] for row in rows]
    for kind, ink, mark in zip(kinds, INKS, _MARKS, strict=False):
        medians = [row[f"{kind}_ms"]["p50"] for row in rows]
        nines = [row[f"{kind}_ms"]["p90"] for row in rows]
        axes.fill_between(along, medians, nines, color=ink, alpha=0.18, linewidth=0)
        axes.plot(along, medians, color=ink, marker=mark, label=_WORDS[kind])
    axes.set_xscale("log")
    axes.set_xticks(along, [f"{value:g}" for value in along])
    axes.minorticks_off()
    axes.set_ylim(bottom=0.0)
    axes.set_xlabel(title, color=INK)
    axes.grid(axis="y", color=INK, alpha=0.15)
    axes.legend(frameon=False, labelcolor=INK)
    axes.tick_params(colors=INK)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)


def plot_methods(methods: Figures, path: Path) -> None:
    """
    Draw how the median cost of each method comes down with time; files as in `plot_growth`.

    A curve begins when half of the cases have a route.
    """
    figure = Figure(figsize=(8.0, 4.8), facecolor=PAPER, layout="constrained")
    FigureCanvasAgg(figure)
    axes = figure.subplots()
    axes.set_facecolor(PAPER)
    along = methods["moments_ms"]
    for i, (name, told) in enumerate(methods["methods"].items()):
        costs = [np.nan if cost is None else cost for cost in told["cost_to_best"]]
        ink, mark = INKS[i % len(INKS)], _MARKS[i % len(_MARKS)]
        dash = "-" if i < len(INKS) else "--"
        axes.plot(along, costs, color=ink, marker=mark, linestyle=dash, label=name)
    axes.set_xscale("log")
    axes.set_xticks(along, [f"{value:g}" for value in along])
    axes.minorticks_off()
    axes.set_xlabel("CPU, ms", color=INK)
    axes.set_ylabel("cost to the best known, median", color=INK)
    axes.grid(axis="y", color=INK, alpha=0.15)
    axes.legend(frameon=False, labelcolor=INK)
    axes.tick_params(colors=INK)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    figure.savefig(path, dpi=110)
