"""
What a source remembers of one of its layers, to give it to a daemon that was started again.

Obstacles are remembered one by one, with the time at which they expire. Of cells the patches are
remembered as they were sent: a newer one that covers an older one takes its place, and when they
are too many or too large the oldest is forgotten and the layer counts as incomplete. What moves,
and the last scans, are remembered for as long as they say something about now.
"""

from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field, replace
from typing import Any, Final, TypeAlias

import numpy as np

from byway import limits, messages, obstacles, tracks
from byway.packed import Bytes
from byway.strokes import Strokes

#: Seconds for which a track that tells no expiry is worth repeating.
track_fresh_s: Final = 2.0

#: A change to be sent, its packed frame, and when it counts from.
Restoring: TypeAlias = tuple[messages.AnyChange, Bytes, float]

#: What a layer is, and how it is looked after: the fields that `claim` and `replace_layer` share.
_SETTINGS: Final = (
    *("lease_s", "unknown_blocks", "outlines_only", "durable"),
    *("expected_period_s", "when_stale", "decay_s"),
)


@dataclass(frozen=True, slots=True)
class _Moving:
    """A track, when it was seen, and when it is gone; None: when the daemon says so."""

    track: tracks.Track
    seen_at_s: float
    gone_at_s: float | None

    def is_fresh(self, now_s: float) -> bool:
        """Whether it says something about now."""
        gone_at_s = self.seen_at_s + track_fresh_s if self.gone_at_s is None else self.gone_at_s
        return now_s < min(gone_at_s, self.seen_at_s + limits.age_s_max)


