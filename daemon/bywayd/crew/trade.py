"""
What the crew can do, for real: the skills that the template imports and warms.

Only the template and its children import this; it is the one door from the daemon to
`byway_planning` and to the compiler behind it.
"""

import mmap
import time
from typing import Any, Final

from byway import messages, obstacles
from byway_planning import warm as warm_kernels
from bywayd.crew.planning import attach, check, plan, vehicle
from bywayd.crew.site_keeping import new_site, recover_site
from bywayd.crew.skills import Found, Progress

__all__ = ["attach", "check", "new_site", "plan", "recover_site", "vehicle", "warm"]

_rehearsal_s: Final = 0.03
_rehearsal_bytes: Final = 16 * 1024 * 1024


def warm(progress: Progress) -> None:
    """
    Compile or load every kernel, then do a day's work once on a yard of no account.

    Much is made at its first use (validators, code pages, tables of the planner). Made here, it
    is there in everybody who is forked; the first replan of a new worker took 13 ms to its
    first route without this, and 2 ms from the second on.
    """
    warm_kernels(progress)
    rehearse()


def rehearse() -> Found:
    """Put an obstacle, publish, describe, plan round it, check the route; return it."""
    site = new_site(
        {
            "site": {
                "cell_m": 0.1,
                "limits_m": (-20.0, -20.0, 40.0, 20.0),
                "origin_m": (0.0, 0.0),
                "sweep_s": 3.0,
                "carry_every_s": 0.1,
            },
            "layers": {},
        },
        ground := mmap.mmap(-1, _rehearsal_bytes),
        lambda bytes_needed: None,
    )
    post = obstacles.shapes({"post": [(9, -1), (10, -1), (10, 1), (9, 1)]}, {"bin": (5, 9, 1)})
    fields, packed = obstacles.pack_shapes(post)
    change: dict[str, Any] = {
        "what": "replace",
        "layer": "fixed",
        "settings": {"unknown_blocks": False, "outlines_only": False, "decay_s": None},
        "as_of_s": None,
        "message": messages.ReplaceLayer(layer="fixed", **fields).model_dump(),
        "packed": packed,
        "ids": [],
    }
    for _ in site.apply(change):
        pass
    published = site.publish()
    site.describe({"layers": None, "box_m": None, "cells": True, "guards": True}, 0.0)
    snapshot, tug = attach(ground, published.handle), vehicle(_tug)
    end_s = time.monotonic() + _rehearsal_s
    found = plan(snapshot, tug, _job, lambda: end_s - time.monotonic(), lambda better: None)
    if found["kind"] == "route":
        check(snapshot, tug, _job, found)
    return found


_tug: Final[dict[str, Any]] = {
    "model": "car",
    "footprint_m": [[-0.6, -0.7], [2.2, -0.7], [2.2, 0.7], [-0.6, 0.7]],
    "turn_radius_m_min": 2.6,
}
_job: Final[dict[str, Any]] = {
    "start": [0.0, 0.0, 0.0],
    "goal": [18.0, 0.0, 3.0],
    "seed": 1,
    "method": "auto",
    "left_out": [],
    "clearance_m": None,
    "start_speed_mps": 0.0,
    "start_curvature_per_m": 0.0,
    "gap_wanted": 0.0,
}
