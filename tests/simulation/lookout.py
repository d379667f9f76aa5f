"""The surveyor's eye on guarded routes in the simulated world."""

from __future__ import annotations

import zlib
from dataclasses import dataclass
from typing import TYPE_CHECKING

from tests.simulation import routes
from tests.simulation.guardcheck import RAVING
from tests.simulation.times import MS

from bywayd.core import effects, events
from bywayd.core.events import Block

if TYPE_CHECKING:
    from tests.simulation.surveyor import Model, Surveyor

#: One obstacle in so many is in the way of a unit.
ODDS = 12


@dataclass
class Watched:
    order: effects.WatchRoute
    progress_m: float
    #: What was said last; () before anything was.
    said: Block | tuple[()] | None = ()


class Lookout:
    """What one surveyor watches. A successor begins with nothing."""

    def __init__(self, surveyor: Surveyor) -> None:
        self.surveyor = surveyor
        self.watched: dict[int, Watched] = {}

    def carry_out(self, effect: effects.WatchRoute | effects.MoveGuard | effects.Unwatch) -> None:
        surveyor = self.surveyor
        if effect.surveyor != surveyor.number:
            return
        if isinstance(effect, effects.Unwatch):
            self.watched.pop(effect.guard, None)
            return
        if isinstance(effect, effects.WatchRoute):
            self.watched[effect.guard] = Watched(effect, effect.progress_m)
        elif effect.guard in self.watched:
            self.watched[effect.guard].progress_m = effect.progress_m
        delay = surveyor.world.rng.uniform(0.02, 0.5) * MS
        surveyor.world.at(delay, self._look, surveyor.crew.life, effect.surveyor, effect.guard)

    def _look(self, life: int, number: int, guard: int) -> None:
        surveyor = self.surveyor
        if life == surveyor.crew.life and number == surveyor.number and not surveyor.hung:
            self.look(guard)

    def look_at_all(self) -> None:
        """A snapshot has been published."""
        for guard in list(self.watched):
            self.look(guard)

    def look(self, guard: int) -> None:
        """Say what is to be seen on the site as it is, if it is another than was said last."""
        watched = self.watched.get(guard)
        surveyor = self.surveyor
        if watched is None or surveyor.number is None:
            return
        seen = truth(watched, surveyor.model)
        if seen == watched.said:
            return
        watched.said = seen
        revision = surveyor.model.revision
        if surveyor.world.chance("surveyor_raves"):
            raving = [(guard + 10_000, revision), (guard, RAVING)]
            guard, revision = surveyor.world.rng.choice(raving)
        surveyor.crew.say(0, events.GuardSeen(surveyor.number, guard, revision, seen))


def truth(watched: Watched, model: Model) -> Block | None:
    """Return what is in the way of a guarded route, by a rule that everybody can work out."""
    order = watched.order
    begin_m, end_m = routes.ends(order.columns, order.packed)
    found: Block | None = None
    for name, layer in model.layers.items():
        if name in order.left_out:
            continue
        for id, (token, _) in layer.items():
            mark = zlib.crc32(f"{order.unit}{id}{token // 3}".encode())
            if mark % ODDS:
                continue
            x_m = float(mark // ODDS % 60)
            at_m = x_m - begin_m
            ahead = watched.progress_m <= at_m <= end_m - begin_m
            if ahead and (found is None or at_m < found.at_m):
                found = Block(at_m, at_m / 2.0, x_m, 0.0, 0.0, "disc", name, id, 0.1)
    return found
