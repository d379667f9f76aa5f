"""
What a source remembers of one of its layers, to give it to a daemon that was started again.

Obstacles are remembered one by one, with the time at which they expire. Of cells the patches are
remembered as they were sent: a newer one that covers an older one takes its place, and when they
are too many or too large the oldest is forgotten and the layer counts as incomplete.
"""

from collections import deque
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from typing import Any, Final, TypeAlias

import numpy as np
import numpy.typing as npt

from byway import limits, messages, obstacles
from byway.packed import Bytes

#: Patches of one layer. A range sensor that sends whole patches of the same place keeps one; 256
#: are the tiles of a site of 400 x 400 m, sent in pieces of 25 m.
patches_max: Final = 256
#: Bytes of their cells: what four patches of the largest size have.
patch_bytes_max: Final = 4 * limits.packed_bytes_max

#: A change to be sent, its packed frame, and when it counts from.
Restoring: TypeAlias = tuple[messages.AnyChange, Bytes, float]
_Polygon: TypeAlias = npt.NDArray[np.float64]
_Disc: TypeAlias = tuple[float, float, float]


@dataclass(slots=True)
class HeldLayer:
    """One layer, as far as it is visible to replans because of this source."""

    #: It began with a `replace_layer`: nobody else has put anything there.
    is_whole: bool = False
    #: Older patches were forgotten.
    is_incomplete: bool = False
    lease_s: float | None = None
    unknown_blocks: bool | None = None
    outlines_only: bool | None = None
    #: Every id is in one of the two at most.
    polygons: dict[str, _Polygon] = field(default_factory=dict)
    discs: dict[str, _Disc] = field(default_factory=dict)
    #: When an obstacle is gone, for those that expire.
    expires_at_s: dict[str, float] = field(default_factory=dict)
    patches: deque[tuple[messages.Patch, Bytes]] = field(default_factory=deque)
    _patch_bytes: int = 0
    _look_at_expiries: int = 64

    # -- what has become visible ------------------------------------------------------------------

    def take(self, message: messages.AnyChange, packed: Bytes, made_s: float, now_s: float) -> None:
        """Take note of a change that was made at `made_s` and is visible now."""
        match message:
            case messages.Claim():
                self._take_settings(message)
            case messages.Drop():
                for obstacle_id in message.ids:
                    self._forget(obstacle_id)
            case messages.Patch():
                self._take_patch(message, packed)
            case messages.Scan() | messages.Track():
                pass  # of the moment: a daemon that was started again is told the next one
            case messages.ReplaceLayer():
                self._take_settings(message)
                self._clear()
                self._take_obstacles(message, packed, made_s)
            case _:
                self._take_obstacles(message, packed, made_s)
        self._forget_expired(now_s)

    def _take_settings(self, message: messages.Claim | messages.ReplaceLayer) -> None:
        self.lease_s = message.lease_s
        if message.unknown_blocks is not None:
            self.unknown_blocks = message.unknown_blocks
        if message.outlines_only is not None:
            self.outlines_only = message.outlines_only

    def _clear(self) -> None:
        self.is_whole, self.is_incomplete = True, False
        self.polygons.clear()
        self.discs.clear()
        self.expires_at_s.clear()
        self.patches.clear()
        self._patch_bytes = 0

    def _take_obstacles(
        self, message: messages.Put | messages.ReplaceLayer, packed: Bytes, made_s: float
    ) -> None:
        found = obstacles.unpack_shapes(message, packed)
        for obstacle_id in (*found.polygons, *found.discs):
            self._forget(obstacle_id)
            if message.expires_in_s is not None:
                self.expires_at_s[obstacle_id] = made_s + message.expires_in_s
        # Copies: a view would keep alive all that came in the same frame.
        self.polygons.update({each: ring.copy() for each, ring in found.polygons.items()})
        self.discs.update(found.discs)

    def _forget(self, obstacle_id: str) -> None:
        self.polygons.pop(obstacle_id, None)
        self.discs.pop(obstacle_id, None)
        self.expires_at_s.pop(obstacle_id, None)

    def _forget_expired(self, now_s: float) -> None:
        # Looked at when they have doubled, so that it costs a constant time for each.
        if len(self.expires_at_s) < self._look_at_expiries:
            return
        for obstacle_id in [each for each, at_s in self.expires_at_s.items() if at_s <= now_s]:
            self._forget(obstacle_id)
        self._look_at_expiries = max(64, 2 * len(self.expires_at_s))

    def _take_patch(self, message: messages.Patch, packed: Bytes) -> None:
        box_m = _box_m(message)
        kept = [each for each in self.patches if not _covers(box_m, _box_m(each[0]))]
        self.patches = deque([*kept, (message, packed)])
        self._patch_bytes = sum(len(cells) for _, cells in self.patches)
        while len(self.patches) > patches_max or self._patch_bytes > patch_bytes_max:
            _, cells = self.patches.popleft()
            self._patch_bytes -= len(cells)
            self.is_incomplete = True

    # -- what is to be sent to a daemon that has nothing ----------------------------------------

    def restoring(self, name: str, now_s: float) -> Iterator[Restoring]:
        """Give the changes that make the layer what it is, in their order."""
        self._look_at_expiries = 0
        self._forget_expired(now_s)
        lasting = [each for each in self._ids() if each not in self.expires_at_s]
        chunks = list(self._chunks(lasting))
        settings: dict[str, Any] = {
            "lease_s": self.lease_s,
            "unknown_blocks": self.unknown_blocks,
            "outlines_only": self.outlines_only,
        }
        if self.is_whole:
            fields, packed = self._packed(chunks.pop(0) if chunks else [])
            yield messages.ReplaceLayer(layer=name, **settings, **fields), packed, now_s
        else:
            yield messages.Claim(layer=name, **settings), b"", now_s
        for chunk in chunks:
            fields, packed = self._packed(chunk)
            yield messages.Put(layer=name, **fields), packed, now_s
        for at_s in sorted(set(self.expires_at_s.values())):
            for chunk in self._chunks(each for each in self._ids() if self._expires(each, at_s)):
                fields, packed = self._packed(chunk)
                left_s = at_s - now_s
                yield messages.Put(layer=name, expires_in_s=left_s, **fields), packed, now_s
        for patch, cells in self.patches:
            yield patch, cells, now_s

    def _ids(self) -> Iterator[str]:
        yield from self.polygons
        yield from self.discs

    def _expires(self, obstacle_id: str, at_s: float) -> bool:
        return self.expires_at_s.get(obstacle_id) == at_s

    def _chunks(self, ids: Iterable[str]) -> Iterator[list[str]]:
        """Give the ids in as many pieces as there must be messages."""
        chunk: list[str] = []
        # Columns are rounded up to 8 bytes, and `starts` has one more than there are polygons.
        size_bytes = room_bytes = 64
        for obstacle_id in ids:
            ring = self.polygons.get(obstacle_id)
            own_bytes = len(obstacle_id) + 1 + (24 if ring is None else 8 + ring.nbytes)
            if chunk and (
                len(chunk) == limits.obstacles_max
                or size_bytes + own_bytes > limits.packed_bytes_max
            ):
                yield chunk
                chunk, size_bytes = [], room_bytes
            chunk.append(obstacle_id)
            size_bytes += own_bytes
        if chunk:
            yield chunk

    def _packed(self, ids: Iterable[str]) -> tuple[obstacles.Fields, bytes]:
        chosen = list(ids)
        return obstacles.pack_shapes(
            obstacles.Shapes(
                {each: self.polygons[each] for each in chosen if each in self.polygons},
                {each: self.discs[each] for each in chosen if each in self.discs},
            )
        )


_Box: TypeAlias = tuple[float, float, float, float]


def _box_m(patch: messages.Patch) -> _Box:
    rows, columns = patch.columns["cells"].shape
    x_m, y_m = patch.corner_m
    return x_m, y_m, x_m + columns * patch.cell_m, y_m + rows * patch.cell_m


def _covers(outer_m: _Box, inner_m: _Box) -> bool:
    # A hair of tolerance: the same patch sent again must cover itself after rounding.
    hair_m = 1e-9
    return (
        outer_m[0] <= inner_m[0] + hair_m
        and outer_m[1] <= inner_m[1] + hair_m
        and outer_m[2] >= inner_m[2] - hair_m
        and outer_m[3] >= inner_m[3] - hair_m
    )
