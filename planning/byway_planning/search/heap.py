"""A binary heap in two arrays: keys, and the number that goes with each."""

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel

Keys = npt.NDArray[np.float64]
Values = npt.NDArray[np.int32]


@kernel()
def push(keys: Keys, values: Values, size: int, key: float, value: int) -> int:
    """Add an entry; return the new size."""
    i = size
    while i > 0:
        up = (i - 1) >> 1
        if keys[up] <= key:
            break
        keys[i] = keys[up]
        values[i] = values[up]
        i = up
    keys[i] = key
    values[i] = value
    return size + 1


@kernel()
def pop(keys: Keys, values: Values, size: int) -> int:
    """Remove the entry with the least key (at index 0); return the new size."""
    size -= 1
    key, value = keys[size], values[size]
    i = 0
    while True:
        down = 2 * i + 1
        if down >= size:
            break
        if down + 1 < size and keys[down + 1] < keys[down]:
            down += 1
        if keys[down] >= key:
            break
        keys[i] = keys[down]
        values[i] = values[down]
        i = down
    keys[i] = key
    values[i] = value
    return size
