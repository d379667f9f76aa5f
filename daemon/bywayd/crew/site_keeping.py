"""
The site as the surveyor keeps it: changes as they came over the wire, made in a `SiteModel`.

Everything from outside is in the coordinates of the sources; the model is in the site's own
frame. The difference, `origin_m`, is taken off and put back here.
"""

from collections.abc import Callable, Iterator, Mapping
from functools import partial
from mmap import mmap
from typing import Any, Final

import numpy as np

from byway import messages, obstacles, scans, tracks
from byway.errors import BywayError
from byway.packed import read
from byway_planning.site import (
    DiscShape,
    LayerSettings,
    Memory,
    PolygonShape,
    Shape,
    SiteError,
    SiteModel,
    SiteSettings,
    Snapshot,
    Track,
    base_id,
    box_shape,
)
from bywayd.crew.site_tables import describe
from bywayd.crew.skills import Published, Refused
from bywayd.crew.watch import Watch

#: Metres around the origin for a site without limits: every revision has tables of all tiles,
#: 100 kB for this, so "no limits" cannot be taken at its word.
limits_m_if_none: Final = 250.0

#: Obstacles checked between two signs of life; one takes some 50 microseconds.
shapes_per_pause: Final = 200

#: What the site finds wrong, in the words of the protocol. The site's own word is in the facts.
_CODES: Final[Mapping[str, str]] = {
    "crossing_polygon": "bad_geometry",
    "too_few_vertices": "bad_geometry",
    "not_finite": "bad_geometry",
    "bad_cells": "bad_geometry",
    "bad_radius": "bad_geometry",
    "bad_hole": "bad_geometry",
    "bad_size": "bad_geometry",
    "bad_scan": "bad_geometry",
    "bad_track": "bad_geometry",
    "outside_limits": "outside_limits",
    "too_large": "too_large",
    "unknown_layer": "unknown_layer",
    "outlines_only": "conflict",
    "layer_mismatch": "conflict",
}


