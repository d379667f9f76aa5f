"""
What a source remembers of the cells of a layer: its patches, and its last scans, in their order.

A newer patch that covers an older one takes its place. When they are too many or too large the
oldest is forgotten, and what is remembered counts as incomplete. Scans are of the moment: they
are remembered for as long as the layer lets them hold, and never make anything incomplete.
"""

import math
from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Final

import numpy as np
import numpy.typing as npt

from byway import limits, messages
from byway.packed import Bytes

#: Patches of one layer. A range sensor that sends whole patches of the same place keeps one; 256
#: are the tiles of a site of 400 x 400 m, sent in pieces of 25 m.
patches_max: Final = 256
#: Bytes of their cells: what four patches of the largest size have.
patch_bytes_max: Final = 4 * limits.packed_bytes_max
#: Scans of one layer: three seconds of a sensor that turns twenty times a second.
scans_max: Final = 64
#: Seconds for which a scan is worth repeating where the layer does not say how long it holds.
scan_fresh_s: Final = 5.0
#: The same patch sent again must cover itself after rounding, in survey coordinates too.
_HAIR_M: Final = 1e-7


@dataclass(frozen=True, slots=True, eq=False)
class _Stroke:
    """A patch, or a scan with the time at which it was measured."""

    message: messages.Patch | messages.Scan
    packed: Bytes
    seen_at_s: float | None = None


@dataclass(slots=True)
class Strokes:
    """Patches and scans of one layer, in the order in which they became visible."""

    #: Older patches were forgotten.
    is_incomplete: bool = False
    _line: deque[_Stroke] = field(default_factory=deque)

    def patch(self, message: messages.Patch, packed: Bytes) -> None:
        """Take note of a patch that is visible now."""
        kept = [each for each in self._line if not _covers(message, each.message)]
        self._line = deque([*kept, _Stroke(message, packed)])
        patches = deque(self.patches)
        size_bytes = sum(len(each.packed) for each in patches)
        while len(patches) > patches_max or size_bytes > patch_bytes_max:
            oldest = patches.popleft()
            self._line.remove(oldest)
            size_bytes -= len(oldest.packed)
            self.is_incomplete = True

    def scan(self, message: messages.Scan, packed: Bytes, seen_at_s: float) -> None:
        """Take note of a scan that was measured then and is visible now."""
        self._line.append(_Stroke(message, packed, seen_at_s))
        scans = [each for each in self._line if each.seen_at_s is not None]
        for oldest in scans[:-scans_max]:
            self._line.remove(oldest)

    @property
    def patches(self) -> list[_Stroke]:
        """The patches, oldest first."""
        return [each for each in self._line if each.seen_at_s is None]

    def restoring(
        self, now_s: float, decay_s: float | None
    ) -> Iterator[tuple[messages.Patch | messages.Scan, Bytes, float]]:
        """Give what is to be sent to a daemon that has nothing, and when each counts from."""
        fresh_s = min(scan_fresh_s if decay_s is None else decay_s, limits.age_s_max)
        for each in self._line:
            if each.seen_at_s is None or isinstance(each.message, messages.Patch):
                yield each.message, each.packed, now_s
            elif (age_s := max(0.0, now_s - each.seen_at_s)) < fresh_s:
                yield each.message.model_copy(update={"age_s": age_s}), each.packed, now_s


def _covers(outer: messages.Patch, inner: messages.Patch | messages.Scan) -> bool:
    """Whether all cells of a patch lie under another; a scan reaches beyond any."""
    if isinstance(inner, messages.Scan):
        return False
    if not outer.heading_rad and not inner.heading_rad:
        (a0, b0, a1, b1), (x0, y0, x1, y1) = _box_m(outer), _box_m(inner)
        return (
            a0 <= x0 + _HAIR_M and b0 <= y0 + _HAIR_M and x1 <= a1 + _HAIR_M and y1 <= b1 + _HAIR_M
        )
    rows, columns = outer.columns["cells"].shape
    # Seen from the outer one.
    corners_m = (_corners_m(inner) - np.array(outer.corner_m)) @ _turn(-outer.heading_rad)
    far_m = np.array([columns, rows]) * outer.cell_m
    return bool((corners_m >= -_HAIR_M).all() and (corners_m <= far_m + _HAIR_M).all())


def _box_m(patch: messages.Patch) -> tuple[float, float, float, float]:
    rows, columns = patch.columns["cells"].shape
    x_m, y_m = patch.corner_m
    return x_m, y_m, x_m + columns * patch.cell_m, y_m + rows * patch.cell_m


def _corners_m(patch: messages.Patch) -> npt.NDArray[np.float64]:
    rows, columns = patch.columns["cells"].shape
    own = np.array([(0, 0), (columns, 0), (columns, rows), (0, rows)]) * patch.cell_m
    return np.array(patch.corner_m) + own @ _turn(patch.heading_rad)


def _turn(angle_rad: float) -> npt.NDArray[np.float64]:
    """For points as rows."""
    c, s = math.cos(angle_rad), math.sin(angle_rad)
    return np.array([[c, s], [-s, c]])
