"""
The words of Reeds and Shepp as numbers, and as segments.

A word is a shape and which of its four images it is: 4 * shape + 2 * (begins with a right arc)
+ (begins in reverse). Shapes are written as the image that begins with a left arc driven
forward; an underscore in a name is a change of direction.
"""

import math
from typing import Final

from byway_planning.curves.word import Segments, put
from byway_planning.kernel import kernel

HALF_PI: Final = 0.5 * math.pi

LSL: Final = 0
LSR: Final = 1
L_R_L: Final = 2  # L+ R- L+
L_RL: Final = 3  # L+ R- L-
LR_L: Final = 4  # L+ R+ L-
LRL: Final = 5  # L+ R+ L+, long middle arc
LR_LR: Final = 6  # L+ R+ L- R-
L_RL_R: Final = 7  # L+ R- L- R+
L_RSL: Final = 8  # L+ R-(90) S- L-
L_RSR: Final = 9  # L+ R-(90) S- R-
LSL_R: Final = 10  # L+ S+ L+(90) R-
LSR_L: Final = 11  # L+ S+ R+(90) L-
L_RSL_R: Final = 12  # L+ R-(90) S- L-(90) R+


@kernel()
def spell(word: int, first: float, middle: float, last: float, out: Segments) -> int:
    """Write a word as segments of unit radius; returns their number."""
    left = -1.0 if word & 2 else 1.0
    right = -left
    plus = -1.0 if word & 1 else 1.0
    minus = -plus
    shape = word >> 2
    n = put(out, 0, left, plus * first)
    if shape <= LSR:
        n = put(out, n, 0.0, plus * middle)
        return put(out, n, left if shape == LSL else right, plus * last)
    if shape <= LRL:
        n = put(out, n, right, (plus if shape >= LR_L else minus) * middle)
        return put(out, n, left, (plus if shape in (L_R_L, LRL) else minus) * last)
    if shape == LR_LR:
        n = put(out, n, right, plus * middle)
        n = put(out, n, left, minus * middle)
        return put(out, n, right, minus * last)
    if shape == L_RL_R:
        n = put(out, n, right, minus * middle)
        n = put(out, n, left, minus * middle)
        return put(out, n, right, plus * last)
    if shape <= L_RSR:
        n = put(out, n, right, minus * HALF_PI)
        n = put(out, n, 0.0, minus * middle)
        return put(out, n, left if shape == L_RSL else right, minus * last)
    if shape <= LSR_L:
        n = put(out, n, 0.0, plus * middle)
        n = put(out, n, left if shape == LSL_R else right, plus * HALF_PI)
        return put(out, n, right if shape == LSL_R else left, minus * last)
    n = put(out, n, right, minus * HALF_PI)
    n = put(out, n, 0.0, minus * middle)
    n = put(out, n, left, minus * HALF_PI)
    return put(out, n, right, plus * last)
