"""
Where a randomised search looks next: samplers by name.

| name        | poses                                                                             |
|-------------|-----------------------------------------------------------------------------------|
| uniform     | anywhere in a rectangle, any heading, independent                                  |
| halton      | the same, spread evenly: Halton 1960, bases 2, 3, 5 for x, y, heading              |
| goal_biased | the goal itself in a share of the draws (0.05 to 0.1 is customary), else uniform   |
| corridor    | in a share of the draws from weighted cells with a preferred heading, else uniform |

A sampler is a tuple of arrays: what changes (the place in the Halton sequence, the dice) lives
in them, so a search can stop between two draws and go on later with the same numbers.
"""

import math
from typing import Final, NamedTuple

import numpy as np
import numpy.typing as npt

from byway_planning.curves.word import wrap
from byway_planning.dice import Dice, new_dice, normal, uniform
from byway_planning.kernel import describe, kernel

Floats = npt.NDArray[np.float64]

UNIFORM: Final = 0
HALTON: Final = 1
GOAL_BIASED: Final = 2
CORRIDOR: Final = 3

SAMPLERS: Final = {
    "uniform": UNIFORM,
    "halton": HALTON,
    "goal_biased": GOAL_BIASED,
    "corridor": CORRIDOR,
}


class Sampler(NamedTuple):
    """One sampler; make it with `new_sampler`."""

    kind: int
    bounds_m: Floats  # (4,) x_min, y_min, x_max, y_max
    share: float  # of the draws that go to the goal, or to the corridor
    goal: Floats  # (3,) x_m, y_m, heading_rad
    cells: Floats  # (n, 5) x_m and y_m of the centre, size_m, heading_rad, its spread_rad
    weights: Floats  # (n,) cumulative, ends at 1
    turned_share: float  # of the corridor draws that face the other way
    place: npt.NDArray[np.int64]  # (1,) place in the Halton sequence; grows
    dice: Dice


describe(
    Sampler,
    *("i8", "rf8[::1]", "f8", "rf8[::1]", "rf8[:, ::1]", "rf8[::1]", "f8", "i8[::1]", "u8[::1]"),
)


def new_sampler(
    name: str,
    bounds_m: tuple[float, float, float, float],
    *,
    seed: int | None = None,
    dice: Dice | None = None,
    goal: tuple[float, float, float] = (0.0, 0.0, 0.0),
    share: float = 0.0,
    cells: Floats | None = None,
    weights: Floats | None = None,
    turned_share: float = 0.0,
) -> Sampler:
    """
    Make a sampler.

    Args:
        name: One of SAMPLERS.
        bounds_m: Rectangle x_min, y_min, x_max, y_max; every drawn position lies in it,
            except that of the goal.
        seed: A whole number for a random state of its own; or give
        dice: A random state to share (see `dice`).
        goal: Pose that "goal_biased" returns.
        share: Of the draws that are the goal ("goal_biased") or in the corridor ("corridor").
        cells: For "corridor", shape (n, 5): centre x_m, y_m, size_m, preferred heading_rad,
            spread_rad of the heading (standard deviation). With no cells, all is uniform.
        weights: Shape (n,), not negative, some above 0; equal if left out.
        turned_share: Of the corridor draws that face the other way, as a reversing car may.

    Raises:
        ValueError: If a value makes no sense.
    """
    if name not in SAMPLERS:
        raise ValueError(f"the sampler must be one of {', '.join(SAMPLERS)}, got {name!r}")
    x_min, y_min, x_max, y_max = bounds_m
    if not (np.isfinite(bounds_m).all() and x_min <= x_max and y_min <= y_max):
        raise ValueError(f"bounds_m must be x_min, y_min, x_max, y_max, got {bounds_m}")
    for label, value in (("share", share), ("turned_share", turned_share)):
        if not 0.0 <= value <= 1.0:
            raise ValueError(f"{label} must be within 0 and 1, got {value}")
    if not np.isfinite(goal).all():
        raise ValueError(f"goal must be finite, got {goal}")
    if (seed is None) == (dice is None):
        raise ValueError("give either seed or dice")
    corridor, cumulative = _checked_corridor(cells, weights)
    return Sampler(
        kind=SAMPLERS[name],
        bounds_m=_fixed(np.array(bounds_m)),
        share=float(share),
        goal=_fixed(np.array(goal)),
        cells=_fixed(corridor),
        weights=_fixed(cumulative),
        turned_share=float(turned_share),
        place=np.zeros(1, np.int64),
        dice=new_dice(seed) if dice is None and seed is not None else dice,  # type: ignore[arg-type]
    )


