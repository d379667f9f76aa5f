"""Samplers by name: the sequences against scipy, the shares against what was asked for."""

import math
from fractions import Fraction

import numba
import numpy as np
import pytest
from scipy.stats import qmc

from byway_planning.dice import new_dice
from byway_planning.kernel import numba_type
from byway_planning.search.sampling import (
    SAMPLERS,
    Sampler,
    draw,
    halton,
    new_sampler,
    van_der_corput,
)

BOUNDS = (-10.0, 5.0, 30.0, 25.0)
CELLS = np.array(
    [
        (0.0, 10.0, 2.0, 0.5, 0.0),
        (10.0, 12.0, 2.0, -3.0, 0.4),
        (29.9, 24.9, 2.0, 1.0, 0.1),  # sticks out of the bounds
        (20.0, 20.0, 2.0, 2.0, 0.1),
    ]
)

# The van der Corput sequence as exact fractions, terms 0 to 32; worked out by hand rule with
# whole numbers, and equal to scipy's.
TERMS = {
    2: "0 1/2 1/4 3/4 1/8 5/8 3/8 7/8 1/16 9/16 5/16 13/16 3/16 11/16 7/16 15/16 1/32 17/32 9/32 "
    "25/32 5/32 21/32 13/32 29/32 3/32 19/32 11/32 27/32 7/32 23/32 15/32 31/32 1/64",
    3: "0 1/3 2/3 1/9 4/9 7/9 2/9 5/9 8/9 1/27 10/27 19/27 4/27 13/27 22/27 7/27 16/27 25/27 2/27 "
    "11/27 20/27 5/27 14/27 23/27 8/27 17/27 26/27 1/81 28/81 55/81 10/81 37/81 64/81",
    5: "0 1/5 2/5 3/5 4/5 1/25 6/25 11/25 16/25 21/25 2/25 7/25 12/25 17/25 22/25 3/25 8/25 13/25 "
    "18/25 23/25 4/25 9/25 14/25 19/25 24/25 1/125 26/125 51/125 76/125 101/125 6/125 31/125 "
    "56/125",
}


def drawn(sampler, count):
    poses = np.empty((count, 3))
    for i in range(count):
        draw(sampler, poses[i])
    return poses


@pytest.mark.parametrize("base", [2, 3, 5])
def test_terms_of_the_van_der_corput_sequence(base):
    terms = [Fraction(text) for text in TERMS[base].split()]
    assert len(terms) == 33
    for index, term in enumerate(terms):
        assert van_der_corput(index, base) == float(term)


def test_halton_is_what_scipy_has():
    expected = qmc.Halton(d=6, scramble=False).random(300)
    found = np.empty((300, 6))
    for i in range(300):
        halton(i, found[i])
    assert found == pytest.approx(expected, abs=1e-15)
    late = np.empty(3)
    halton(10_000, late)
    sequence = qmc.Halton(d=3, scramble=False)
    sequence.fast_forward(10_000)
    assert late == pytest.approx(sequence.random(1)[0], abs=1e-14)


def test_one_dimension_is_van_der_corput():
    term = np.empty(1)
    halton(11, term)
    assert term[0] == 13.0 / 16.0


# Centred L2 discrepancy of the first N terms of Halton (2, 3), n = 0 .. N-1 (scipy agrees).
@pytest.mark.parametrize(
    ("count", "centred"),
    [(32, 2.920449897476e-03), (64, 7.340847364841e-04), (512, 1.490541209903e-05)],
)
def test_halton_is_more_even_than_dice(count, centred):
    unit = (0.0, 0.0, 1.0, 1.0)
    even = drawn(new_sampler("halton", unit, seed=1), count)[:, :2]
    assert qmc.discrepancy(even, method="CD") == pytest.approx(centred, rel=1e-9)
    random = [
        qmc.discrepancy(drawn(new_sampler("uniform", unit, seed=seed), count)[:, :2], method="CD")
        for seed in range(20)
    ]
    assert np.mean(random) > 2.0 * centred


def test_van_der_corput_has_the_least_discrepancy_at_powers_of_its_base():
    """Star discrepancy 1 / N exactly: the sorted terms are 0, 1/N, 2/N, ..."""
    for count in (2, 64, 1024):
        terms = sorted(van_der_corput(i, 2) for i in range(count))
        assert terms == [i / count for i in range(count)]


@pytest.mark.parametrize("name", SAMPLERS)
def test_all_poses_are_within_bounds(name):
    sampler = new_sampler(
        name, BOUNDS, seed=4, goal=(1.0, 7.0, 9.0), share=0.5, cells=CELLS, turned_share=0.3
    )
    poses = drawn(sampler, 2000)
    assert (poses[:, 0] >= -10.0).all()
    assert (poses[:, 0] <= 30.0).all()
    assert (poses[:, 1] >= 5.0).all()
    assert (poses[:, 1] <= 25.0).all()
    assert (np.abs(poses[:, 2]) <= math.pi).all()


@pytest.mark.parametrize("name", ["uniform", "halton"])
def test_every_part_of_the_rectangle_gets_its_share(name):
    """5 x 4 x 4 boxes of 50 poses on average: within 5 standard deviations each."""
    poses = drawn(new_sampler(name, BOUNDS, seed=9), 4000)
    counts, _ = np.histogramdd(poses, (5, 4, 4), ((-10.0, 30.0), (5.0, 25.0), (-math.pi, math.pi)))
    assert counts.sum() == 4000
    assert np.abs(counts - 50.0).max() < 5.0 * math.sqrt(50.0)