class SiteKeeper:
    """Owns the model; see `bywayd.crew.skills.SiteKeeping`."""

    def __init__(self, model: SiteModel) -> None:
        self._model = model
        #: Ids in each layer.
        self._ids: dict[str, set[str]] = {}
        self._watch = Watch()

    def remember(self, snapshot: Snapshot) -> None:
        """Take note of what is in a snapshot that the model was recovered from."""
        self._ids = {layer: set() for layer in snapshot.layers()}
        for layer, obstacle_id, _ in snapshot.obstacles():
            self._ids[layer].add(base_id(obstacle_id))
        for layer, track_id, _ in snapshot.tracks():
            self._ids[layer].add(track_id)

    # -- changes ----------------------------------------------------------------------------

    def apply(self, change: Mapping[str, Any]) -> Iterator[None]:
        """Make one change whole, or raise Refused and make nothing of it."""
        try:
            yield from self._apply(change)
        except SiteError as fault:
            facts = {"layer": change["layer"], "problem": fault.code, **fault.facts}
            raise Refused(_CODES[fault.code], fault.text, facts) from fault
        except BywayError as fault:
            raise Refused(
                fault.code, fault.text, {"layer": change["layer"], **fault.facts}
            ) from fault

    def _apply(self, change: Mapping[str, Any]) -> Iterator[None]:
        what, layer = change["what"], change["layer"]
        # All checks come before the first change: it is made whole or not at all.
        shapes: dict[str, Shape] = {}
        moving: dict[str, Track] = {}
        if what == "track":
            moving = dict(self._tracks(change))
        if what in ("put", "replace"):
            for obstacle_id, shape in self._shapes(change):
                shapes[obstacle_id] = shape
                if len(shapes) % shapes_per_pause == 0:
                    yield
        self._model.declare(layer, LayerSettings(**change["settings"]))
        ids = self._ids.setdefault(layer, set())
        if what == "replace":
            self._model.clear(layer)
            ids.clear()
        for obstacle_id, shape in shapes.items():
            self._model.put(layer, obstacle_id, shape)
            ids.add(obstacle_id)
        if moving:
            self._model.track_all(layer, moving)
            ids.update(moving)
        for obstacle_id in change["ids"]:
            self._model.drop(layer, obstacle_id)
            ids.discard(obstacle_id)
        if what == "patch":
            self._patch(layer, messages.Patch(layer=layer, **_fields(change)), change["packed"])
        elif what == "scan":
            self._scan(layer, messages.Scan(layer=layer, **_fields(change)), change)

    def _shapes(self, change: Mapping[str, Any]) -> Iterator[tuple[str, Shape]]:
        model = messages.Put if change["what"] == "put" else messages.ReplaceLayer
        message = model(layer=change["layer"], **_fields(change))
        found = obstacles.unpack_shapes(message, change["packed"])
        ox, oy = self._model.settings.origin_m
        for obstacle_id, ring in found.polygons.items():
            holes = [hole - (ox, oy) for hole in found.holes.get(obstacle_id, ())]
            yield self._shape(obstacle_id, partial(PolygonShape, ring - (ox, oy), holes))
        for obstacle_id, (x_m, y_m, radius_m) in found.discs.items():
            yield self._shape(obstacle_id, partial(DiscShape, x_m - ox, y_m - oy, radius_m))
        for obstacle_id, (x_m, y_m, *rest) in found.boxes.items():
            yield self._shape(obstacle_id, partial(box_shape, x_m - ox, y_m - oy, *rest))

    def _tracks(self, change: Mapping[str, Any]) -> Iterator[tuple[str, Track]]:
        message = messages.Track(layer=change["layer"], **_fields(change))
        ox, oy = self._model.settings.origin_m
        for track_id, told in tracks.unpack_tracks(message, change["packed"]).items():
            x_m, y_m, heading_rad = told.pose
            try:
                shape: Shape
                if told.radius_m is None:
                    shape = PolygonShape(np.asarray(told.outline_m))
                else:
                    shape = DiscShape(0.0, 0.0, told.radius_m)
                track = Track(
                    shape,
                    (x_m - ox, y_m - oy, heading_rad),
                    (told.velocity_mps[0], told.velocity_mps[1]),
                    told.turn_rate_radps,
                    told.uncertainty_m,
                    told.growth_mps,
                    change["as_of_s"],
                )
            except SiteError as fault:
                text = f"{track_id}: {fault.text}"
                raise SiteError(fault.code, text, id=track_id, **fault.facts) from fault
            yield track_id, track

    def _shape(self, obstacle_id: str, make: Callable[[], Shape]) -> tuple[str, Shape]:
        """Return a shape that the site will take. Raises SiteError, with the id in it."""
        try:
            shape = make()
            self._check_inside(shape)
        except SiteError as fault:
            text = f"{obstacle_id}: {fault.text}"
            raise SiteError(fault.code, text, id=obstacle_id, **fault.facts) from fault
        return obstacle_id, shape

    def _check_inside(self, shape: Shape) -> None:
        """Raise SiteError unless some of the shape lies within the limits of the site."""
        x0, y0, x1, y1 = shape.box_m
        a0, b0, a1, b1 = self._model.settings.limits_m
        if x1 < a0 or x0 > a1 or y1 < b0 or y0 > b1:
            ox, oy = self._model.settings.origin_m
            raise SiteError(
                "outside_limits",
                "lies outside the limits of the site",
                box_m=[x0 + ox, y0 + oy, x1 + ox, y1 + oy],
                limits_m=[a0 + ox, b0 + oy, a1 + ox, b1 + oy],
            )

    def _patch(self, layer: str, message: messages.Patch, packed: bytes) -> None:
        cells = read(message.columns["cells"], packed)
        x_m, y_m = message.corner_m
        ox, oy = self._model.settings.origin_m
        corner_m = (x_m - ox, y_m - oy)
        self._model.patch(layer, corner_m, message.cell_m, cells, message.heading_rad)

    def _scan(self, layer: str, message: messages.Scan, change: Mapping[str, Any]) -> None:
        bearings_rad, ranges_m = scans.unpack_scan(message, change["packed"])
        x_m, y_m, heading_rad = message.origin
        ox, oy = self._model.settings.origin_m
        self._model.scan(
            layer,
            (x_m - ox, y_m - oy, heading_rad),
            bearings_rad,
            ranges_m,
            message.range_m_max,
            range_m_min=message.range_m_min,
            at_s=change["as_of_s"],
        )

    # -- the rest ---------------------------------------------------------------------------

    def carry(self, at_s: float) -> None:
        self._model.carry(at_s)

    def next_carry_s(self, at_s: float) -> float | None:
        return self._model.next_carry_s(at_s)

    def publish(self) -> Published:
        before = self._model.revision
        snapshot = self._model.publish()
        if snapshot.revision != before:
            self._watch.changed(self._model.changed_m)
        return Published(snapshot.revision, snapshot.handle)

    def release_before(self, revision: int) -> None:
        self._model.release_before(revision)

    def obstacles(self) -> dict[str, int]:
        return {layer: len(ids) for layer, ids in self._ids.items()}

    def tracks(self) -> dict[str, int]:
        counts: dict[str, int] = {}
        for layer, _, _ in self._model.tracks():
            counts[layer] = counts.get(layer, 0) + 1
        return counts

    def watch(self, order: Mapping[str, Any]) -> None:
        self._watch.add(order)

    def move(self, guard: int, progress_m: float) -> None:
        self._watch.move(guard, progress_m)

    def unwatch(self, guard: int) -> None:
        self._watch.drop(guard)

    def look(self) -> Iterator[tuple[int, dict[str, Any] | None]]:
        yield from self._watch.look(self._model.publish())

    def describe(self, question: Mapping[str, Any], at_s: float) -> tuple[dict[str, Any], bytes]:
        return describe(self._model.publish(), question, at_s, self._watch)