def _checked_corridor(cells: Floats | None, weights: Floats | None) -> tuple[Floats, Floats]:
    if cells is None:
        return np.empty((0, 5)), np.empty(0)
    if cells.ndim != 2 or cells.shape[1] != 5 or not np.isfinite(cells).all():
        raise ValueError(f"cells must be finite and of shape (n, 5), got shape {cells.shape}")
    share = np.ones(len(cells)) if weights is None else np.asarray(weights, np.float64)
    if share.shape != (len(cells),) or not (share >= 0.0).all() or not np.isfinite(share).all():
        raise ValueError(f"weights must be {len(cells)} finite numbers, none below 0")
    if len(cells) and not share.any():
        raise ValueError("weights must not all be 0")
    cumulative = np.cumsum(share)
    return cells, cumulative / cumulative[-1] if len(cells) else cumulative


def _fixed(values: Floats) -> Floats:
    kept = np.array(values, np.float64)  # a copy: nobody else may change it later
    kept.flags.writeable = False
    return kept


@kernel()
def van_der_corput(index: int, base: int) -> float:
    """
    The radical inverse: the digits of the index mirrored at the point, in [0, 1).

    J. G. van der Corput, Verteilungsfunktionen, 1935. Mirrored as whole numbers, so the
    result is the exact fraction rounded once.
    """
    mirrored = 0
    scale = 1
    while index > 0:
        mirrored = mirrored * base + index % base
        index //= base
        scale *= base
    return mirrored / scale


@kernel()
def halton(index: int, out: Floats) -> None:
    """
    Write term `index` (from 0) of the Halton sequence; out has one to six entries.

    J. H. Halton, On the efficiency of certain quasi-random sequences of points in evaluating
    multi-dimensional integrals, Numerische Mathematik 2, 1960. In one dimension it is the van
    der Corput sequence.
    """
    bases = (2, 3, 5, 7, 11, 13)
    for i in range(min(len(out), 6)):
        out[i] = van_der_corput(index, bases[i])


@kernel()
def draw(sampler: Sampler, out_pose: Floats) -> None:
    """Write the next pose x_m, y_m, heading_rad; the heading is in [-pi, pi)."""
    if sampler.kind == HALTON:
        halton(sampler.place[0], out_pose)
        sampler.place[0] += 1
        _spread(sampler.bounds_m, out_pose)
        return
    biased = sampler.kind == GOAL_BIASED or (sampler.kind == CORRIDOR and len(sampler.weights) > 0)
    if biased and uniform(sampler.dice) < sampler.share:
        if sampler.kind == CORRIDOR:
            _draw_corridor(sampler, out_pose)
        else:
            for i in range(3):
                out_pose[i] = sampler.goal[i]
            out_pose[2] = wrap(out_pose[2])
        return
    for i in range(3):
        out_pose[i] = uniform(sampler.dice)
    _spread(sampler.bounds_m, out_pose)


@kernel()
def _spread(bounds_m: Floats, pose: Floats) -> None:
    """From the unit cube to the rectangle and all headings."""
    pose[0] = bounds_m[0] + (bounds_m[2] - bounds_m[0]) * pose[0]
    pose[1] = bounds_m[1] + (bounds_m[3] - bounds_m[1]) * pose[1]
    pose[2] = math.pi * (2.0 * pose[2] - 1.0)


@kernel()
def _draw_corridor(sampler: Sampler, pose: Floats) -> None:
    dice = sampler.dice
    wanted = uniform(dice)
    low, high = 0, len(sampler.weights) - 1
    while low < high:  # the first cell whose cumulative weight is above the draw
        middle = (low + high) // 2
        if sampler.weights[middle] > wanted:
            high = middle
        else:
            low = middle + 1
    cell = sampler.cells[low]
    bounds_m = sampler.bounds_m
    x_m = cell[0] + cell[2] * (uniform(dice) - 0.5)
    y_m = cell[1] + cell[2] * (uniform(dice) - 0.5)
    pose[0] = min(max(x_m, bounds_m[0]), bounds_m[2])
    pose[1] = min(max(y_m, bounds_m[1]), bounds_m[3])
    heading = cell[3] + cell[4] * normal(dice)
    if uniform(dice) < sampler.turned_share:
        heading += math.pi
    pose[2] = wrap(heading)
