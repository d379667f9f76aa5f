"""What a caller asks, made into requests; what cannot be meant is refused here."""

from collections.abc import Iterable, Sequence
from typing import TypeAlias, TypedDict

import numpy as np

from byway import frames, limits, messages
from byway.answer import ROUTE_TABLE, Found, Route
from byway.changing import floats
from byway.errors import BadGeometry, BadValue, TooLarge
from byway.packed import Bytes, pack

Pose: TypeAlias = Sequence[float]


class ReplanOptions(TypedDict, total=False):
    """
    What a replan may say besides vehicle, start, goal and budget.

    Keys:
        method: "auto" or the name of a search method.
        seed: The daemon draws one if left out.
        leave_out: Layers of outlines that do not count, such as that of the unit itself.
        clearance_m: Instead of the vehicle's own.
        start_speed_mps, start_curvature_per_m: How the vehicle moves at the start; signed.
        gap_wanted: 0 to below 1; a route with this gap is answered at once.
        guard: The route of the answer is guarded as soon as it leaves; see `Client.guard` for
            this and the next two.
        replan_on_alert: Look for a new route at an alert.
        silence_s: The guard is lost without `progress` for so long.
    """

    method: str
    seed: int | None
    leave_out: Iterable[str]
    clearance_m: float | None
    start_speed_mps: float
    start_curvature_per_m: float
    gap_wanted: float
    guard: bool
    replan_on_alert: bool
    silence_s: float | None


def replan(
    vehicle: str,
    start: Pose,
    goal: Pose,
    budget_s: float,
    unit: str,
    options: ReplanOptions,
) -> messages.Replan:
    """See `Client.replan`."""
    seed = options.get("seed")
    fields = {
        "vehicle": vehicle,
        "unit": unit,
        "start": floats("start", start),
        "goal": floats("goal", goal),
        "budget_s": budget_s,
        **options,
        "seed": None if seed is None else int(seed),
        "leave_out": list(options.get("leave_out", ())),
    }
    return frames.build(messages.Replan, fields)


def site(
    layers: Iterable[str] | None,
    box_m: Sequence[float] | None,
    cells: bool,
    guards: bool,
) -> messages.Site:
    """See `Client.site`."""
    fields = {
        "layers": None if layers is None else list(layers),
        "box_m": None if box_m is None else floats("box_m", box_m),
        "cells": cells,
        "guards": guards,
    }
    return frames.build(messages.Site, fields)


def steer(
    kind: type[messages.Cancel] | type[messages.Finish],
    unit: str | None,
    replan: str | None,
    own_unit: str,
) -> messages.Cancel | messages.Finish:
    """See `Client.cancel`."""
    if unit is None and replan is None:
        unit = own_unit
    asked = frames.build(kind, {"unit": unit, "replan": replan})
    if unit is not None and replan is not None:
        raise BadValue("name either the replan or the unit", {"field": "replan"})
    return asked


class GuardOptions(TypedDict, total=False):
    """
    What a guard may say besides the route.

    Keys:
        vehicle, unit, leave_out, clearance_m: Of the route; an answer knows its own.
        progress_m: How far along the route the unit is.
        silence_s: The guard is lost without `progress` for so long; a setting of the daemon if
            left out.
        replan_on_alert: Look for a new route at an alert, and publish it (`rerouted`).
        budget_s: For that.
    """

    vehicle: str
    unit: str
    leave_out: Iterable[str]
    clearance_m: float | None
    progress_m: float
    silence_s: float | None
    replan_on_alert: bool
    budget_s: float


def guard(
    found: Found | Route, own_unit: str, options: GuardOptions
) -> tuple[messages.Guard, Bytes]:
    """See `Client.guard`."""
    route = found.route if isinstance(found, Found) else found
    if route is None:
        raise BadValue("there is no route to be guarded", {"field": "route"})
    known: GuardOptions = {"unit": own_unit}
    if isinstance(found, Found):
        known = {
            "unit": found.unit,
            "vehicle": found.vehicle,
            "leave_out": found.left_out,
            "clearance_m": found.clearance_m,
        }
    told: GuardOptions = {**known, **options}
    if not told.get("vehicle"):
        raise BadValue("say which vehicle drives the route", {"field": "vehicle"})
    table = route.table
    if table.dtype != ROUTE_TABLE or table.ndim != 1 or not len(table):
        raise BadGeometry("a route is a table of type ROUTE_TABLE with one row or more")
    if len(table) > limits.guard_rows_max:
        raise TooLarge(
            f"a route of {len(table)} rows, the most is {limits.guard_rows_max}",
            {"rows": len(table), "rows_max": limits.guard_rows_max},
        )
    names = ROUTE_TABLE.names or ()
    if not all(np.isfinite(table[name]).all() for name in names):
        raise BadGeometry("the route has a value that is not finite")
    columns, packed = pack({name: table[name] for name in names})
    fields = {**told, "leave_out": list(told.get("leave_out", ())), "columns": columns}
    return frames.build(messages.Guard, fields), packed


def progress(
    unit: str, progress_m: float, speed_mps: float | None, guard: str | None
) -> messages.Progress:
    """See `Client.progress`."""
    fields = {"unit": unit, "progress_m": progress_m, "speed_mps": speed_mps, "guard": guard}
    return frames.build(messages.Progress, fields)


def release(unit: str, guard: str | None) -> messages.Release:
    """See `Client.release`."""
    return frames.build(messages.Release, {"unit": unit, "guard": guard})
