"""A desk with clients that guard routes, and a surveyor that looks at them."""

from __future__ import annotations

import numpy as np
from tests.daemon.core.coursetables import packed_route, straight
from tests.daemon.core.frontdesk import Desk, settings

from byway import messages
from bywayd.core import effects, events
from bywayd.core.events import Block


class GuardDesk(Desk):
    """A desk with clients that guard routes, and a surveyor that looks at them."""

    def guard(
        self,
        unit: str = "u",
        id: str = "g",
        rows: dict[str, np.ndarray] | None = None,
        **fields: object,
    ) -> list[effects.Effect]:
        columns, packed = packed_route(straight(10.0) if rows is None else rows)
        told = {"vehicle": "tug", "unit": unit, "columns": columns, **fields}
        return self.say(messages.Guard(**told), id, packed)  # type: ignore[arg-type]

    def progress(self, way_m: float, unit: str = "u", after_ms: float = 0.0, **fields: object):
        told = messages.Progress(unit=unit, progress_m=way_m, **fields)  # type: ignore[arg-type]
        self.say(told, "p", after_ms=after_ms)
        return self.reply()

    def saw(
        self,
        blocked: Block | None = None,
        guard: int = 1,
        *,
        surveyor: int = 1,
        fault: str = "",
        revision: int | None = None,
        after_ms: float = 0.0,
    ) -> list[effects.Effect]:
        revision = self.revision if revision is None else revision
        event = events.GuardSeen(surveyor, guard, revision, blocked, fault)
        return self.hand_in(event, after_ms)

    def published(self) -> list[messages.Message]:
        return [p.message for p in self.all_of(effects.Publish) if p.topic.startswith("guard.")]

    def event(self, kind: type):
        """The only event about a guard."""
        found = self.published()
        assert [type(each) for each in found] == [kind]
        return found[0]


def block(at_m: float = 6.0, id: str = "crate", **fields: object) -> Block:
    told: dict[str, object] = {
        "at_m": at_m,
        "t_s": 1.0 + at_m / 2.0,
        "x_m": at_m,
        "y_m": 0.0,
        "heading_rad": 0.0,
        "kind": "polygon",
        "layer": "stacks",
        "id": id,
        "depth_m": 0.2,
        **fields,
    }
    return Block(**told)  # type: ignore[arg-type]


def ready(**fields: object) -> GuardDesk:
    """A daemon that is up, before anybody has asked for a guard."""
    desk = GuardDesk(settings(**fields))
    desk.open()
    return desk
