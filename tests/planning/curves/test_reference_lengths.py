"""
Shortest lengths against values from outside, and against minimisation by brute force.

The tables hold goals from (0, 0, 0) for a turning radius of 1 with the lengths of the shortest
Reeds-Shepp and Dubins paths. They were worked out for this project without any word formula:
Newton's method from many starts over all words, polished to 40 digits (first table; closed
forms agree) and to about 1e-12 (second table; the Dubins column to 7e-11). Lengths only: which
of several equally short words comes out is nobody's business.
"""

import math
from itertools import pairwise, product

import numpy as np
import pytest
from scipy.optimize import root

from byway_planning.curves.dubins import dubins_length
from byway_planning.curves.reeds_shepp import reeds_shepp, reeds_shepp_length

# x, y, heading, Reeds-Shepp length, Dubins length
POLISHED = [
    (5.0, 0.0, 0.0, 5.0, 5.0),  # straight ahead 5
    (-5.0, 0.0, 0.0, 5.0, 11.28318530717959),  # straight back 5
    (0.0, 0.0, 3.141592653589793, 3.141592653589793, 7.330382858376184),  # turn in place, pi
    (0.0, 0.0, 1.5707963267948966, 1.570796326794897, 6.408513138347652),  # turn in place, pi/2
    (0.0, 0.0, 0.7853981633974483, 0.7853981633974483, 6.298467718770079),  # turn in place, pi/4
    (0.0, 2.0, 3.141592653589793, 3.141592653589793, 3.141592653589793),  # half circle left
    (1.0, 1.0, 1.5707963267948966, 1.570796326794897, 1.570796326794897),  # quarter circle left
    (
        -1.0,
        1.0,
        -1.5707963267948966,
        1.570796326794897,
        4.71238898038469,
    ),  # quarter circle reverse right
    (0.0, 1.0, 3.141592653589793, 3.141592653589793, 6.032529644843456),  # uturn shift 1
    (0.0, 6.0, 3.141592653589793, 7.141592653589793, 7.141592653589793),  # uturn shift 6
    (0.0, 0.1, 0.0, 0.8855255887037142, 6.383185307179586),  # sideways 0.1
    (0.0, 1.0, 0.0, 2.636232143305636, 7.283185307179586),  # sideways 1
    (0.0, 4.0, 0.0, 5.478120721990417, 6.283185307179586),  # sideways 4
    (4.0, 4.0, 0.0, 5.854590436003224, 5.854590436003224),  # s bend 4 4
    (10.0, 10.0, 1.5707963267948966, 14.29871838815275, 14.29871838815275),  # right angle 10 10
    (10.0, 5.0, 3.141592653589793, 12.32193254108874, 13.58189916250034),  # pass and turn 10 5 pi
    (-3.0, 1.0, 0.0, 3.17542703999446, 9.445462967347966),  # behind 3 1 0
    (0.5, 0.5, 0.0, 1.607544233833437, 6.990292088366134),  # short 0.5 0.5 0
    (1.0, 0.0, 3.141592653589793, 3.141592653589793, 7.051978856170865),  # short 1 0 pi
    (1.5, -0.7, 2.1, 2.791520598405806, 6.69455972464329),  # generic A
    (-2.3, 3.1, -1.2, 4.01682849555183, 7.900013802731417),  # generic B
    (6.2, -4.4, 0.9, 8.25303197830508, 8.267144806887445),  # generic C
    (0.3, 0.2, -0.4, 1.096304909220492, 6.583152031374797),  # generic D
    (-0.8, -1.9, 2.7, 2.882003131071273, 3.955827677281487),  # generic E
    (0.0, 0.5, 3.141592653589793, 3.141592653589793, 6.724251829021253),  # uturn shift 0.5
    (0.0, 0.5, 0.0, 1.916384357492548, 6.783185307179586),  # sideways 0.5
    (0.0, 2.0, 0.0, 3.646953163873951, 8.283185307179586),  # sideways 2
    (3.0, 1.0, 0.0, 3.17542703999446, 3.17542703999446),  # parking bay 3 1
    (0.6, 0.4, 0.0, 1.37906348756285, 7.004295562272384),  # parallel park 0.6 0.4
]

