"""The site as it is told: holes, what moves, what is guarded."""

from typing import Any

import numpy as np
import pytest

from byway import frames, messages, obstacles
from byway.errors import BadReply
from byway.frames import Header
from byway.packed import pack
from byway.site_view import SiteView, site_view

RING = np.array([(0.0, 0.0), (4.0, 0.0), (0.0, 4.0)])
HOLE = np.array([(1.0, 1.0), (2.0, 1.0), (1.0, 2.0)])
TRACK = messages.TrackIs(
    layer="movers",
    id="fork",
    pose=(1.0, 2.0, 0.5),
    velocity_mps=(1.0, 0.5),
    turn_rate_radps=0.1,
    uncertainty_m=0.2,
    growth_mps=0.3,
    age_s=0.4,
    outline="track-0",
    sweep=["sweep-0", "sweep-1"],
)
GUARDED = messages.GuardedIs(unit="tug-3", progress_m=4.0, state="clear", column="guard-0")


def told(**changes: Any) -> SiteView:
    columns, packed = pack(
        {
            "ids": obstacles.pack_ids(["kiln", "kiln"]),
            "starts": np.array([0, 3, 6, 9]),
            "vertices_m": np.concatenate([RING, HOLE, RING]),
            "discs_m": np.empty((0, 3)),
            "rings": np.array([0, 2, 3]),
            "track-0": RING,
            "sweep-0": RING + 1.0,
            "sweep-1": RING + 2.0,
            "guard-0": np.zeros((5, 3)),
        }
    )
    layers = [
        messages.LayerIs(layer="fixed", polygons=1, discs=0, durable=True, decay_s=9.0),
        messages.LayerIs(layer="stacks", polygons=1, discs=0),
    ]
    fields = {"layers": layers, "tracks": [TRACK], "guards": [GUARDED], "columns": columns}
    message = messages.SiteIs(revision=3, **{**fields, **changes})
    parts = frames.encode(Header("site_is", "a", epoch="e"), message, packed)
    return site_view(frames.decode(parts, frames.REPLIES))


def test_holes_belong_to_their_polygon_and_layer() -> None:
    layers = told().layers
    assert layers["fixed"].polygons["kiln"].tolist() == RING.tolist()
    (hole,) = layers["fixed"].holes["kiln"]
    assert hole.tolist() == HOLE.tolist()
    assert layers["stacks"].polygons["kiln"].tolist() == RING.tolist()
    assert layers["stacks"].holes == {}
    assert (layers["fixed"].durable, layers["fixed"].decay_s) == (True, 9.0)
    assert (layers["stacks"].durable, layers["stacks"].decay_s) == (False, None)


def test_tracks_and_guarded_routes() -> None:
    site = told()
    (track,) = site.tracks
    assert (track.layer, track.id, track.pose) == ("movers", "fork", (1.0, 2.0, 0.5))
    assert (track.velocity_mps, track.turn_rate_radps) == ((1.0, 0.5), 0.1)
    assert (track.uncertainty_m, track.growth_mps, track.age_s) == (0.2, 0.3, 0.4)
    assert track.outline_m.tolist() == RING.tolist()
    assert [each.tolist() for each in track.sweep_m] == [(RING + n).tolist() for n in (1, 2)]
    (guarded,) = site.guards
    assert (guarded.unit, guarded.progress_m, guarded.state) == ("tug-3", 4.0, "clear")
    assert guarded.poses.shape == (5, 3)
    assert guarded.blocked is None


@pytest.mark.parametrize(
    "changes",
    [
        {"tracks": []},
        {"tracks": [TRACK.model_copy(update={"outline": "nowhere"})]},
        {"guards": [GUARDED.model_copy(update={"column": "track-0"})]},
        {"layers": []},
    ],
)
def test_a_site_that_contradicts_itself_is_a_bad_reply(changes: dict[str, Any]) -> None:
    with pytest.raises(BadReply, match="cannot be read"):
        told(**changes)