def test_the_goal_is_drawn_as_often_as_asked_for():
    goal = (3.0, 7.0, 1.0 + 2.0 * math.pi)
    poses = drawn(new_sampler("goal_biased", BOUNDS, seed=2, goal=goal, share=0.1), 3000)
    at_goal = (poses[:, :2] == (3.0, 7.0)).all(axis=1)
    assert at_goal.sum() == pytest.approx(300, abs=5.0 * math.sqrt(3000 * 0.09))
    assert poses[at_goal, 2] == pytest.approx(1.0, abs=1e-12)
    for share, expected in ((0.0, 0), (1.0, 100)):
        poses = drawn(new_sampler("goal_biased", BOUNDS, seed=2, goal=goal, share=share), 100)
        assert (poses[:, :2] == (3.0, 7.0)).all(axis=1).sum() == expected


def test_corridor_cells_get_their_weights_and_headings():
    weights = np.array([1.0, 3.0, 0.0, 0.0])
    sampler = new_sampler(
        "corridor", BOUNDS, seed=7, share=1.0, cells=CELLS, weights=weights, turned_share=0.25
    )
    poses = drawn(sampler, 4000)
    which = np.abs(poses[:, None, :2] - CELLS[None, :, :2]).max(axis=2) <= 1.0
    assert which.any(axis=1).all()
    counts = which.sum(axis=0)
    assert counts[2:].tolist() == [0, 0]
    assert counts[0] == pytest.approx(1000, abs=5.0 * math.sqrt(4000 * 0.25 * 0.75))

    straight = poses[which[:, 0], 2]  # no spread: the heading or its opposite
    turned = np.isclose(straight, 0.5 - math.pi)
    assert (np.isclose(straight, 0.5) | turned).all()
    assert turned.mean() == pytest.approx(0.25, abs=5.0 * math.sqrt(0.25 * 0.75 / 1000))

    off = (poses[which[:, 1], 2] + 3.0 + math.pi) % (2.0 * math.pi) - math.pi
    ahead = off[np.abs(off) < 0.5 * math.pi]
    assert ahead.std() == pytest.approx(0.4, abs=0.04)
    assert ahead.mean() == pytest.approx(0.0, abs=0.05)
    inside = poses[which[:, 1], :2] - CELLS[1, :2]
    assert inside.std(axis=0) == pytest.approx(2.0 / math.sqrt(12.0), abs=0.04)


@pytest.mark.parametrize("cells", [None, np.empty((0, 5))])
def test_without_cells_the_corridor_is_everywhere(cells):
    corridor = drawn(new_sampler("corridor", BOUNDS, seed=3, share=0.8, cells=cells), 50)
    assert (corridor == drawn(new_sampler("uniform", BOUNDS, seed=3), 50)).all()


@pytest.mark.parametrize("name", SAMPLERS)
def test_a_sampler_goes_on_where_it_stopped(name):
    """All that changes is in two arrays: put back, the same poses come again."""
    sampler = new_sampler(name, BOUNDS, seed=11, share=0.5, cells=CELLS, turned_share=0.2)
    drawn(sampler, 37)
    place, dice = sampler.place.copy(), sampler.dice.copy()
    first = drawn(sampler, 20)
    sampler.place[:], sampler.dice[:] = place, dice
    assert (drawn(sampler, 20) == first).all()
    assert numba.typeof(sampler) == numba_type(Sampler)


def test_dice_can_be_shared_with_the_search():
    dice = new_dice(5)
    first = drawn(new_sampler("uniform", BOUNDS, dice=dice), 3)
    second = drawn(new_sampler("uniform", BOUNDS, dice=dice), 3)
    both = drawn(new_sampler("uniform", BOUNDS, seed=5), 6)
    assert (np.concatenate([first, second]) == both).all()


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"name": "sobol"}, "must be one of uniform, halton, goal_biased, corridor, got 'sobol'"),
        ({"bounds_m": (1.0, 0.0, 0.0, 1.0)}, "bounds_m must be"),
        ({"bounds_m": (0.0, 0.0, math.inf, 1.0)}, "bounds_m must be"),
        ({"share": 1.1}, "share must be within 0 and 1, got 1.1"),
        ({"turned_share": -0.1}, "turned_share must be within 0 and 1"),
        ({"goal": (0.0, math.nan, 0.0)}, "goal must be finite"),
        ({"seed": None}, "give either seed or dice"),
        ({"cells": np.zeros((2, 4))}, "shape \\(n, 5\\), got shape \\(2, 4\\)"),
        ({"cells": np.full((2, 5), math.inf)}, "cells must be finite"),
        ({"cells": CELLS, "weights": np.ones(3)}, "weights must be 4 finite numbers"),
        ({"cells": CELLS, "weights": np.array([1, 1, -1, 1])}, "none below 0"),
        ({"cells": CELLS, "weights": np.zeros(4)}, "must not all be 0"),
    ],
)
def test_senseless_samplers_are_refused(change, said):
    fields = {"name": "corridor", "bounds_m": BOUNDS, "seed": 1} | change
    name, bounds_m = fields.pop("name"), fields.pop("bounds_m")
    with pytest.raises(ValueError, match=said):
        new_sampler(name, bounds_m, **fields)
