"""
The surveyor of the simulated world, and its tiny site.

The site is a dictionary of obstacles by layer, each known by the token of the change that put it,
so that it can be seen what has become visible, and in which order.
"""

from __future__ import annotations

import random
import struct
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from tests.simulation.checkers import promise
from tests.simulation.lookout import Lookout, truth
from tests.simulation.times import MS, SECOND

from byway import frames, messages, obstacles
from bywayd.core import effects, events

#: What moves is carried forward within this time, what was scanned decays within that.
CARRY_S = 0.04
DECAY_S = 0.5

if TYPE_CHECKING:
    from tests.simulation.crew import Crew
    from tests.simulation.world import World


@dataclass
class Model:
    """What the site is: obstacles by layer and id, each with its token and expiry."""

    revision: int = 1
    layers: dict[str, dict[str, tuple[int, int | None]]] = field(default_factory=dict)
    patches: dict[str, int] = field(default_factory=dict)
    scans: dict[str, int] = field(default_factory=dict)
    #: Which obstacles move, and how often they were carried forward.
    moving: dict[str, set[str]] = field(default_factory=dict)
    carries: int = 0
    #: The last number of each source that has been applied, and all that are not acknowledged.
    applied: dict[str, int] = field(default_factory=dict)
    seen: dict[str, set[int]] = field(default_factory=dict)

    def copy(self) -> Model:
        """Return one that does not change with this one."""
        return Model(
            self.revision,
            {name: dict(layer) for name, layer in self.layers.items()},
            dict(self.patches),
            dict(self.scans),
            {name: set(ids) for name, ids in self.moving.items()},
            self.carries,
            dict(self.applied),
            {name: set(numbers) for name, numbers in self.seen.items()},
        )

    @property
    def looks(self) -> tuple[object, ...]:
        """What makes one revision another than the last."""
        return self.layers, self.patches, self.scans, self.carries

    def next_in_s(self, rng: random.Random) -> float | None:
        """When something has to be carried forward: at once, soon, later, or never."""
        if any(self.moving.values()):
            return rng.choice([0.0, *[rng.uniform(0.001, CARRY_S)] * 9])
        return rng.choice([None, rng.uniform(0.0, DECAY_S)]) if self.scans else None