@dataclass(slots=True)
class HeldLayer:
    """One layer, as far as it is visible to replans because of this source."""

    #: It began with a `replace_layer`: nobody else has put anything there.
    is_whole: bool = False
    #: By name, those that were told.
    settings: dict[str, Any] = field(default_factory=lambda: {"lease_s": None})
    #: Every id is in one of polygons, discs, boxes and tracks at most.
    shapes: obstacles.Shapes = field(default_factory=lambda: obstacles.Shapes({}, {}))
    #: When an obstacle is gone, for those that expire.
    expires_at_s: dict[str, float] = field(default_factory=dict)
    tracks: dict[str, _Moving] = field(default_factory=dict)
    #: Patches and scans.
    strokes: Strokes = field(default_factory=Strokes)
    _look_at_expiries: int = 64

    @property
    def lease_s(self) -> float | None:
        """How long its owner may be silent; None: as long as it likes."""
        lease_s: float | None = self.settings.get("lease_s")
        return lease_s

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
                self.strokes.patch(message, packed)
            case messages.Scan():
                self.strokes.scan(message, packed, made_s - message.age_s)
            case messages.Track():
                self._take_tracks(message, packed, made_s)
            case messages.ReplaceLayer():
                self._take_settings(message)
                self._clear()
                self._take_obstacles(message, packed, made_s)
            case _:
                self._take_obstacles(message, packed, made_s)
        self._forget_expired(now_s)

    def _take_settings(self, message: messages.Claim | messages.ReplaceLayer) -> None:
        told = {name: getattr(message, name) for name in _SETTINGS}
        self.settings.update({name: value for name, value in told.items() if value is not None})
        # The one setting that is not as it was if it is not told.
        self.settings["lease_s"] = message.lease_s

    def _clear(self) -> None:
        self.is_whole = True
        self.shapes = obstacles.Shapes({}, {})
        self.expires_at_s.clear()
        self.tracks.clear()
        self.strokes = Strokes()

    def _take_obstacles(
        self, message: messages.Put | messages.ReplaceLayer, packed: Bytes, made_s: float
    ) -> None:
        found, mine = obstacles.unpack_shapes(message, packed), self.shapes
        for obstacle_id in (*found.polygons, *found.discs, *found.boxes):
            self._forget(obstacle_id)
            if message.expires_in_s is not None:
                self.expires_at_s[obstacle_id] = made_s + message.expires_in_s
        # Copies: a view would keep alive all that came in the same frame.
        mine.polygons.update({each: ring.copy() for each, ring in found.polygons.items()})
        mine.holes.update(
            {each: tuple(hole.copy() for hole in holes) for each, holes in found.holes.items()}
        )
        mine.discs.update(found.discs)
        mine.boxes.update(found.boxes)

    def _take_tracks(self, message: messages.Track, packed: Bytes, made_s: float) -> None:
        seen_at_s = made_s - message.age_s
        expires_in_s = message.expires_in_s
        gone_at_s = None if expires_in_s is None else made_s + expires_in_s
        for track_id, track in tracks.unpack_tracks(message, packed).items():
            self._forget(track_id)
            if track.outline_m is not None:
                track = replace(track, outline_m=np.array(track.outline_m))
            self.tracks[track_id] = _Moving(track, seen_at_s, gone_at_s)

    def _forget(self, obstacle_id: str) -> None:
        mine = self.shapes
        for kind in (mine.polygons, mine.holes, mine.discs, mine.boxes):
            kind.pop(obstacle_id, None)
        self.expires_at_s.pop(obstacle_id, None)
        self.tracks.pop(obstacle_id, None)

    def _forget_expired(self, now_s: float) -> None:
        # Looked at when they have doubled, so that it costs a constant time for each.
        if len(self.expires_at_s) + len(self.tracks) < self._look_at_expiries:
            return
        gone = [each for each, at_s in self.expires_at_s.items() if at_s <= now_s]
        gone += [each for each, moving in self.tracks.items() if not moving.is_fresh(now_s)]
        for obstacle_id in gone:
            self._forget(obstacle_id)
        self._look_at_expiries = max(64, 2 * (len(self.expires_at_s) + len(self.tracks)))

    # -- what is to be sent to a daemon that has nothing ----------------------------------------

    def restoring(self, name: str, now_s: float) -> Iterator[Restoring]:
        """Give the changes that make the layer what it is, in their order."""
        self._look_at_expiries = 0
        self._forget_expired(now_s)
        lasting = [each for each in self._ids() if each not in self.expires_at_s]
        chunks = list(self._chunks(lasting))
        if self.is_whole:
            fields, packed = self._packed(chunks.pop(0) if chunks else [])
            yield messages.ReplaceLayer(layer=name, **self.settings, **fields), packed, now_s
        else:
            yield messages.Claim(layer=name, **self.settings), b"", now_s
        for chunk in chunks:
            fields, packed = self._packed(chunk)
            yield messages.Put(layer=name, **fields), packed, now_s
        for at_s in sorted(set(self.expires_at_s.values())):
            for chunk in self._chunks(each for each in self._ids() if self._expires(each, at_s)):
                fields, packed = self._packed(chunk)
                left_s = at_s - now_s
                yield messages.Put(layer=name, expires_in_s=left_s, **fields), packed, now_s
        yield from self.strokes.restoring(now_s, self.settings.get("decay_s"))
        yield from self._restoring_tracks(name, now_s)

    def _restoring_tracks(self, name: str, now_s: float) -> Iterator[Restoring]:
        together: dict[tuple[float, float | None], dict[str, tracks.Track]] = {}
        for track_id, moving in self.tracks.items():
            key = (moving.seen_at_s, moving.gone_at_s)
            together.setdefault(key, {})[track_id] = moving.track
        # Those of one moment came in few messages, and fit into as many again.
        for (seen_at_s, gone_at_s), found in sorted(together.items(), key=lambda each: each[0][0]):
            ids = list(found)
            for first in range(0, len(ids), limits.tracks_max):
                some = {each: found[each] for each in ids[first : first + limits.tracks_max]}
                fields, packed = tracks.pack_tracks(some)
                left_s = None if gone_at_s is None else gone_at_s - now_s
                message = messages.Track(
                    layer=name, age_s=now_s - seen_at_s, expires_in_s=left_s, **fields
                )
                yield message, packed, now_s

    def _ids(self) -> Iterator[str]:
        yield from self.shapes.polygons
        yield from self.shapes.discs
        yield from self.shapes.boxes

    def _expires(self, obstacle_id: str, at_s: float) -> bool:
        return self.expires_at_s.get(obstacle_id) == at_s

    def _chunks(self, ids: Iterable[str]) -> Iterator[list[str]]:
        """Give the ids in as many pieces as there must be messages."""
        chunk: list[str] = []
        # Columns are rounded up to 8 bytes, and `starts` and `rings` have one more than they count.
        size_bytes = room_bytes = 80
        for obstacle_id in ids:
            own_bytes = self._size_bytes(obstacle_id)
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

    def _size_bytes(self, obstacle_id: str) -> int:
        mine = self.shapes
        size_bytes = len(obstacle_id) + 1
        outline = mine.polygons.get(obstacle_id)
        if outline is None:
            return size_bytes + (40 if obstacle_id in mine.boxes else 24)
        rings = (outline, *mine.holes.get(obstacle_id, ()))
        return size_bytes + 8 + sum(8 + ring.nbytes for ring in rings)

    def _packed(self, ids: Iterable[str]) -> tuple[obstacles.Fields, bytes]:
        chosen, mine = list(ids), self.shapes
        return obstacles.pack_shapes(
            obstacles.Shapes(
                {each: mine.polygons[each] for each in chosen if each in mine.polygons},
                {each: mine.discs[each] for each in chosen if each in mine.discs},
                {each: mine.holes[each] for each in chosen if each in mine.holes},
                {each: mine.boxes[each] for each in chosen if each in mine.boxes},
            )
        )
