"""Tracks as columns: what callers give, what travels, what the surveyor gets."""

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from byway import limits, messages, obstacles, tracks
from byway.errors import BadGeometry, BadMessage, BadValue, OutsideLimits, SenderFault, TooLarge
from byway.packed import pack
from byway.tracks import Track

TRIANGLE = [(0.0, 0.0), (1.0, 0.0), (0.0, 1.0)]
POSE = (5.0, 6.0, 0.5)

metres = st.floats(-1e6, 1e6)
bodies = st.one_of(
    st.builds(lambda r: {"radius_m": r}, st.floats(0.1, 10.0)),
    st.builds(
        lambda ring: {"outline_m": ring},
        st.lists(st.tuples(metres, metres), min_size=3, max_size=5),
    ),
)
found_tracks = st.builds(
    lambda body, **rest: Track(**body, **rest),
    bodies,
    pose=st.tuples(metres, metres, st.floats(-7, 7)),
    velocity_mps=st.tuples(st.floats(-50, 50), st.floats(-50, 50)),
    turn_rate_radps=st.floats(-10, 10),
    uncertainty_m=st.floats(0, 50),
    growth_mps=st.floats(0, 50),
)


def plain(track: Track) -> tuple[Any, ...]:
    outline = None if track.outline_m is None else np.array(track.outline_m).tolist()
    rest = (track.turn_rate_radps, track.uncertainty_m, track.growth_mps)
    return tuple(track.pose), outline, track.radius_m, tuple(track.velocity_mps), *rest


@settings(max_examples=50, deadline=None)
@given(st.dictionaries(st.text("ab1", min_size=1, max_size=4), found_tracks, max_size=4))
def test_what_goes_in_comes_out(found: dict[str, Track]) -> None:
    fields, packed = tracks.pack_tracks(found)
    message = messages.Track(layer="a", **fields)
    tracks.check(message, packed)
    got = tracks.unpack_tracks(message, packed)
    assert {name: plain(each) for name, each in got.items()} == {
        name: plain(each) for name, each in found.items()
    }


@pytest.mark.parametrize(
    ("fields", "error", "match"),
    [
        ({}, BadGeometry, "either an outline or a radius"),
        ({"radius_m": 1.0, "outline_m": TRIANGLE}, BadGeometry, "either"),
        ({"radius_m": 0.0}, BadGeometry, "radius 0"),
        ({"radius_m": "x"}, BadGeometry, "radius"),
        ({"outline_m": TRIANGLE[:2]}, BadGeometry, "fewer than 3"),
        ({"outline_m": [1, 2, 3]}, BadGeometry, "list of points"),
        ({"radius_m": 1.0, "pose": (0.0, 0.0)}, BadGeometry, "x, y, heading"),
        ({"radius_m": 1.0, "pose": (0.0, np.nan, 0.0)}, BadValue, "not finite"),
        ({"radius_m": 1.0, "pose": (0.0, 1e9, 0.0)}, OutsideLimits, "beyond"),
        ({"radius_m": 1.0, "pose": (0.0, 0.0, 2e3)}, BadValue, "heading"),
        ({"radius_m": 1.0, "velocity_mps": (80.0, 80.0)}, BadValue, "speed 113"),
        ({"radius_m": 1.0, "velocity_mps": (1.0,)}, BadGeometry, "vx, vy"),
        ({"radius_m": 1.0, "turn_rate_radps": -11.0}, BadValue, "turn rate"),
        ({"radius_m": 1.0, "uncertainty_m": -0.1}, BadValue, "uncertainty"),
        ({"radius_m": 1.0, "growth_mps": 51.0}, BadValue, "growth"),
        ({"radius_m": 1.0, "growth_mps": None}, BadValue, "not finite"),
    ],
)
def test_a_track_that_cannot_be_meant(
    fields: dict[str, Any], error: type[SenderFault], match: str
) -> None:
    with pytest.raises(error, match=match):
        tracks.pack_tracks({"fork": Track(**{"pose": POSE, **fields})})


def test_ids_and_number_of_tracks() -> None:
    track = Track(pose=POSE, radius_m=1.0)
    with pytest.raises(BadValue, match="is no id"):
        tracks.pack_tracks({"a b": track})
    with pytest.raises(TooLarge):
        tracks.pack_tracks({f"t{n}": track for n in range(limits.tracks_max + 1)})


def track_of(**changes: np.ndarray) -> tuple[messages.Track, bytes]:
    """A change of one triangle and one disc, but for the changes."""
    columns, packed = pack(
        {
            "ids": obstacles.pack_ids(["tri", "disc"]),
            "starts": np.array([0, 3]),
            "vertices_m": np.array(TRIANGLE),
            "radii_m": np.array([1.0]),
            "poses": np.zeros((2, 3)),
            "velocities": np.zeros((2, 3)),
            "uncertainties": np.zeros((2, 2)),
            **changes,
        }
    )
    return messages.Track(layer="a", polygons=1, discs=1, columns=columns), packed


@pytest.mark.parametrize(
    ("changes", "error"),
    [
        ({"ids": obstacles.pack_ids(["tri"])}, BadMessage),
        ({"ids": obstacles.pack_ids(["tri", "tri"])}, BadValue),
        ({"starts": np.array([0, 2])}, BadMessage),
        ({"starts": np.array([0, 2]), "vertices_m": np.array(TRIANGLE[:2])}, BadGeometry),
        ({"vertices_m": np.full((3, 2), np.nan)}, BadValue),
        ({"radii_m": np.array([np.inf])}, BadValue),
        ({"radii_m": np.array([0.0])}, BadGeometry),
        ({"poses": np.full((2, 3), np.nan)}, BadValue),
        ({"poses": np.full((2, 3), 2e3)}, BadValue),
        ({"velocities": np.full((2, 3), 99.0)}, BadValue),
        ({"uncertainties": np.full((2, 2), -1.0)}, BadValue),
    ],
)
def test_columns_that_cannot_be_meant_are_refused(
    changes: dict[str, np.ndarray], error: type[SenderFault]
) -> None:
    message, packed = track_of(**changes)
    tracks.check(message, packed)  # the door lets them pass: it touches no column
    with pytest.raises(error):
        tracks.unpack_tracks(message, packed)


@pytest.mark.parametrize(
    "changes",
    [
        {"poses": np.zeros((1, 3))},
        {"velocities": np.zeros((2, 2))},
        {"radii_m": np.zeros((1, 1))},
        {"extra": np.zeros(1)},
    ],
)
def test_the_door_refuses_other_sizes(changes: dict[str, np.ndarray]) -> None:
    with pytest.raises(BadMessage):
        tracks.check(*track_of(**changes))


def test_the_door_refuses_too_many() -> None:
    message, packed = track_of()
    with pytest.raises(TooLarge):
        tracks.check(message.model_copy(update={"discs": limits.tracks_max}), packed)