# the same columns
DRAWN = """
0.250191 0.794428 1.732184 1.732184000000 7.186627557380
-7.915755 5.139655 1.866542 10.563517369792 11.776430502866
-1.470782 -0.329542 0.028578 1.511047617868 7.733895167791
0.244358 0.97792 -1.788768 1.942030972609 5.741373288037
-7.429116 0.238221 -0.212334 7.433931881884 13.292449189064
-0.018759 -1.51491 -3.067489 3.067489000000 5.210955708386
-0.260927 -0.992532 2.073751 2.073751000000 5.361382980494
0.156653 5.554404 0.877869 6.278052782409 6.331040831275
0.046633 2.228036 -0.871704 3.197540505698 7.451622143834
-0.353927 -0.699601 1.987611 1.987611000000 5.624933033228
1.6809 2.207945 1.10867 2.939660225865 2.939660225865
-0.58501 -2.419775 2.93945 3.464253795672 3.927996631253
0.748154 0.324429 -2.314626 2.314626000000 6.501594215441
1.115506 -5.672641 -1.932309 6.255015709365 6.255015709365
2.304341 0.84943 0.437902 2.464146351855 2.464146351855
-0.923885 0.752438 -0.202757 1.695596759548 7.108913799877
-7.59685 -2.045036 -2.950896 9.005991241235 10.739645200130
-0.430679 0.142441 2.342429 2.342429000000 6.608822376287
-0.289172 0.038197 1.666598 1.666598000000 6.233784904769
-7.917138 4.04764 1.951098 9.997719913870 11.460679531123
-2.914373 0.770772 1.841122 4.019949781908 7.263036011084
-0.602958 -0.273746 -2.014351 2.014351000000 6.319602780071
-2.558911 -3.655606 2.840248 5.443631649659 6.273025016133
0.126997 2.379243 1.525353 3.069056341006 6.740043757083
-0.176708 0.845519 -2.709841 2.709841000000 5.867087783283
-3.984012 4.896626 1.108801 7.403617246967 8.563312063704
-1.003911 -0.610347 -1.866661 2.288842141071 6.327635460598
0.680338 -0.775189 0.652063 2.202710990252 7.038858303366
-3.093448 7.381614 -0.214633 8.483004300191 11.108434509995
-2.628807 -0.530899 1.65895 3.304248311299 6.349367848217
0.82671 0.604073 2.373105 2.373105000000 7.123627433931
-7.515379 -7.676551 -1.5534 11.900063563302 12.669159713893
-2.766085 0.542327 -2.098514 3.728847665032 6.315882015871
0.876683 0.076793 1.957761 1.957761000000 6.915288662139
1.190316 -7.365017 1.895413 8.220717280093 10.800759549183
-0.968039 -1.091981 -2.433371 2.529815654185 6.933424269668
0.725618 0.594254 -2.330195 2.330195000000 6.184021771085
1.178259 2.219999 0.686967 2.908785240937 8.418469056158
1.943313 1.821076 -1.085934 3.716691066006 7.922169679626
-0.676975 -0.946595 0.947551 1.592838244322 5.882820953161
-1.930886 -3.955607 -0.273255 5.338447515295 7.670965242924
-2.197673 0.974677 2.076923 3.529855442446 6.999010619848
-0.569884 -0.505181 -1.06907 1.790012424374 6.283338836956
1.264873 -3.204898 -2.654353 4.195892047088 4.197226608245
-2.215895 -2.512426 2.553439 4.182911458551 5.524788308255
0.239847 -0.625713 -0.409579 1.714479840053 6.827020568403
-6.451077 3.637196 1.737134 8.472650474510 10.068583108416
-2.614728 0.112657 1.617668 3.394073927062 6.654326373272
0.496663 0.793173 -2.351535 2.351535000000 5.926363658110
3.535565 7.948339 2.759449 9.552105394361 9.560071249985
"""


@pytest.mark.parametrize(("x", "y", "heading", "rs", "dubins"), POLISHED)
def test_known_goals_have_their_known_lengths(x, y, heading, rs, dubins):
    """1e-12: the table has 15 digits, and the formulas lose a few of the last ones."""
    assert reeds_shepp_length(x, y, heading) == pytest.approx(rs, abs=1e-12)
    assert dubins_length(x, y, heading) == pytest.approx(dubins, abs=1e-12)


def test_drawn_goals_have_their_known_lengths():
    rows = np.array([line.split() for line in DRAWN.strip().splitlines()], np.float64)
    assert len(rows) == 50
    for x, y, heading, rs, dubins in rows:
        assert reeds_shepp_length(x, y, heading) == pytest.approx(rs, abs=2e-12)
        assert dubins_length(x, y, heading) == pytest.approx(dubins, abs=1e-10)


@pytest.mark.parametrize("shift", [0.01, 0.3, 1.7, 2.0])
def test_closed_form_of_a_sideways_shift(shift):
    """
    Two changes of direction and four arcs; for small shifts about 2 root(2 h), so there the
    length is not Lipschitz in the goal.
    """
    length = 2.0 * math.acos((12.0 - (shift + 2.0) ** 2) / (4.0 * (shift + 2.0)))
    assert reeds_shepp_length(0.0, shift, 0.0) == pytest.approx(length, abs=1e-12)


def test_other_closed_forms():
    shift_of_four = math.pi + 4.0 * math.sqrt(2.0) - 4.0 + 2.0 * math.asin(1.0 / 3.0)
    assert reeds_shepp_length(0.0, 4.0, 0.0) == pytest.approx(shift_of_four, abs=1e-12)
    corner = 9.0 * math.sqrt(2.0) + 0.5 * math.pi
    assert reeds_shepp_length(10.0, 10.0, 0.5 * math.pi) == pytest.approx(corner, abs=1e-12)
    assert dubins_length(0.0, 0.0, math.pi) == pytest.approx(7.0 * math.pi / 3.0, abs=1e-12)


