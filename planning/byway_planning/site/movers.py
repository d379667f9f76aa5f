"""
The tracks of a site: who moves where, and which pieces of their sweeps lie on it now.

Owned by one SiteModel, which puts and drops the pieces like any other obstacle.
"""

from collections.abc import Iterator
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


class Movers:
    """Tracks by layer and id, and their tables."""

    def __init__(self) -> None:
        self._tracks: dict[Key, Track] = {}
        #: How many pieces of each lie on the site.
        self.pieces: dict[Key, int] = {}
        self._is_written = False
        self.tables = {
            "tracks": Table(np.float64, TRACK_COLUMNS),
            "track_names": Table(NAME),
            "track_corners": Table(np.float64, 2),
        }

    def __len__(self) -> int:
        return len(self._tracks)

    def items(self) -> Iterator[tuple[Key, Track]]:
        """Yield what moves."""
        yield from self._tracks.items()

    def of(self, layer: str) -> list[str]:
        """Return the ids of the tracks of a layer."""
        return [track_id for name, track_id in self._tracks if name == layer]

    def take(self, layer: str, track_id: str, track: Track) -> None:
        """Remember a track, or that it is elsewhere now."""
        self._tracks[layer, track_id] = track
        self._is_written = False

    def forget(self, layer: str, track_id: str) -> bool:
        """Forget a track; tell whether there was one."""
        known = self._tracks.pop((layer, track_id), None) is not None
        self._is_written &= not known
        return known

    @property
    def any_moves(self) -> bool:
        """Whether any of them has to be carried forward."""
        return any(track.moves for track in self._tracks.values())

    def write(self, layers: dict[str, int]) -> None:
        """Bring the tables up to date; `layers` numbers them."""
        if self._is_written:
            return
        self._is_written = True
        for table in self.tables.values():
            table.empty()
        for (layer, track_id), track in self._tracks.items():
            shape = track.shape
            first = self.tables["track_corners"].count
            middle, radius = (0.0, 0.0), 0.0
            if isinstance(shape, PolygonShape):
                self.tables["track_corners"].append(shape.vertices_m)
            else:
                middle, radius = (shape.x_m, shape.y_m), shape.radius_m
            last = self.tables["track_corners"].count
            self.tables["tracks"].append(
                (
                    *(layers[layer], first, last, radius, *middle, *track.pose),
                    *(*track.velocity_mps, track.turn_rate_radps),
                    *(track.uncertainty_m, track.growth_mps, track.at_s),
                )
            )
            self.tables["track_names"].append(np.array([track_id.encode()], NAME))


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