def _fields(change: Mapping[str, Any]) -> dict[str, Any]:
    return {name: value for name, value in change["message"].items() if name != "layer"}


def new_site(settings: Mapping[str, Any], memory: mmap, grow: Callable[[int], None]) -> SiteKeeper:
    """Return an empty site in this memory, with the layers of the settings declared."""
    model = SiteModel(site_settings(settings["site"]), Memory.over(memory, grow))
    keeper = SiteKeeper(model)
    for name, layer in settings["layers"].items():
        model.declare(name, LayerSettings(**layer))
        keeper._ids[name] = set()
    return keeper


def recover_site(
    settings: Mapping[str, Any],
    memory: mmap,
    grow: Callable[[int], None],
    handle: Mapping[str, Any],
    in_use: list[Mapping[str, Any]],
) -> SiteKeeper:
    """Return the site of a snapshot that a surveyor published before it died."""
    shared = Memory.over(memory, grow)
    keeper = SiteKeeper(SiteModel.recover(shared, dict(handle), [dict(each) for each in in_use]))
    keeper.remember(Snapshot.attach(shared, dict(handle)))
    return keeper


def site_settings(told: Mapping[str, Any]) -> SiteSettings:
    """Return the settings of the model for those of the file, in the site's own frame."""
    ox, oy = (float(value) for value in told["origin_m"])
    if told["limits_m"] is None:
        reach = limits_m_if_none
        limits_m = (-reach, -reach, reach, reach)
    else:
        x0, y0, x1, y1 = told["limits_m"]
        limits_m = (x0 - ox, y0 - oy, x1 - ox, y1 - oy)
    return SiteSettings(
        limits_m,
        float(told["cell_m"]),
        (ox, oy),
        sweep_s=float(told["sweep_s"]),
        carry_every_s=float(told["carry_every_s"]),
    )
