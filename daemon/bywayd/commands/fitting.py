"""Planning without a daemon, for commissioning: does it fit there, can it turn here?"""

from pathlib import Path
from typing import Any, Final

import numpy as np

import byway
from byway import frames, messages
from byway.answer import answer_of
from byway.site_view import LayerView
from byway_planning import (
    LayerSettings,
    Memory,
    Route,
    SiteModel,
    SiteSettings,
    countdown,
    plan,
    warm,
)
from byway_planning.site import DiscShape, PolygonShape, Shape, SiteError, Snapshot, box_shape
from byway_planning.vehicles import vehicle_from_settings
from byway_planning.verify import clearance_m as clearance_at
from bywayd.commands.answer_picture import Pose, Tightest, draw_answer
from bywayd.commands.shared import Status, fail
from bywayd.crew.planning import found_of
from bywayd.geojson import GeoJsonFault, Shapes, read_shapes
from bywayd.outlines import outline_of
from bywayd.settings import BadSettings, Settings, load

LAYER: Final = "site"
#: Ground around the drawing where the settings name no limits.
MARGIN_M: Final = 30.0
SEED: Final = 1


def fit(
    file: Path,
    settings_file: Path | None,
    vehicle_name: str,
    start: Pose,
    goal: Pose,
    budget_s: float,
    method: str,
    seed: int | None,
    clearance_m: float | None,
    picture: Path | None,
) -> tuple[byway.Answer, Tightest | None]:
    """
    Plan on a drawing; return the answer, and the tightest place of its route.

    Ends the command, with the reason, for files and questions that make no sense.
    """
    warm()
    try:
        settings = load(settings_file)
        shapes = read_shapes(file)
    except BadSettings as bad:
        fail(Status.NO, str(bad))
    except (OSError, GeoJsonFault) as fault:
        fail(Status.NO, str(fault))
    if vehicle_name not in settings.vehicles:
        known = ", ".join(sorted(settings.vehicles))
        fail(Status.REFUSED, f"no vehicle is called {vehicle_name}; known: {known}")
    section = settings.vehicles[vehicle_name]
    definition: dict[str, Any] = {"model": section.model, **section.arguments()}
    try:
        vehicle = vehicle_from_settings(definition)
        snapshot, view = _site(settings, shapes, (start, goal))
        outcome = plan(
            snapshot,
            vehicle,
            start,
            goal,
            time_left=countdown(budget_s),
            seed=SEED if seed is None else seed,
            method=method,
            clearance_m=clearance_m,
        )
    except ValueError as fault:  # SiteError is one as well
        fail(Status.REFUSED, str(fault))
    found = found_of(outcome, {"seed": outcome.seed, "left_out": ()})
    told = messages.AnswerMessage(
        unit=vehicle_name,
        revision=outcome.revision,
        first_s=outcome.first_s,
        waited_s=0.0,
        total_s=outcome.total_s,
        outcome=found["body"],
    )
    header = frames.Header("answer", "here", epoch="none")
    answer = answer_of(frames.Received(header, told, b"", found["packed"]))
    tightest = None if outcome.route is None else _tightest(snapshot, vehicle, outcome.route)
    if picture is not None:
        outline_m = outline_of(definition)
        draw_answer(view, vehicle_name, outline_m, start, goal, answer, picture, tightest)
    return answer, tightest


def _site(
    settings: Settings, shapes: Shapes, ends: tuple[Pose, Pose]
) -> tuple[Snapshot, byway.SiteView]:
    """Return the site of a drawing, for the planner and for a picture."""
    ox, oy = settings.site.origin_m
    placed: dict[str, Shape] = {}
    for name, (outline, holes) in shapes.polygons.items():
        rings = [np.array(ring) - (ox, oy) for ring in (outline, *holes)]
        placed[name] = _named(name, lambda rings=rings: PolygonShape(rings[0], rings[1:]))
    for name, (x, y, radius) in shapes.discs.items():
        told = (x - ox, y - oy, radius)
        placed[name] = _named(name, lambda told=told: DiscShape(*told))
    for name, (x, y, *rest) in shapes.boxes.items():
        box = (x - ox, y - oy, *rest)
        placed[name] = _named(name, lambda box=box: box_shape(*box))
    limits_m = settings.site.limits_m
    if limits_m is None:
        corners = [(x - ox, y - oy) for x, y, _ in ends]
        corners += [(s.box_m[i], s.box_m[i + 1]) for s in placed.values() for i in (0, 2)]
        low, high = np.min(corners, axis=0) - MARGIN_M, np.max(corners, axis=0) + MARGIN_M
        own = (float(low[0]), float(low[1]), float(high[0]), float(high[1]))
    else:
        own = (limits_m[0] - ox, limits_m[1] - oy, limits_m[2] - ox, limits_m[3] - oy)
    model = SiteModel(SiteSettings(own, settings.site.cell_m, (ox, oy)), Memory.private())
    model.declare(LAYER, LayerSettings())
    for name, shape in placed.items():
        model.put(LAYER, name, shape)
    polygons = {n: s.rings_m for n, s in placed.items() if isinstance(s, PolygonShape)}
    origin = np.array([ox, oy])
    layer = LayerView(
        False,
        False,
        {name: rings[0] + origin for name, rings in polygons.items()},
        dict(shapes.discs),
        (),
        {n: tuple(ring + origin for ring in r[1:]) for n, r in polygons.items() if r[1:]},
    )
    outer = (own[0] + ox, own[1] + oy, own[2] + ox, own[3] + oy)
    return model.publish(), byway.SiteView(1, "none", (ox, oy), outer, {LAYER: layer})


def _named(name: str, make: Any) -> Shape:
    try:
        shape: Shape = make()
    except SiteError as fault:
        raise SiteError(fault.code, f"{name}: {fault.text}") from fault
    return shape


def _tightest(snapshot: Snapshot, vehicle: Any, route: Route) -> Tightest | None:
    """Return the row of a route that is nearest to something, by the exact distance."""
    solids, table = snapshot.solids(), route.table
    ox, oy = snapshot.origin_m
    best: tuple[float, int, str] | None = None
    for row in range(len(table)):
        pose = [table["x_m"][row] - ox, table["y_m"][row] - oy, table["heading_rad"][row]]
        near = clearance_at(solids, vehicle, pose)
        if near.kind != "nothing" and (best is None or near.distance_m < best[0]):
            what: str = near.kind if near.kind != "limits" else "the limits of the site"
            if near.kind in ("polygon", "disc"):
                what = snapshot.name_of(near.kind, near.number)[1]
            best = near.distance_m, row, what
    if best is None:
        return None
    distance_m, row, nearest = best
    steps = np.hypot(np.diff(table["x_m"]), np.diff(table["y_m"]))
    x, y, heading = (float(table[name][row]) for name in ("x_m", "y_m", "heading_rad"))
    return Tightest((x, y, heading), float(steps[:row].sum()), float(distance_m), nearest)
