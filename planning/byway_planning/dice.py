"""
Random state in an array, so that a search can be stopped, resumed and repeated bit for bit.

The generator is xoshiro256** 1.0 of Blackman and Vigna (Scrambled linear pseudorandom number
generators, ACM TOMS 47, 2021), seeded by SplitMix64 as its authors advise.
"""

import math
from typing import Any

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel

Dice = npt.NDArray[np.uint64]

_GOLDEN = np.uint64(0x9E3779B97F4A7C15)


def new_dice(seed: int) -> Dice:
    """Return a fresh random state, shape (4,), for any whole number."""
    state = np.empty(4, np.uint64)
    word = seed % 2**64
    for i in range(4):
        word = (word + int(_GOLDEN)) % 2**64
        z = word
        z = ((z ^ (z >> 30)) * 0xBF58476D1CE4E5B9) % 2**64
        z = ((z ^ (z >> 27)) * 0x94D049BB133111EB) % 2**64
        state[i] = z ^ (z >> 31)
    return state


@kernel()
def next_word(dice: Dice) -> Any:
    """64 random bits."""
    s1 = dice[1]
    five = s1 * np.uint64(5)
    result = ((five << np.uint64(7)) | (five >> np.uint64(57))) * np.uint64(9)
    t = s1 << np.uint64(17)
    dice[2] ^= dice[0]
    dice[3] ^= s1
    dice[1] ^= dice[2]
    dice[0] ^= dice[3]
    dice[2] ^= t
    dice[3] = (dice[3] << np.uint64(45)) | (dice[3] >> np.uint64(19))
    return result


@kernel()
def uniform(dice: Dice) -> float:
    """A number in [0, 1), 53 bits."""
    return float(next_word(dice) >> np.uint64(11)) * (1.0 / 9007199254740992.0)


@kernel()
def uniform_between(dice: Dice, low: float, high: float) -> float:
    return low + (high - low) * uniform(dice)


@kernel()
def whole_below(dice: Dice, count: int) -> int:
    """A whole number in [0, count)."""
    return min(int(uniform(dice) * count), count - 1)


@kernel()
def normal(dice: Dice) -> float:
    """Standard normal (Box and Muller 1958; the second value is not kept)."""
    u = 1.0 - uniform(dice)
    return math.sqrt(-2.0 * math.log(u)) * math.cos(2.0 * math.pi * uniform(dice))