# The words, steering of each piece (1 left, 0 straight) and its direction; which of three
# unknown lengths it has, or a quarter. Every other word is one of these mirrored or reversed.
QUARTER = -1
WORDS = [
    [(1, 1, 0), (0, 1, 1), (1, 1, 2)],
    [(1, 1, 0), (0, 1, 1), (-1, 1, 2)],
    [(1, 1, 0), (-1, 1, 1), (1, 1, 2)],
    [(1, 1, 0), (-1, -1, 1), (1, 1, 2)],
    [(1, 1, 0), (-1, -1, 1), (1, -1, 2)],
    [(1, 1, 0), (-1, 1, 1), (1, -1, 2)],
    [(1, 1, 0), (-1, 1, 1), (1, -1, 1), (-1, -1, 2)],
    [(1, 1, 0), (-1, -1, 1), (1, -1, 1), (-1, 1, 2)],
    [(1, 1, 0), (-1, -1, QUARTER), (0, -1, 1), (1, -1, 2)],
    [(1, 1, 0), (-1, -1, QUARTER), (0, -1, 1), (-1, -1, 2)],
    [(1, 1, 0), (0, 1, 1), (-1, 1, QUARTER), (1, -1, 2)],
    [(1, 1, 0), (0, 1, 1), (1, 1, QUARTER), (-1, -1, 2)],
    [(1, 1, 0), (-1, -1, QUARTER), (0, -1, 1), (1, -1, QUARTER), (-1, 1, 2)],
]


def drive(word, lengths, mirrored, reversed_):
    """End pose of a word by plane trigonometry, and its signed pieces."""
    x = y = heading = 0.0
    pieces = []
    for steering, direction, which in word:
        length = 0.5 * math.pi if which == QUARTER else lengths[which]
        signed = direction * reversed_ * length
        curvature = steering * mirrored
        if curvature == 0:
            x += signed * math.cos(heading)
            y += signed * math.sin(heading)
        else:
            after = heading + curvature * signed
            x += (math.sin(after) - math.sin(heading)) / curvature
            y += (math.cos(heading) - math.cos(after)) / curvature
            heading = after
        pieces.append(signed)
    return (x, y, heading), pieces


def cost_of(pieces, factor, change):
    driven = [piece for piece in pieces if abs(piece) > 1e-9]
    changes = sum((a > 0) != (b > 0) for a, b in pairwise(driven))
    return sum(p if p > 0 else -factor * p for p in driven) + change * changes


def cheapest_by_brute_force(goal, factor, change, only_forward=False):
    """Solve every word for the goal from several starts; the least cost of all solutions."""
    rng = np.random.default_rng(3)
    best = math.inf
    for word, mirrored, reversed_ in product(WORDS, (1, -1), (1, -1)):
        if only_forward and (reversed_ < 0 or any(d < 0 for _, d, _ in word)):
            continue

        def miss(lengths, word=word, mirrored=mirrored, reversed_=reversed_):
            (x, y, heading), _ = drive(word, lengths, mirrored, reversed_)
            turn = (heading - goal[2] + math.pi) % (2.0 * math.pi) - math.pi
            return [x - goal[0], y - goal[1], turn]

        for start in rng.uniform(0.0, 4.0, (8, 3)):
            found = root(miss, start, tol=1e-12)
            if max(map(abs, miss(found.x))) < 1e-10:
                arcs = [0, 2] if any(s == 0 for s, _, _ in word) else [0, 1, 2]
                lengths = found.x.copy()
                lengths[arcs] %= 2.0 * math.pi
                lengths[np.abs(lengths - 2.0 * math.pi) < 1e-9] = 0.0
                if (lengths > -1e-9).all():
                    _, pieces = drive(word, lengths, mirrored, reversed_)
                    best = min(best, cost_of(pieces, factor, change))
    return best


@pytest.mark.parametrize(
    ("goal", "factor", "change"),
    [
        ((1.5, -0.7, 2.1), 1.0, 0.0),
        ((0.3, 0.2, -0.4), 1.0, 0.0),
        ((-2.3, 3.1, -1.2), 1.5, 0.4),
        ((0.2, 0.9, 0.3), 2.0, 1.5),
        ((-1.0, 0.3, 2.9), 3.0, 0.0),
    ],
)
@pytest.mark.filterwarnings("ignore:The iteration is not making good progress")
def test_nothing_in_the_set_of_words_is_cheaper(goal, factor, change):
    """1e-8: the root finder stops at about 1e-10 of the goal."""
    out = np.zeros((5, 2))
    _, _, cost = reeds_shepp(1.0, *goal, factor, change, out)
    assert cost == pytest.approx(cheapest_by_brute_force(goal, factor, change), abs=1e-8)


@pytest.mark.parametrize("goal", [(1.5, -0.7, 2.1), (-0.5, 0.4, 1.3), (3.0, 2.5, -2.0)])
@pytest.mark.filterwarnings("ignore:The iteration is not making good progress")
def test_nothing_forward_is_shorter_than_dubins(goal):
    expected = cheapest_by_brute_force(goal, 1.0, 0.0, only_forward=True)
    assert dubins_length(*goal) == pytest.approx(expected, abs=1e-8)
