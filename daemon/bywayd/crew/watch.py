"""The guarded routes that the surveyor looks after."""

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from byway.answer import ROUTE_TABLE
from byway.errors import BywayError
from byway.packed import Column, read
from byway_planning.site import Snapshot
from byway_planning.watching import Blocked, WatchedRoute
from bywayd.crew.planning import vehicle
from bywayd.crew.skills import Refused


@dataclass
class _Guarded:
    """One route, whose it is, and where on it that is."""

    unit: str
    name: str
    route: WatchedRoute
    progress_m: float
    #: What the last look found; and boxes around what has changed since, None for everything.
    blocked: dict[str, Any] | None = None
    changed: list[npt.NDArray[np.float64]] | None = None
    is_looked_at: bool = False


class Watch:
    """Routes by the numbers of their guards."""

    def __init__(self) -> None:
        self._guarded: dict[int, _Guarded] = {}

    def add(self, order: Mapping[str, Any]) -> None:
        """
        Take up a route, or take another in place of the one of this number.

        Raises:
            Refused: If it is no route that could be driven.
        """
        columns = {name: Column(**told) for name, told in order["columns"].items()}
        try:
            table = np.zeros(columns["t_s"].shape[0], ROUTE_TABLE)
            for name in ROUTE_TABLE.names or ():
                table[name] = read(columns[name], order["packed"])
            route = WatchedRoute(
                vehicle(order["vehicle"]),
                table,
                clearance_m=order["clearance_m"],
                left_out=frozenset(order["left_out"]),
            )
        except (BywayError, ValueError, KeyError) as fault:
            raise Refused("bad_value", f"the route cannot be watched: {fault}") from fault
        progress_m = float(order["progress_m"])
        self._guarded[order["guard"]] = _Guarded(order["unit"], order["name"], route, progress_m)

    def move(self, guard: int, progress_m: float) -> None:
        """A vehicle is somewhere else; of a guard that is not known it is passed over."""
        guarded = self._guarded.get(guard)
        if guarded is not None:
            guarded.progress_m = progress_m
            guarded.is_looked_at = False

    def drop(self, guard: int) -> None:
        """Look after a route no more."""
        self._guarded.pop(guard, None)

    def changed(self, boxes_m: npt.NDArray[np.float64]) -> None:
        """There is a newer snapshot; this is what differs."""
        for guarded in self._guarded.values():
            guarded.is_looked_at = False
            if guarded.changed is not None:
                guarded.changed.append(boxes_m)

    def look(self, snapshot: Snapshot) -> Iterator[tuple[int, dict[str, Any] | None]]:
        """Look at every route that something may have become of; yield what was found."""
        for guard, guarded in list(self._guarded.items()):
            if guarded.is_looked_at:
                continue
            changed = None if guarded.changed is None else np.concatenate([_none, *guarded.changed])
            found = guarded.route.check(snapshot, guarded.progress_m, changed)
            guarded.changed, guarded.is_looked_at = [], True
            guarded.blocked = None if found is None else _told(found)
            yield guard, guarded.blocked

    def told(self) -> Iterator[tuple[str, float, dict[str, Any] | None, npt.NDArray[np.float64]]]:
        """Yield unit, progress, where it is blocked, and the poses (n, 3) of each route."""
        for guarded in self._guarded.values():
            yield guarded.unit, guarded.progress_m, guarded.blocked, guarded.route.poses()


_none = np.empty((0, 4))


def _told(found: Blocked) -> dict[str, Any]:
    return {
        "at_m": found.at_m,
        "t_s": found.t_s,
        "x_m": found.x_m,
        "y_m": found.y_m,
        "heading_rad": found.heading_rad,
        "kind": found.kind,
        "layer": found.layer,
        "id": found.obstacle,
        "depth_m": found.depth_m,
    }
