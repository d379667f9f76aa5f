"""
Obstacles that move, as packed columns, in `track`.

Columns: `ids`, `starts` and `vertices_m` as in obstacles.py, the outlines in the frame of their own
bodies; `radii_m` of those that are discs; and for all, first those with an outline, `poses` (x, y,
heading), `velocities` (along x and y of the site, turn rate) and `uncertainties` (metres now, and
metres a second).
"""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, TypeAlias

import numpy as np
import numpy.typing as npt

from byway import limits, messages
from byway.errors import BadGeometry, BadValue
from byway.obstacles import (
    Fields,
    Ring,
    check_count,
    check_id,
    check_packed_size,
    ids_of,
    numbers,
    pack_ids,
    pack_rings,
    points,
    rings_in,
)
from byway.packed import Bytes, check_columns, check_coordinates, pack, read


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Track:
    """
    An obstacle that moves.

    Args:
        pose: x_m, y_m, heading_rad of the body when it was seen.
        outline_m: (n, 2), three points or more in the frame of the body. This or `radius_m`.
        radius_m: Of a disc around the origin of the body.
        velocity_mps: Along x and y of the site.
        turn_rate_radps: Of body and velocity.
        uncertainty_m: How far any point of it may be from where this says.
        growth_mps: How fast that grows.
    """

    pose: Sequence[float]
    outline_m: Sequence[Sequence[float]] | npt.NDArray[Any] | None = None
    radius_m: float | None = None
    velocity_mps: Sequence[float] = (0.0, 0.0)
    turn_rate_radps: float = 0.0
    uncertainty_m: float = 0.0
    growth_mps: float = 0.0


Tracks: TypeAlias = Mapping[str, Track]


def pack_tracks(tracks: Tracks) -> tuple[Fields, bytes]:
    """
    Return the fields `polygons`, `discs`, `columns` of a body, and the packed frame.

    Raises:
        BadValue, BadGeometry, OutsideLimits: A track that cannot be meant.
        TooLarge: More tracks or bytes than one change may have.
    """
    check_count(len(tracks), "tracks", limits.tracks_max)
    for track_id in tracks:
        check_id(track_id)
    outlined = {each: track for each, track in tracks.items() if track.outline_m is not None}
    round_ones = {each: track for each, track in tracks.items() if each not in outlined}
    for track_id, track in tracks.items():
        if (track.outline_m is None) == (track.radius_m is None):
            raise BadGeometry(
                f"{track_id} must have either an outline or a radius", {"id": track_id}
            )
    rows = np.array([_row(*each) for each in (*outlined.items(), *round_ones.items())])
    rows = rows.reshape(-1, 8)
    radii_m = np.array([_radius_m(*each) for each in round_ones.items()], np.float64)
    columns, packed = pack(
        {
            "ids": pack_ids([*outlined, *round_ones]),
            **pack_rings([_outline_m(*each) for each in outlined.items()]),
            "radii_m": radii_m,
            "poses": rows[:, 0:3],
            "velocities": rows[:, 3:6],
            "uncertainties": rows[:, 6:8],
        }
    )
    check_packed_size("tracks", len(packed))
    return {"polygons": len(outlined), "discs": len(round_ones), "columns": columns}, packed


def _row(track_id: str, track: Track) -> list[float]:
    x_m, y_m, heading_rad = numbers(track_id, track.pose, "x, y, heading").tolist()
    vx_mps, vy_mps = numbers(track_id, track.velocity_mps, "vx, vy").tolist()
    rest = (track.turn_rate_radps, track.uncertainty_m, track.growth_mps)
    turn, uncertainty, growth = numbers(track_id, rest, "turn rate, uncertainty, growth").tolist()
    row = [x_m, y_m, heading_rad, vx_mps, vy_mps, turn, uncertainty, growth]
    _check_row(track_id, row)
    return row


def _check_row(track_id: str, row: Sequence[float]) -> None:
    """Raise BadValue where a number is beyond what can be meant."""
    _, _, heading_rad, vx_mps, vy_mps, turn, uncertainty, growth = row
    for name, value, least, most in (
        ("heading", heading_rad, -limits.heading_rad_max, limits.heading_rad_max),
        ("speed", math.hypot(vx_mps, vy_mps), 0.0, limits.track_speed_mps_max),
        ("turn rate", abs(turn), 0.0, limits.track_turn_rate_radps_max),
        ("uncertainty", uncertainty, 0.0, limits.track_uncertainty_m_max),
        ("growth", growth, 0.0, limits.track_growth_mps_max),
    ):
        if not least <= value <= most:
            raise BadValue(
                f"{track_id} has the {name} {value:g}, which must be within {least:g} and {most:g}",
                {"id": track_id, "field": name.replace(" ", "_")},
            )


def _outline_m(track_id: str, track: Track) -> Ring:
    ring = points(track_id, track.outline_m)
    if len(ring) < 3:
        raise BadGeometry(f"the outline of {track_id} has fewer than 3 points", {"id": track_id})
    return ring


def _radius_m(track_id: str, track: Track) -> float:
    (radius_m,) = numbers(track_id, (track.radius_m,), "radius").tolist()
    return _check_radius(track_id, radius_m)


def _check_radius(track_id: str, radius_m: float) -> float:
    if not radius_m > 0.0:
        raise BadGeometry(f"{track_id} has the radius {radius_m:g}", {"id": track_id})
    return radius_m


def check(message: messages.Track, packed: Bytes) -> None:
    """Check the sizes of the columns against the counts; raises BadMessage or TooLarge."""
    count = message.polygons + message.discs
    check_count(count, "tracks", limits.tracks_max)
    check_columns(
        message.columns,
        packed,
        {
            "ids": ("u1", (None,)),
            "starts": ("<i8", (message.polygons + 1,)),
            "vertices_m": ("<f8", (None, 2)),
            "radii_m": ("<f8", (message.discs,)),
            "poses": ("<f8", (count, 3)),
            "velocities": ("<f8", (count, 3)),
            "uncertainties": ("<f8", (count, 2)),
        },
    )


def unpack_tracks(message: messages.Track, packed: Bytes) -> dict[str, Track]:
    """
    Return the tracks of a change that came through the door; outlines are views of its frame.

    Raises:
        BadMessage, BadValue, BadGeometry, OutsideLimits: If the columns contradict each other, or
            have ids or numbers that cannot be meant.
    """
    columns = message.columns
    ids = ids_of(columns, packed, message.polygons + message.discs)
    told = [read(columns[name], packed) for name in ("poses", "velocities", "uncertainties")]
    rows = np.concatenate(told, axis=1)
    check_coordinates("tracks", rows)
    radii_m = read(columns["radii_m"], packed)
    check_coordinates("radii_m", radii_m)
    bodies: list[dict[str, Any]] = [{"outline_m": ring} for ring in rings_in(columns, packed)]
    bodies += [{"radius_m": radius_m} for radius_m in radii_m.tolist()]
    found: dict[str, Track] = {}
    for track_id, body, row in zip(ids, bodies, rows.tolist(), strict=True):
        _check_row(track_id, row)
        track = Track(
            pose=tuple(row[0:3]),
            velocity_mps=tuple(row[3:5]),
            turn_rate_radps=row[5],
            uncertainty_m=row[6],
            growth_mps=row[7],
            **body,
        )
        if track.outline_m is not None:
            _outline_m(track_id, track)
        else:
            _check_radius(track_id, body["radius_m"])
        found[track_id] = track
    return found
