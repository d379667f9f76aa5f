"""A desk whose sources have seen something: scans, tracks, and a surveyor that carries them on."""

from __future__ import annotations

import numpy as np
from tests.daemon.core.frontdesk import Desk, handle

from byway import messages
from byway.packed import pack
from byway.scans import pack_scan
from bywayd.core import effects, events


def scan(layer: str, **fields: object) -> tuple[messages.Scan, bytes]:
    """A scan of two beams, with its packed frame."""
    columns, packed = pack_scan([0.0, 0.5], [3.0, 9.0])
    told = {"origin": (0.0, 0.0, 0.0), "range_m_max": 9.0, "columns": columns, **fields}
    return messages.Scan(layer=layer, **told), packed  # type: ignore[arg-type]


def track(layer: str, *ids: str, **fields: object) -> tuple[messages.Track, bytes]:
    """Discs that move, with their packed frame."""
    count = len(ids)
    columns, packed = pack(
        {
            "ids": np.frombuffer("\n".join(ids).encode(), np.uint8),
            "starts": np.zeros(1, np.int64),
            "vertices_m": np.empty((0, 2)),
            "radii_m": np.ones(count),
            "poses": np.zeros((count, 3)),
            "velocities": np.ones((count, 3)),
            "uncertainties": np.zeros((count, 2)),
        }
    )
    return messages.Track(layer=layer, discs=count, columns=columns, **fields), packed  # type: ignore[arg-type]


def told(desk: Desk) -> list[tuple[str, int]]:
    """What sources were told by the last event: kind and number."""
    return [(message.kind, getattr(message, "number", -1)) for _, message in desk.replies()]


def batch(desk: Desk) -> int:
    """The number of the batch that was handed out by the last event."""
    return desk.one(effects.ApplyChanges).batch


def carried(
    desk: Desk, batch: int, next_in_s: float | None, *, changes: bool = True, **fields: object
) -> None:
    """The surveyor has done a batch 1 ms later, and wants another after a while."""
    desk.revision += changes
    revision = desk.revision
    event = events.SnapshotReady(
        1,
        batch,
        revision,
        handle(revision),
        next_in_s=next_in_s,
        **fields,  # type: ignore[arg-type]
    )
    desk.hand_in(event, 1.0)


def states(desk: Desk) -> list[messages.LayerState]:
    """What the last event had published about layers."""
    found = []
    for effect in desk.all_of(effects.Publish):
        if isinstance(effect.message, messages.LayerState):
            assert effect.topic == f"layers.{effect.message.layer}"
            found.append(effect.message)
    return found
