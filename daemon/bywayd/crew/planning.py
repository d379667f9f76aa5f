"""
Jobs as workers do them: a replan through `byway_planning.plan`, a check through `verify`.

What leaves here is ready to travel: the outcome as msgpack with its packed columns, made by
the worker so that the front only has to pass it on. Numbers that are not finite have no place
on the wire; a cost or bound that is not there is left out.
"""

import math
from collections.abc import Callable, Mapping
from mmap import mmap
from types import SimpleNamespace
from typing import Any, Final, cast

import msgpack
import numpy as np

from byway.packed import Column, pack, read
from byway_planning import (
    METHODS,
    ROUTE_TABLE,
    Memory,
    Outcome,
    Route,
    Snapshot,
    vehicle_from_settings,
    verify,
)
from byway_planning import plan as plan_route
from byway_planning.remedy import Remedy
from byway_planning.site import base_id
from bywayd.crew.skills import Found, Refused


def attach(memory: mmap, handle: Mapping[str, Any]) -> Snapshot:
    """Return a snapshot for reading."""
    return Snapshot.attach(Memory.over(memory, _never_grow), dict(handle))


def _never_grow(bytes_needed: int) -> None:
    raise OSError(f"a reader has no business taking {bytes_needed} bytes")


def vehicle(definition: Mapping[str, Any]) -> Any:
    """
    Return the vehicle of a definition from the settings.

    Raises:
        Refused: If the definition is not one of a vehicle.
    """
    try:
        return vehicle_from_settings(definition)
    except ValueError as fault:
        raise Refused("internal", f"the settings describe no vehicle: {fault}") from fault


def plan(
    snapshot: object,
    vehicle: object,
    job: Mapping[str, Any],
    time_left_s: Callable[[], float],
    on_better: Callable[[Found], None],
) -> Found:
    """Plan until the time is over or nothing can be gained; see `skills.Skills.plan`."""
    if job["method"] not in METHODS:
        # Said even where no search is needed, so that a misspelt name does not go unnoticed.
        known = ", ".join(sorted(METHODS))
        raise Refused("bad_value", f"no method is called {job['method']!r}; known: {known}")
    try:
        outcome = plan_route(
            cast(Snapshot, snapshot),
            cast(Any, vehicle),
            tuple(job["start"]),
            tuple(job["goal"]),
            time_left=time_left_s,
            seed=job["seed"],
            on_better=lambda better: on_better(found_of(better, job)),
            method=job["method"],
            clearance_m=job["clearance_m"],
            left_out=frozenset(job["left_out"]),
            start_speed_mps=job["start_speed_mps"],
            start_curvature_per_m=job["start_curvature_per_m"],
            gap_wanted=job["gap_wanted"],
        )
    except ValueError as fault:
        # What the planner raises on purpose is about the request; its text names the value.
        raise Refused("bad_value", str(fault)) from fault
    return found_of(outcome, job)


#: Corners of the way that would be open: a body must stay below the largest frame.
_WAY_CORNERS_MAX: Final = 1000


def found_of(outcome: Outcome, job: Mapping[str, Any]) -> Found:
    """Return an outcome ready to travel."""
    body: dict[str, Any] = {
        "kind": outcome.kind,
        "cost_unit": outcome.cost_unit,
        "gap": outcome.gap,
        "seed": job["seed"],
        "left_out": list(job["left_out"]),
        "blocked_by": [
            {"layer": each.layer, "id": base_id(each.obstacle), "depth_m": each.depth_m}
            for each in outcome.blocked_by
        ],
        "statistics": {name: _plain(value) for name, value in outcome.statistics.items()},
    }
    for name in ("cost", "bound"):
        if math.isfinite(getattr(outcome, name)):
            body[name] = float(getattr(outcome, name))
    if outcome.remedy is not None:
        body["remedy"] = _told_remedy(outcome.remedy, proved=outcome.kind == "no_route")
    packed, path = b"", None
    if outcome.route is not None:
        told, packed = _told_route(outcome.route)
        body |= told
        path = np.ascontiguousarray(outcome.route.path, "<f8").tobytes()
    return {
        "kind": outcome.kind,
        "cost": float(outcome.cost),
        "body": msgpack.packb(body),
        "packed": packed,
        "path": path,
    }


def _told_remedy(remedy: Remedy, *, proved: bool) -> dict[str, Any]:
    return {
        "movables": [
            {"layer": each.layer, "id": base_id(each.obstacle), "x_m": each.x_m, "y_m": each.y_m}
            for each in remedy.movables
        ],
        "way_m": remedy.way_m.tolist()[:_WAY_CORNERS_MAX],
        "disc_radius_m": float(remedy.disc_radius_m),
        "proved": proved,
    }


def _told_route(route: Route) -> tuple[dict[str, Any], bytes]:
    table = route.table
    columns, packed = pack({name: table[name] for name in ROUTE_TABLE.names or ()})
    told = {
        "length_m": float(route.length_m),
        "duration_s": float(route.duration_s),
        "legs": [
            {
                "first": leg.first_row,
                "last": leg.last_row,
                "gear": leg.gear,
                "length_m": leg.length_m,
            }
            for leg in route.legs
        ],
        "columns": {name: column.model_dump() for name, column in columns.items()},
    }
    return told, packed


def _plain(value: Any) -> int | float | str:
    """A number or text that msgpack knows, from whatever numpy made of it."""
    plain = value.item() if isinstance(value, np.generic) else value
    if isinstance(plain, float) and not math.isfinite(plain):
        return str(plain)
    return cast("int | float | str", plain)


def check(
    snapshot: object, vehicle: object, job: Mapping[str, Any], outcome: Mapping[str, Any]
) -> str:
    """Return what is wrong with a route on this snapshot; empty if it stands."""
    attached = cast(Snapshot, snapshot)
    origin_m = np.array(attached.origin_m)
    columns = msgpack.unpackb(outcome["body"])["columns"]
    length = columns["t_s"]["shape"][0]
    table = np.empty(length, ROUTE_TABLE)
    for name, column in columns.items():
        table[name] = read(Column(**column), outcome["packed"])
    # The check works in the site's own frame.
    table["x_m"] -= origin_m[0]
    table["y_m"] -= origin_m[1]
    path = np.frombuffer(outcome["path"], "<f8").reshape(-1, 5).copy()
    path[:, :2] -= origin_m
    faults = verify(
        attached.solids(frozenset(job["left_out"])),
        cast(Any, vehicle),
        path,
        SimpleNamespace(table=table),
        _own(job["start"], origin_m),
        _own(job["goal"], origin_m),
        clearance_m=job["clearance_m"],
        start_speed_mps=job["start_speed_mps"],
        start_curvature_per_m=job["start_curvature_per_m"],
    )
    return "; ".join(fault.text for fault in faults)


def _own(pose: list[float], origin_m: Any) -> tuple[float, float, float]:
    return (pose[0] - float(origin_m[0]), pose[1] - float(origin_m[1]), pose[2])
