"""
The tracks of a site: who moves where, and which pieces of their sweeps lie on it now.

Owned by one SiteModel, which puts and drops the pieces like any other obstacle.
"""

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning.site.records import NAME
from byway_planning.site.shapes import DiscShape, PolygonShape, Shape
from byway_planning.site.tables import Table
from byway_planning.site.tracks import Track

Key = tuple[str, str]

#: layer, first and last corner (equal for a disc), radius, middle of a disc, pose, velocity, turn
#: rate, uncertainty, growth, when it was seen.
TRACK_COLUMNS: Final = 15
#: Tracks carried in one turn take some 5 ms.
TURN_TRACKS: Final = 10
#: Clocks are rounded to nanoseconds on the way.
EARLY_S: Final = 1e-6


@dataclass
class Mover:
    """A track, how many pieces of its sweep lie on the site, and since when."""

    track: Track
    pieces: int = 0
    laid_s: float = -math.inf


class Movers:
    """Tracks by layer and id, and their tables."""

    def __init__(self) -> None:
        self._movers: dict[Key, Mover] = {}
        self._is_written = False
        self.tables = {
            "tracks": Table(np.float64, TRACK_COLUMNS),
            "track_names": Table(NAME),
            "track_corners": Table(np.float64, 2),
        }

    def items(self) -> Iterator[tuple[Key, Track]]:
        """Yield what moves."""
        for key, mover in self._movers.items():
            yield key, mover.track

    def of(self, layer: str) -> list[str]:
        """Return the ids of the tracks of a layer."""
        return [track_id for name, track_id in self._movers if name == layer]

    def take(self, layer: str, track_id: str, track: Track) -> None:
        """Remember a track, no piece of which lies on the site."""
        self._movers[layer, track_id] = Mover(track)
        self._is_written = False

    def laid(self, layer: str, track_id: str, pieces: int, now_s: float) -> int:
        """Note that pieces of a sweep from `now_s` on lie on the site; return how many lay."""
        mover = self._movers[layer, track_id]
        before, mover.pieces, mover.laid_s = mover.pieces, pieces, now_s
        return before

    def forget(self, layer: str, track_id: str) -> Mover | None:
        """Forget a track; return what was known of it."""
        mover = self._movers.pop((layer, track_id), None)
        self._is_written &= mover is None
        return mover

    def due(self, now_s: float, every_s: float) -> list[tuple[Key, Track]]:
        """
        Return what has to be carried forward by now, some at a time.

        Nothing, mostly: a site may change hundreds of times between two turns. When it is one's
        turn, others that were not just carried go along, so that turns fall together; but no
        more than a few, so that no change has to wait for all. Whose sweep was laid two turns
        ago goes in any case.
        """
        waiting = [
            (mover.laid_s, key, mover.track)
            for key, mover in self._movers.items()
            if mover.track.moves and mover.laid_s + 0.5 * every_s <= now_s
        ]
        waiting.sort(key=lambda each: each[0])
        if not waiting or waiting[0][0] + every_s > now_s + EARLY_S:
            return []
        late = sum(laid_s + 2.0 * every_s <= now_s + EARLY_S for laid_s, _, _ in waiting)
        return [(key, track) for _, key, track in waiting[: max(late, TURN_TRACKS)]]

    def next_due_s(self, now_s: float, every_s: float) -> float | None:
        """Return when something has to be carried forward, from `now_s` on; None for never."""
        laid_s = [mover.laid_s for mover in self._movers.values() if mover.track.moves]
        return max(now_s, min(laid_s) + every_s) if laid_s else None

    def write(self, layers: dict[str, int]) -> None:
        """Bring the tables up to date; `layers` numbers them."""
        if self._is_written:
            return
        self._is_written = True
        for table in self.tables.values():
            table.empty()
        if not self._movers:
            return
        rows: list[tuple[float, ...]] = []
        rings: list[npt.NDArray[np.float64]] = [np.empty((0, 2))]
        count = 0
        for (layer, _), track in self.items():
            shape = track.shape
            first, disc = count, (0.0, 0.0, 0.0)
            if isinstance(shape, PolygonShape):
                rings.append(shape.vertices_m)
                count += len(shape.vertices_m)
            else:
                disc = (shape.radius_m, shape.x_m, shape.y_m)
            rows.append(
                (
                    *(layers[layer], first, count, *disc, *track.pose, *track.velocity_mps),
                    *(track.turn_rate_radps, track.uncertainty_m, track.growth_mps, track.at_s),
                )
            )
        self.tables["tracks"].append(rows)
        names = [track_id.encode() for _, track_id in self._movers]
        self.tables["track_names"].append(np.array(names, NAME))
        self.tables["track_corners"].append(np.concatenate(rings))


def track_from(row: npt.NDArray[np.float64], corners: npt.NDArray[np.float64]) -> tuple[int, Track]:
    """Return the number of the layer and the track in a row of the published table."""
    layer, first, last = (int(value) for value in row[:3])
    radius, mx, my, x, y, heading, vx, vy, turn, unsure, growth, at_s = map(float, row[3:])
    shape: Shape
    if last > first:
        shape = PolygonShape.trusted(corners[first:last])
    else:
        shape = DiscShape(mx, my, radius)
    return layer, Track(shape, (x, y, heading), (vx, vy), turn, unsure, growth, at_s)
