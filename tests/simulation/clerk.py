"""
The clerk of the simulated world, and the disk that outlasts every life of the daemon.

The disk holds, as the site does, which change put each obstacle; what is committed is there after
any crash, what is not is gone. A commit can happen without anybody hearing of it.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from tests.simulation.checkers import promise
from tests.simulation.sources import obstacles
from tests.simulation.times import MS, SECOND

from byway import messages
from byway import obstacles as packed_obstacles
from bywayd.core import kept
from bywayd.core.effects import Change, LayerFlags
from bywayd.core.instants import Duration

if TYPE_CHECKING:
    from tests.simulation.crew import Crew
    from tests.simulation.world import World

#: Token and expiry of an obstacle.
Placed = tuple[int, int | None]

PIECE = 3


@dataclass
class Disk:
    """What is committed: by layer, its settings, obstacles by id, the last patch."""

    flags: dict[str, LayerFlags] = field(default_factory=dict)
    obstacles: dict[str, dict[str, Placed]] = field(default_factory=dict)
    patches: dict[str, int] = field(default_factory=dict)
    #: Every change of a source that was ever committed, by its token.
    committed: set[int] = field(default_factory=set)


class Clerk:
    """One clerk after the other, and their disk."""

    def __init__(self, world: World, crew: Crew) -> None:
        self.world = world
        self.crew = crew
        self.disk = Disk()

    def all_gone(self) -> None:
        """The daemon is killed; the disk stays as it is."""
        self.number: int | None = None
        self.hung = False
        self.full_until_ns = 0
        #: The front has had it killed; what it still says does not count.
        self.is_killed = False
        #: The task of the recall that was asked for last.
        self.asked = 0
        #: What this life of the daemon has been told: tokens by layer and id, patches with "".
        self.recalled: dict[tuple[str, str], int] = {}
        self.recall_is_over = not self.world.durable

    def carry_out(self, effect: kept.ClerkEffect) -> None:
        """Do what the front wants."""
        rng = self.world.rng
        if isinstance(effect, kept.SpawnClerk):
            self._spawn(effect.clerk)
        elif effect.clerk != self.number:
            return
        match effect:
            case kept.KillClerk():
                self.is_killed = True
                delay = rng.uniform(0, 2) * MS
                self.world.at(delay, self._die, self.crew.life, effect.clerk)
            case kept.PingClerk() if not self.hung:
                self.crew.say(rng.uniform(0.1, 1) * MS, kept.ClerkAlive(effect.clerk))
            case kept.RecallChanges():
                self.asked = effect.task
                delay = rng.uniform(0.5, 10) * MS
                self.world.at(delay, self._recall, self.crew.life, effect)
            case kept.KeepChanges():
                promise(self.recall_is_over, "nothing is kept before the recall is over")
                delay = rng.uniform(1, 15) * MS
                self.world.at(delay, self._commit, self.crew.life, effect)
            case _:
                pass

    def _spawn(self, number: int) -> None:
        promise(self.number is None, "one clerk at a time", number)
        self.number, self.hung, self.is_killed = number, False, False
        if self.world.chance("clerk_stillborn"):
            self.crew.say(self.world.rng.uniform(1, 50) * MS, kept.ClerkLost(number, "stillborn"))
            return
        ready = kept.ClerkReady(number, self._stock())
        self.crew.say(self.world.rng.uniform(20, 200) * MS, ready)

    def _stock(self) -> kept.Stock:
        count = sum(map(len, self.disk.obstacles.values()))
        return kept.Stock(count, len(self.disk.patches))

    def _die(self, life: int, number: int) -> None:
        if life == self.crew.life and number == self.number:
            self.hung = True  # nothing more is done or said
            delay = self.world.rng.uniform(0.05, 3) * MS
            self.crew.say(delay, kept.ClerkLost(number, "died"))

    # -- keeping --------------------------------------------------------------------------------

    def _commit(self, life: int, effect: kept.KeepChanges) -> None:
        world, rng = self.world, self.world.rng
        if life != self.crew.life or effect.clerk != self.number or self.hung:
            return
        if world.now_ns >= self.full_until_ns and world.chance("disk_full"):
            self.full_until_ns = world.now_ns + round(rng.uniform(0.1, 3) * SECOND)
        if world.now_ns < self.full_until_ns and not world.is_calm:
            self.crew.say(0, kept.ClerkHindered(effect.clerk, "there is no room"))
            world.at(500 * MS, self._commit, life, effect)
            return
        if world.chance("clerk_hangs"):
            self.hung = True
        if world.chance("clerk_dies"):
            self._die(life, effect.clerk)
        if self.hung and rng.random() < 0.5:
            return
        for keepsake in effect.keepsakes:
            self._keep(keepsake)
        if self.hung:
            return  # it is on the disk, and nobody will know
        task = effect.task + (99 if world.chance("clerk_raves") else 0)
        self.crew.say(rng.uniform(0, 2) * MS, kept.ChangesKept(effect.clerk, task, self._stock()))

    def _keep(self, keepsake: kept.Keepsake) -> None:
        change, disk = keepsake.change, self.disk
        layer = change.layer
        promise(
            change.settings.durable and layer in self.world.durable,
            "only durable layers are kept",
            layer,
        )
        disk.flags[layer] = change.settings
        held = disk.obstacles.setdefault(layer, {})
        token = self.crew.surveyor.token_of(change)
        if token is not None:
            disk.committed.add(token)
        match change.what:
            case "put" | "replace":
                assert token is not None
                if change.what == "replace":
                    held.clear()
                    disk.patches.pop(layer, None)
                at = keepsake.expires_at
                message = change.message
                assert isinstance(message, messages.Put | messages.ReplaceLayer)
                for id in packed_obstacles.ids_of(message.columns, change.packed, message.discs):
                    held[id] = (token, None if at is None else at.ns)
            case "patch":
                assert token is not None
                disk.patches[layer] = token
            case "drop":
                for id in change.ids:
                    held.pop(id, None)
            case _:
                pass

    # -- recalling ------------------------------------------------------------------------------

    def _recall(self, life: int, effect: kept.RecallChanges) -> None:
        world = self.world
        if life != self.crew.life or effect.clerk != self.number or self.hung:
            return
        promise(not self.recall_is_over, "what is kept is recalled once")
        if world.chance("clerk_dies"):
            self._die(life, effect.clerk)
            return
        everything = self._recollections()
        begin = 0 if effect.place is None else effect.place
        assert isinstance(begin, int)
        piece = everything[begin : begin + PIECE]
        end = None if begin + PIECE >= len(everything) else begin + PIECE
        if world.chance("clerk_raves"):
            self.crew.say(0, kept.Recalled(effect.clerk, effect.task + 99, tuple(piece), end))
            return
        self.crew.say(0, kept.Recalled(effect.clerk, effect.task, tuple(piece), end))

    def heard_recall(self, event: kept.Recalled) -> None:
        """What the front hears now counts as told, if it was asked for."""
        if self.is_killed or event.task != self.asked:
            return
        for recollection in event.found:
            change = recollection.change
            token = self.crew.surveyor.token_of(change)
            if token is not None:
                self.recalled[change.layer, "".join(recollection.ids)] = token
        self.recall_is_over = event.place is None

    def _recollections(self) -> list[kept.Recollection]:
        disk, now_ns = self.disk, self.world.now_ns
        found = [
            kept.Recollection(Change("claim", layer, flags)) for layer, flags in disk.flags.items()
        ]
        for layer, held in disk.obstacles.items():
            for id, (token, at_ns) in held.items():
                fields, packed = obstacles(token, [id])
                change = Change(
                    "put", layer, disk.flags[layer], messages.Put(layer=layer, **fields), packed
                )
                # Those that have expired come as well: pieces are counted, and time goes on.
                left = None if at_ns is None else Duration(max(0, at_ns - now_ns))
                found.append(kept.Recollection(change, {}, (id,), left))
        for layer, token in disk.patches.items():
            message = messages.Patch(
                layer=layer, corner_m=(float(token), 0.0), cell_m=0.1, columns={}
            )
            found.append(kept.Recollection(Change("patch", layer, disk.flags[layer], message)))
        return found

    # -- what can be seen of the disk -----------------------------------------------------------

    def expiry(self, layer: str, id: str, token: int) -> int | None:
        """Return when an obstacle expires that was recalled."""
        placed = self.disk.obstacles[layer][id]
        promise(placed[0] == token, "what is recalled is what was kept", layer, id)
        return placed[1]

    def has(self, token: int) -> bool:
        """Whether a change was committed at any time."""
        return token in self.disk.committed

    def check_disk(self) -> None:
        """When all is quiet, the disk holds what the site has in durable layers."""
        model = self.crew.surveyor.model
        for layer in self.world.durable:
            on_site = model.layers.get(layer, {})
            on_disk = self.disk.obstacles.get(layer, {})
            promise(
                {id: placed[0] for id, placed in on_site.items()}
                == {id: placed[0] for id, placed in on_disk.items()},
                "site and disk agree",
                *(layer, on_site, on_disk),
            )
            promise(
                model.patches.get(layer) == self.disk.patches.get(layer),
                "site and disk agree about cells",
                *(layer, model.patches.get(layer), self.disk.patches.get(layer)),
            )