class Surveyor:
    """One surveyor after the other, and the memory that they leave to each other."""

    def __init__(self, world: World, crew: Crew) -> None:
        self.world = world
        self.crew = crew
        self.all_gone()

    def all_gone(self) -> None:
        """The daemon is killed, and its memory goes with it."""
        #: The one there is now, if any.
        self.number: int | None = None
        self.hung = False
        self.model = Model()
        #: Published snapshots that have not been given back.
        self.snapshots: dict[int, Model] = {}
        #: Tokens of the batch applied last, and those that a successor may be given again.
        self.last_batch: set[int] = set()
        self.may_come_again: set[int] = set()
        #: When each change of a source first and last reached the front.
        self.arrived: dict[tuple[str, str, int], tuple[int, int]] = {}
        #: What has been recalled and applied, by layer and id; patches with "".
        self.recalled: set[tuple[str, str]] = set()
        self.lookout = Lookout(self)
        #: The front has had it killed; what it still says does not count.
        self.is_killed = False
        #: What was last handed out, and when for the first time.
        self.order: tuple[tuple[effects.Change, ...], int] = ((), 0)
        #: What was said last, if it made sense: batch, and the layers that sources changed in it.
        self.said: tuple[int, list[str]] | None = None
        #: What each layer is.
        self.flags: dict[str, effects.LayerFlags] = dict(self.world.settings.layers)
        #: When the front has to hand out a batch, if only an empty one.
        self.wanted_ns: int | None = None

    def carry_out(self, effect: effects.Effect) -> None:
        """Do what the front wants."""
        rng = self.world.rng
        match effect:
            case effects.SpawnSurveyor():
                self.spawn(effect)
            case effects.KillSurveyor():
                self.is_killed, self.wanted_ns = True, None
                delay = rng.uniform(0, 2) * MS
                self.world.at(delay, self.die, self.crew.life, effect.surveyor)
            case effects.PingSurveyor():
                if effect.surveyor == self.number and not self.hung:
                    self.crew.say(rng.uniform(0.1, 1) * MS, events.SurveyorAlive(effect.surveyor))
            case effects.ApplyChanges():
                self.survey(effect)
            case effects.ReleaseBefore():
                self.release(effect)
            case effects.DescribeSite():
                self.describe(effect)
            case effects.WatchRoute() | effects.MoveGuard() | effects.Unwatch():
                self.lookout.carry_out(effect)
            case _:
                raise AssertionError(effect)

    def spawn(self, effect: effects.SpawnSurveyor) -> None:
        world, rng = self.world, self.world.rng
        promise(self.number is None, "one surveyor at a time", effect.surveyor)
        self.number, self.hung, self.is_killed = effect.surveyor, False, False
        self.lookout = Lookout(self)
        self.busy_until_ns = world.now_ns
        if effect.revision is None:
            self.model = Model(layers={name: {} for name in world.settings.layers})
            self.snapshots[self.model.revision] = self.model.copy()
        else:
            world.checkers.successor(effect)
            kept = {handle["revision"] for handle in effect.in_use}  # type: ignore[index]
            self.snapshots = {r: m for r, m in self.snapshots.items() if r in kept}
            self.model = self.snapshots[effect.revision].copy()
            # A batch that left the revision as it was may be in that snapshot, and unanswered.
            self.may_come_again = self.last_batch
        number = effect.surveyor
        if world.chance("worker_stillborn"):
            self.crew.say(rng.uniform(1, 50) * MS, events.SurveyorLost(number, "stillborn"))
            return
        revision = self.model.revision
        if effect.revision is not None and world.chance("surveyor_raves"):
            revision -= 1
        ready = events.SurveyorReady(
            *(number, revision, {"revision": revision}), next_in_s=self.model.next_in_s(rng)
        )
        self.crew.say(rng.uniform(5, 30) * MS, ready)

    def die(self, life: int, number: int) -> None:
        if life == self.crew.life and number == self.number:
            self.hung = True  # nothing more is done or said
            lost = events.SurveyorLost(number, "died")
            self.crew.say(self.world.rng.uniform(0.05, 3) * MS, lost)

    def survey(self, effect: effects.ApplyChanges) -> None:
        world, rng = self.world, self.world.rng
        promise(effect.at.ns == world.now_ns, "what moves is carried to where it is now")
        is_due = self.wanted_ns is not None and world.now_ns >= self.wanted_ns
        promise(effect.changes != () or is_due, "a batch is empty when one is wanted only")
        self.wanted_ns = None
        if not effect.changes or effect.changes != self.order[0]:
            self.order = (effect.changes, world.now_ns)
        if effect.surveyor != self.number:
            return
        if world.chance("surveyor_hangs"):
            self.hung = True
        if world.chance("surveyor_dies") and rng.random() < 0.5:
            delay = rng.uniform(0, 1) * MS
            world.at(delay, self.die, self.crew.life, effect.surveyor)
        took_ns = rng.uniform(0.1, 2.0) * MS
        world.at(took_ns, self._apply, self.crew.life, effect, self.order[1])

    def _apply(self, life: int, effect: effects.ApplyChanges, handed_out_ns: int) -> None:
        world = self.world
        if life != self.crew.life or effect.surveyor != self.number or self.hung:
            return
        before = self.model.copy()
        refusals = []
        refused: list[effects.Change] = []
        changed = []
        for index, change in enumerate(effect.changes):
            token = self.token_of(change)
            is_new = token is not None and not self._is_recalled(change, token)
            if is_new and world.chance("refuse"):
                refusals.append(events.Refusal(index, "bad_geometry", "crosses itself", {}))
                refused.append(change)
            else:
                self._apply_one(change)
                changed += [change.layer] if is_new else []
        self._check_expired(handed_out_ns, effect.changes, refused)
        if any(self.model.moving.values()) and world.rng.random() < 0.5:
            self.model.carries += 1
        self.last_batch = {token for change in effect.changes if (token := self.token_of(change))}
        self.may_come_again = set()
        if self.model.looks != before.looks:
            self.model.revision += 1
        self.snapshots[self.model.revision] = self.model.copy()
        if world.chance("surveyor_dies"):  # it has published, and nobody will know
            self.die(life, effect.surveyor)
            return
        revision = self.model.revision
        batch = effect.batch
        self.said = (batch, changed)
        if world.chance("surveyor_raves"):
            revision, batch = world.rng.choice([(0, batch), (revision, batch + 99)])
            self.said = None
        counts = {name: len(layer) for name, layer in self.model.layers.items()}
        ready = events.SnapshotReady(
            *(effect.surveyor, batch, revision, {"revision": revision}, tuple(refusals), 1000),
            counts,
            {name: len(ids) for name, ids in self.model.moving.items()},
            self.model.next_in_s(world.rng),
        )
        self.crew.say(0, ready)
        self.lookout.look_at_all()

    def _apply_one(self, change: effects.Change) -> None:
        world = self.world
        layer = self.model.layers.setdefault(change.layer, {})
        is_so = self.flags.setdefault(change.layer, change.settings)
        promise(change.settings == is_so, "what a layer is never changes", change.layer, is_so)
        token = self.token_of(change)
        expires_at = None
        recalled = token is not None and self._is_recalled(change, token)
        if token is not None and recalled:
            for id in self._ids_of(change) or [""]:
                self.recalled.add((change.layer, id))
        elif token is not None:
            promise(self.recall_is_visible(), "what is kept is there before sources change it")
            epoch, source, number = world.sources.tokens[token]
            last = self.model.applied.get(source, 0)
            promise(epoch == world.epoch, "no change of an earlier life is applied", token)
            promise(
                number > last or token in self.may_come_again,
                "changes are applied in order",
                *(source, number, last),
            )
            self.model.applied[source] = max(last, number)
            acknowledged = world.checkers.sources[source].acknowledged
            seen = self.model.seen.get(source, set())
            self.model.seen[source] = {n for n in seen if n > acknowledged} | {number}
        if change.as_of is not None:
            self._check_seen(change, token)
        expires_in_s = getattr(change.message, "expires_in_s", None)
        if expires_in_s is None and change.what == "track":
            expires_in_s = world.settings.track_expires_s
        if expires_in_s is not None:
            assert token is not None
            first, _ = self.arrived[world.sources.tokens[token]]
            expires_at = first + round(expires_in_s * SECOND)
        moving = self.model.moving.setdefault(change.layer, set())
        match change.what:
            case "put" | "replace" | "track":
                assert token is not None
                if change.what == "replace":
                    layer.clear()
                    moving.clear()
                    self.model.patches.pop(change.layer, None)
                    self.model.scans.pop(change.layer, None)
                for id in self._ids_of(change):
                    if recalled:
                        expires_at = world.crew.clerk.expiry(change.layer, id, token)
                    layer[id] = (token, expires_at)
                    moving.discard(id)
                if change.what == "track":
                    moving.update(self._ids_of(change))
            case "patch":
                assert token is not None
                self.model.patches[change.layer] = token
            case "scan":
                assert token is not None
                self.model.scans[change.layer] = token
            case "drop":
                moving.difference_update(change.ids)
                for id in change.ids:
                    if token is None and id in layer:
                        at_ns = layer[id][1]
                        promise(
                            at_ns is not None and at_ns <= world.now_ns,
                            "nothing is dropped before it expires",
                            *(change.layer, id, layer[id], world.now_ns),
                        )
                    layer.pop(id, None)

    def _check_seen(self, change: effects.Change, token: int | None) -> None:
        """A scan or track is where it may be, with the moment that it was seen."""
        assert token is not None
        assert isinstance(change.message, messages.Scan | messages.Track)
        takes = not change.settings.durable and not change.settings.outlines_only
        promise(takes, "what is seen goes to layers that take it", change.layer)
        first, last = self.arrived[self.world.sources.tokens[token]]
        arrived = change.as_of.ns + round(change.message.age_s * SECOND)  # type: ignore[union-attr]
        promise(first <= arrived <= last, "what was seen keeps its moment", change.message)

    def _check_expired(
        self,
        handed_out_ns: int,
        changes: tuple[effects.Change, ...],
        refused: list[effects.Change],
    ) -> None:
        """What was there, and had expired when this batch was first handed out, goes with it."""
        tokens = self.world.sources.tokens
        new = {self.token_of(change) for change in changes}
        # What is to take the place of something keeps it until that is decided.
        replaced = {change.layer for change in refused if change.what == "replace"}
        kept = {(change.layer, id) for change in refused for id in self._ids_of(change)}
        for name, layer in self.model.layers.items():
            for id, (token, expires_at) in layer.items():
                if token in new or tokens[token][0] != self.world.epoch:
                    continue
                if expires_at is None or name in replaced or (name, id) in kept:
                    continue
                first, last = self.arrived[tokens[token]]
                promise(
                    expires_at + last - first > handed_out_ns,
                    "nothing outlasts its expiry",
                    *(name, id, token, expires_at / 1e6, handed_out_ns / 1e6),
                )

    def heard(self, event: events.Event) -> None:
        """The front is about to hear something."""
        if isinstance(event, events.SurveyorLost):
            self.wanted_ns = None
        if self.is_killed or not isinstance(event, events.SurveyorReady | events.SnapshotReady):
            return
        if event.next_in_s is not None:
            self.wanted_ns = self.world.now_ns + round(event.next_in_s * SECOND)
        if isinstance(event, events.SnapshotReady) and self.said is not None:
            batch, changed = self.said
            if batch == event.batch:
                self.world.checkers.fresh.became_visible(changed, self.world.now_ns)

    def check_carried(self) -> None:
        """What moves is carried forward in time, and if nothing else happens until then as well."""
        if self.wanted_ns is None:
            return
        wake_ns = self.world.wake_ns
        promise(self.world.now_ns < self.wanted_ns, "what moves is carried forward in time")
        is_awake = wake_ns is not None and wake_ns <= self.wanted_ns
        promise(is_awake, "there is somebody awake to have it carried forward")

    def _is_recalled(self, change: effects.Change, token: int) -> bool:
        """Whether it is a change of an earlier life, which this one was told by the clerk."""
        if self.world.sources.tokens[token][0] == self.world.epoch:
            return False
        told = self.world.crew.clerk.recalled
        return all(told.get((change.layer, id)) == token for id in self._ids_of(change) or [""])

    def recall_is_visible(self) -> bool:
        """Whether the site has had all that is kept."""
        clerk = self.world.crew.clerk
        return clerk.recall_is_over and clerk.recalled.keys() <= self.recalled

    @staticmethod
    def _ids_of(change: effects.Change) -> list[str]:
        """Return the ids of obstacles that are put."""
        message = change.message
        if not isinstance(message, messages.Put | messages.ReplaceLayer | messages.Track):
            return []
        return obstacles.ids_of(message.columns, change.packed, message.discs)

    @staticmethod
    def token_of(change: effects.Change) -> int | None:
        """Which change of a source this is; None for claims, and for what has expired."""
        if isinstance(change.message, messages.Put | messages.ReplaceLayer):
            column = change.message.columns["discs_m"]
            return round(struct.unpack_from("<d", change.packed, column.offset)[0])
        if isinstance(change.message, messages.Track):
            column = change.message.columns["poses"]
            return round(struct.unpack_from("<d", change.packed, column.offset)[0])
        if isinstance(change.message, messages.Scan):
            return round(change.message.origin[0])
        if isinstance(change.message, messages.Patch):
            return round(change.message.corner_m[0])
        for id in change.ids:
            if id.startswith("token"):
                return int(id.removeprefix("token"))
        return None

    def release(self, effect: effects.ReleaseBefore) -> None:
        if effect.surveyor != self.number:
            return
        self.world.checkers.releases(effect.revision)
        self.snapshots = {r: m for r, m in self.snapshots.items() if r >= effect.revision}

    def describe(self, effect: effects.DescribeSite) -> None:
        world, rng = self.world, self.world.rng
        if effect.surveyor != self.number or self.hung:
            return
        if world.chance("surveyor_dies"):
            self.die(self.crew.life, effect.surveyor)
            return
        ticket = effect.ticket + (99 if world.chance("surveyor_raves") else 0)
        message = messages.SiteIs(revision=self.model.revision, layers=[], columns={})
        described = events.SiteDescribed(effect.surveyor, ticket, message, b"")
        self.crew.say(rng.uniform(0.5, 5) * MS, described)

    # -- what can be seen of the site -----------------------------------------------------------

    def sees(self, source: str, number: int, revision: int) -> bool:
        """Whether a change of a source is in the snapshot of this revision."""
        model = self.snapshots.get(revision)
        return model is not None and number in model.seen.get(source, ())

    def site_arrives(self, came: frames.Received) -> None:
        """A change of a source reaches the front."""
        world, header = self.world, came.header
        if header.epoch == world.epoch:
            key = (header.epoch, header.source, header.number)
            first, _ = self.arrived.get(key, (world.now_ns, 0))
            self.arrived[key] = (first, world.now_ns)

    def overdue(self) -> list[str]:
        """Return obstacles that should be gone."""
        tokens = self.world.sources.tokens
        found = []
        for name, layer in self.model.layers.items():
            for id, (token, expires_at) in layer.items():
                if expires_at is None:
                    continue
                # Nothing that was recalled has arrived in this life.
                first, last = self.arrived.get(tokens[token], (0, 0))
                if expires_at + (last - first) + 20 * MS < self.world.now_ns:
                    found.append(f"{name}/{id}")
        return found

    def unheard(self) -> list[str]:
        """Return guards whose listeners know other things than are true."""
        found = []
        for watched in self.lookout.watched.values():
            name = watched.order.name
            known = self.world.checkers.guards.known.get(name)
            told = known is not None and known.told is not None
            if told != (truth(watched, self.model) is not None):
                found.append(name)
        return found

    def check_site(self) -> None:
        """When all is quiet, the last change of every source has its effect."""
        tokens = self.world.sources.tokens
        for source in self.world.sources.sources.values():
            numbers = self.world.checkers.sources[source.name]
            promise(
                numbers.acknowledged == source.next - 1,
                "everything is acknowledged in the end",
                source.name,
            )
        for name, layer in self.model.layers.items():
            for token, _ in layer.values():
                promise(
                    tokens[token][0] == self.world.epoch or name in self.world.durable,
                    "nothing is left of earlier lives in live layers",
                )
