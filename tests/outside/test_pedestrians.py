"""
Tracks against people who really walked.

A. Lerner, Y. Chrysanthou, D. Lischinski, Crowds by Example, Computer Graphics Forum 26, 2007: a
recording of pedestrians (frame, id, x, z, y, vx, vz, vy; 25 frames a second, every tenth). What is
told of them at one frame is carried forward; where they are in the next frames has to lie in the
ground that is blocked for them.
"""

import os
from collections import defaultdict
from pathlib import Path

import numpy as np
import pytest

from byway_planning import DiscShape, LayerSettings, Memory, SiteModel, SiteSettings
from byway_planning.site import PolygonShape, Track, base_id

OPEN_DATA = os.environ.get("BYWAY_OPEN_DATA", "")
pytestmark = pytest.mark.skipif(not OPEN_DATA, reason="BYWAY_OPEN_DATA names no folder")

FRAME_S = 0.4
AHEAD_S = 2.0
BODY_M = 0.25
#: What a sensor might tell of somebody on foot, who may turn or stop at any step (invented).
UNCERTAINTY_M, GROWTH_MPS = 0.15, 0.6


def people() -> dict[int, dict[int, tuple[float, float, float, float]]]:
    """x, y, vx, vy by frame and person."""
    rows = np.loadtxt(Path(OPEN_DATA, "pedestrians_zara01.txt"))
    found: dict[int, dict[int, tuple[float, float, float, float]]] = defaultdict(dict)
    for frame, person, x, _, y, vx, _, vy in rows.tolist():
        found[round((frame - 1) / 10)][int(person)] = (x, y, vx, vy)
    return found


def test_people_walk_as_fast_as_people_do() -> None:
    """
    Common practice: on average 0.8 to 1.4 m/s, 95 % below 2 m/s. Also tells the units apart.
    """
    speeds = [np.hypot(vx, vy) for frame in people().values() for _, _, vx, vy in frame.values()]
    assert 0.8 < np.mean(speeds) < 1.4
    assert np.quantile(speeds, 0.95) < 2.0


def test_people_are_where_they_were_expected() -> None:
    frames = people()
    model = SiteModel(SiteSettings((-12.0, -6.0, 28.0, 34.0), sweep_s=AHEAD_S), Memory.private())
    model.declare("people", LayerSettings())
    steps = int(AHEAD_S / FRAME_S)
    inside, seen, changed = 0, 0, 0
    for number in sorted(frames)[: 60 * 5 : 5]:
        now_s = number * FRAME_S
        for person, (x, y, vx, vy) in frames[number].items():
            body = DiscShape(0.0, 0.0, BODY_M)
            model.track(
                "people",
                f"p{person}",
                Track(body, (x, y, 0.0), (vx, vy), 0.0, UNCERTAINTY_M, GROWTH_MPS, now_s),
            )
        gone = {base_id(n) for _, n, _ in model.tracks()} - {f"p{p}" for p in frames[number]}
        for name in gone:
            model.drop("people", name)
        snapshot = model.publish()
        changed += len(model.changed_m)
        blocked = defaultdict(list)
        for _, name, shape in snapshot.obstacles():
            assert isinstance(shape, PolygonShape)
            blocked[base_id(name)].append(shape.vertices_m)
        for later in range(1, steps + 1):
            for person, (x, y, _, _) in frames.get(number + later, {}).items():
                if person in frames[number]:
                    seen += 1
                    inside += any(_holds(ring, x, y) for ring in blocked[f"p{person}"])
    assert seen > 300
    assert inside / seen > 0.95
    assert changed > 0


def _holds(ring: np.ndarray, x: float, y: float) -> bool:
    """Whether a convex ring, counter-clockwise, holds a point."""
    d, e = np.roll(ring, -1, axis=0) - ring, np.array([x, y]) - ring
    return bool((d[:, 0] * e[:, 1] - d[:, 1] * e[:, 0] >= 0.0).all())
