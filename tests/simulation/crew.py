"""
The crew of the simulated world: workers that find routes, and a surveyor with a tiny site.

The site of this world is a dictionary of obstacles by layer, each known by the token of the
change that put it, so that it can be seen what has become visible, and in which order.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from tests.simulation.checkers import promise
from tests.simulation.times import MS, SECOND

from byway import frames, messages, obstacles
from bywayd.core import effects, events

if TYPE_CHECKING:
    from tests.simulation.world import World


@dataclass
class Worker:
    number: int
    alive: bool = True
    hung: bool = False
    job: effects.Job | None = None
    best: float = float("inf")
    steered: bool = False
    #: There is no route, and the worker will not be able to prove it.
    hopeless: bool = False


@dataclass
class Model:
    """What the site is: obstacles by layer and id, each with its token and expiry."""

    revision: int = 1
    layers: dict[str, dict[str, tuple[int, int | None]]] = field(default_factory=dict)
    patches: dict[str, int] = field(default_factory=dict)
    #: The last number of each source that has been applied, and all that are not acknowledged.
    applied: dict[str, int] = field(default_factory=dict)
    seen: dict[str, set[int]] = field(default_factory=dict)

    def copy(self) -> Model:
        """Return one that does not change with this one."""
        return Model(
            self.revision,
            {name: dict(layer) for name, layer in self.layers.items()},
            dict(self.patches),
            dict(self.applied),
            {name: set(numbers) for name, numbers in self.seen.items()},
        )


class Crew:
    """All processes but the front."""

    def __init__(self, world: World) -> None:
        self.world = world
        self.workers: dict[int, Worker] = {}
        self.surveyor: int | None = None
        self.surveyor_hung = False
        self.busy_until_ns = 0
        self.model = Model()
        #: Published snapshots that have not been given back.
        self.snapshots: dict[int, Model] = {}
        #: Tokens of the batch applied last, and those that a successor may be given again.
        self.last_batch: set[int] = set()
        self.may_come_again: set[int] = set()
        self.life = 0
        #: When each change of a source first and last reached the front: (epoch, source, number).
        self.arrived: dict[tuple[str, str, int], tuple[int, int]] = {}

    # -- all of them ----------------------------------------------------------------------------

    def all_gone(self) -> None:
        """The daemon is killed, and its children die with it."""
        self.life += 1
        self.workers.clear()
        self.surveyor = None
        self.model = Model()
        self.snapshots = {}
        self.arrived.clear()

    def say(self, delay_ns: float, event: events.Event) -> None:
        """Say something to the front, unless dead or another life by then."""
        self.world.at(delay_ns, self._say, self.life, event)

    def _say(self, life: int, event: events.Event) -> None:
        if life != self.life:
            return
        worker = getattr(event, "worker", None)
        if worker is not None and worker not in self.workers:
            return  # reported lost: its channel is closed
        surveyor = getattr(event, "surveyor", None)
        if surveyor is not None and surveyor != self.surveyor:
            return
        if isinstance(event, events.WorkerLost):
            del self.workers[event.worker]
        if isinstance(event, events.SurveyorLost):
            self.surveyor = None
        self.world.hand_in(event)

    def carry_out(self, effect: effects.Effect) -> None:
        """Do what the front wants."""
        rng = self.world.rng
        match effect:
            case effects.SpawnWorker():
                self._spawn_worker(effect.worker)
            case effects.KillWorker():
                self.world.at(rng.uniform(0, 2) * MS, self._worker_dies, self.life, effect.worker)
            case effects.PingWorker():
                self._worker_hears(effect.worker, events.WorkerAlive(effect.worker))
            case effects.StartJob():
                self._begin(effect.worker, effect.job)
            case effects.SteerJob():
                self._steer(effect)
            case effects.Recheck():
                self._recheck(effect)
            case effects.SpawnSurveyor():
                self._spawn_surveyor(effect)
            case effects.KillSurveyor():
                delay = rng.uniform(0, 2) * MS
                self.world.at(delay, self._surveyor_dies, self.life, effect.surveyor)
            case effects.PingSurveyor():
                if effect.surveyor == self.surveyor and not self.surveyor_hung:
                    self.say(rng.uniform(0.1, 1) * MS, events.SurveyorAlive(effect.surveyor))
            case effects.ApplyChanges():
                self._survey(effect)
            case effects.ReleaseBefore():
                self._release(effect)
            case effects.DescribeSite():
                self._describe(effect)
            case _:
                raise AssertionError(effect)

    # -- workers --------------------------------------------------------------------------------

    def _spawn_worker(self, number: int) -> None:
        world = self.world
        promise(number not in self.workers, "a number is used once", number)
        worker = self.workers[number] = Worker(number)
        if world.chance("worker_stillborn"):
            worker.alive = False
            self.say(world.rng.uniform(1, 50) * MS, events.WorkerLost(number, "stillborn"))
            return
        if world.chance("slow_start"):
            self.say(world.rng.uniform(10, 40) * MS, events.WorkerAlive(number))
            self.say(world.rng.uniform(1000, 2002) * MS, events.WorkerReady(number))
        else:
            self.say(world.rng.uniform(10, 40) * MS, events.WorkerReady(number))

    def _worker_hears(self, number: int, answer: events.Event) -> None:
        worker = self.workers.get(number)
        if worker is not None and worker.alive and not worker.hung:
            self.say(self.world.rng.uniform(0.05, 1) * MS, answer)

    def _worker_dies(self, life: int, number: int) -> None:
        worker = self.workers.get(number)
        if life != self.life or worker is None or not worker.alive:
            return
        worker.alive = False
        self.world.checkers.worker_ends(number)
        self.say(self.world.rng.uniform(0.05, 3) * MS, events.WorkerLost(number, "died"))

    def _begin(self, number: int, job: effects.Job) -> None:
        world, rng = self.world, self.world.rng
        worker = self.workers.get(number)
        if worker is None or not worker.alive:
            return  # its loss is on the way
        self._reads(number, job)
        worker.job, worker.best, worker.steered = job, float("inf"), False
        worker.hopeless = rng.random() < 0.1
        world.at(rng.uniform(0.02, 0.5) * MS, self._at_work, self.life, number, job, 0)
        if world.chance("worker_dies"):
            left_ns = max(1, job.deadline.ns - world.now_ns)
            world.at(rng.uniform(0, 1.1) * left_ns, self._worker_dies, self.life, number)
        if world.chance("worker_hangs"):
            worker.hung = True

    def _reads(self, number: int, job: effects.Job) -> None:
        promise(
            job.revision in self.snapshots, "a job reads a snapshot that is there", job.revision
        )
        self.world.checkers.begins(number, job)

    def _at_work(self, life: int, number: int, job: effects.Job, turn: int) -> None:
        """One turn of a worker at its job: look around, find something, or end."""
        world, rng = self.world, self.world.rng
        worker = self.workers.get(number)
        if life != self.life or worker is None or worker.job is not job or worker.hung:
            return
        if not worker.alive:
            return
        if turn == 0 or rng.random() < 0.2:
            self.say(0, events.WorkerAlive(number))
        if world.chance("worker_raves"):
            self._rave(number, job)
        left_ns = job.deadline.ns - world.now_ns
        late_ns = 40 * MS if turn and world.chance("worker_late") else 0
        satisfied = worker.best < float("inf") and rng.random() < 0.1
        if worker.steered and rng.random() < 0.3:
            self._find(worker, job)  # it was nearly there
        if worker.steered or satisfied or left_ns <= 3 * MS:
            world.at(late_ns, self._end, life, number, job)
            return
        if rng.random() < (0.5 if worker.best < float("inf") else 0.35):
            self._find(worker, job)
        step_ns = min(left_ns - 2.9 * MS, rng.expovariate(1 / 4) * MS + 0.1 * MS, 90 * MS)
        world.at(max(0.05 * MS, step_ns), self._at_work, life, number, job, turn + 1)

    def _rave(self, number: int, job: effects.Job) -> None:
        nothing = events.Outcome("route", float("nan"), b"")
        none = events.Outcome("not_found", float("inf"), b"")
        self.say(
            0,
            self.world.rng.choice(
                [
                    events.WorkerDone(number, job.job + 1000, nothing),
                    events.WorkerDone(number, job.job, nothing),
                    events.WorkerBetter(number, job.job, nothing),
                    events.WorkerBetter(number, job.job, none),
                    events.WorkerBetter(number, job.job + 1000, none),
                    events.WorkerChecked(number, job.job, True),
                    events.WorkerFailed(number, job.job + 1000, "odd", "raving", {}),
                    events.WorkerReady(number),
                ]
            ),
        )

    def _find(self, worker: Worker, job: effects.Job) -> None:
        rng = self.world.rng
        if worker.hopeless:
            return
        cost = 100.0 * rng.random() + 1.0 if worker.best == float("inf") else worker.best * 0.9
        worker.best = cost
        if self.world.chance("worker_boasts"):
            cost *= 1.5
        self.say(0, events.WorkerBetter(worker.number, job.job, self._outcome(job, cost)))

    def _outcome(self, job: effects.Job, cost: float) -> events.Outcome:
        body = f"replan{int(job.goal[0])}|{cost!r}|{job.job}|{self.life}".encode()
        self.world.checkers.found(body, cost, job.revision)
        return events.Outcome("route", cost, body, b"columns", path=job.job)

    def _end(self, life: int, number: int, job: effects.Job) -> None:
        world, rng = self.world, self.world.rng
        worker = self.workers.get(number)
        if life != self.life or worker is None or worker.job is not job or not worker.alive:
            return
        if worker.hung:
            return
        worker.job = None
        world.checkers.ends(number, job.job)
        if world.chance("worker_fails"):
            code = rng.choice(["bad_value", "internal", "strange"])
            self.say(0, events.WorkerFailed(number, job.job, code, "it fails", {}))
            return
        if worker.best < float("inf"):
            outcome = self._outcome(job, worker.best)
        else:
            kind = rng.choice(["not_found", "not_found", "no_route", "start_blocked"])
            body = f"replan{int(job.goal[0])}|none|{kind}".encode()
            outcome = events.Outcome(kind, float("inf"), body)  # type: ignore[arg-type]
        self.say(0, events.WorkerDone(number, job.job, outcome))

    def _steer(self, effect: effects.SteerJob) -> None:
        worker = self.workers.get(effect.worker)
        if worker is None or worker.job is None or worker.job.job != effect.job:
            return
        worker.steered = True
        delay = self.world.rng.uniform(0.1, 2.5) * MS
        self.world.at(delay, self._at_work, self.life, effect.worker, worker.job, 1)

    def _recheck(self, effect: effects.Recheck) -> None:
        world, rng = self.world, self.world.rng
        number, job, outcome = effect.worker, effect.job, effect.outcome
        worker = self.workers.get(number)
        if worker is None or not worker.alive:
            return
        promise(outcome.path is not None, "a route comes back with its path")
        self._reads(number, job)
        good = not world.chance("blocked")
        if good:
            world.checkers.verified.add((outcome.body, job.revision))
        if world.chance("worker_hangs"):
            worker.hung = True
        if world.chance("worker_dies"):
            world.at(rng.uniform(0, 1) * MS, self._worker_dies, self.life, number)
        delay = rng.uniform(0.1, 1.5) * MS
        if world.chance("worker_fails"):
            answer: events.Event = events.WorkerFailed(number, job.job, "internal", "fails", {})
        else:
            answer = events.WorkerChecked(number, job.job, good, "" if good else "blocked")
        world.at(delay, self._checked, self.life, number, job, answer)

    def _checked(self, life: int, number: int, job: effects.Job, answer: events.Event) -> None:
        worker = self.workers.get(number)
        if life == self.life and worker is not None and worker.alive and not worker.hung:
            self.world.checkers.ends(number, job.job)
            self.say(0, answer)

    # -- the surveyor ---------------------------------------------------------------------------

    def _spawn_surveyor(self, effect: effects.SpawnSurveyor) -> None:
        world, rng = self.world, self.world.rng
        promise(self.surveyor is None, "one surveyor at a time", effect.surveyor)
        self.surveyor, self.surveyor_hung = effect.surveyor, False
        self.busy_until_ns = world.now_ns
        if effect.revision is None:
            self.model = Model(layers={"fixed": {}, "outlines": {}})
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
            self.say(rng.uniform(1, 50) * MS, events.SurveyorLost(number, "stillborn"))
            return
        revision = self.model.revision
        if effect.revision is not None and world.chance("surveyor_raves"):
            revision -= 1
        ready = events.SurveyorReady(number, revision, {"revision": revision})
        self.say(rng.uniform(5, 30) * MS, ready)

    def _surveyor_dies(self, life: int, number: int) -> None:
        if life == self.life and number == self.surveyor:
            self.surveyor_hung = True  # nothing more is done or said
            lost = events.SurveyorLost(number, "died")
            self.say(self.world.rng.uniform(0.05, 3) * MS, lost)

    def _survey(self, effect: effects.ApplyChanges) -> None:
        world, rng = self.world, self.world.rng
        promise(effect.changes != (), "a batch has changes")
        if effect.surveyor != self.surveyor:
            return
        if world.chance("surveyor_hangs"):
            self.surveyor_hung = True
        if world.chance("surveyor_dies") and rng.random() < 0.5:
            delay = rng.uniform(0, 1) * MS
            world.at(delay, self._surveyor_dies, self.life, effect.surveyor)
        took_ns = rng.uniform(0.1, 2.0) * MS
        world.at(took_ns, self._apply, self.life, effect)

    def _apply(self, life: int, effect: effects.ApplyChanges) -> None:
        world = self.world
        if life != self.life or effect.surveyor != self.surveyor or self.surveyor_hung:
            return
        before = self.model.copy()
        refusals = []
        for index, change in enumerate(effect.changes):
            if self._token(change) is not None and world.chance("refuse"):
                refusals.append(events.Refusal(index, "bad_geometry", "crosses itself", {}))
            else:
                self._apply_one(change)
        self.last_batch = {token for change in effect.changes if (token := self._token(change))}
        self.may_come_again = set()
        if (self.model.layers, self.model.patches) != (before.layers, before.patches):
            self.model.revision += 1
        self.snapshots[self.model.revision] = self.model.copy()
        if world.chance("surveyor_dies"):  # it has published, and nobody will know
            self._surveyor_dies(life, effect.surveyor)
            return
        revision = self.model.revision
        batch = effect.batch
        if world.chance("surveyor_raves"):
            revision, batch = world.rng.choice([(revision - 1000, batch), (revision, batch + 99)])
        counts = {name: len(layer) for name, layer in self.model.layers.items()}
        ready = events.SnapshotReady(
            effect.surveyor, batch, revision, {"revision": revision}, tuple(refusals), 1000, counts
        )
        self.say(0, ready)

    def _apply_one(self, change: effects.Change) -> None:
        world = self.world
        layer = self.model.layers.setdefault(change.layer, {})
        token = self._token(change)
        expires_at = None
        if token is not None:
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
        expires_in_s = getattr(change.message, "expires_in_s", None)
        if expires_in_s is not None:
            assert token is not None
            first, _ = self.arrived[world.sources.tokens[token]]
            expires_at = first + round(expires_in_s * SECOND)
        match change.what:
            case "put" | "replace":
                assert token is not None
                if change.what == "replace":
                    layer.clear()
                message = change.message
                assert isinstance(message, messages.Put | messages.ReplaceLayer)
                for id in obstacles.ids_of(message.columns, change.packed, message.discs):
                    layer[id] = (token, expires_at)
            case "patch":
                assert token is not None
                self.model.patches[change.layer] = token
            case "drop":
                for id in change.ids:
                    if token is None and id in layer:
                        at_ns = layer[id][1]
                        promise(
                            at_ns is not None and at_ns <= world.now_ns,
                            "nothing is dropped before it expires",
                            *(change.layer, id, layer[id], world.now_ns),
                        )
                    layer.pop(id, None)

    @staticmethod
    def _token(change: effects.Change) -> int | None:
        """Which change of a source this is; None for claims, and for what has expired."""
        if isinstance(change.message, messages.Put | messages.ReplaceLayer):
            column = change.message.columns["discs_m"]
            return round(struct.unpack_from("<d", change.packed, column.offset)[0])
        if isinstance(change.message, messages.Patch):
            return round(change.message.corner_m[0])
        for id in change.ids:
            if id.startswith("token"):
                return int(id.removeprefix("token"))
        return None

    def _release(self, effect: effects.ReleaseBefore) -> None:
        if effect.surveyor != self.surveyor:
            return
        self.world.checkers.releases(effect.revision)
        self.snapshots = {r: m for r, m in self.snapshots.items() if r >= effect.revision}

    def _describe(self, effect: effects.DescribeSite) -> None:
        world, rng = self.world, self.world.rng
        if effect.surveyor != self.surveyor or self.surveyor_hung:
            return
        if world.chance("surveyor_dies"):
            self._surveyor_dies(self.life, effect.surveyor)
            return
        ticket = effect.ticket + (99 if world.chance("surveyor_raves") else 0)
        message = messages.SiteIs(revision=self.model.revision, layers=[], columns={})
        described = events.SiteDescribed(effect.surveyor, ticket, message, b"")
        self.say(rng.uniform(0.5, 5) * MS, described)

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
                first, last = self.arrived[tokens[token]]
                if expires_at + (last - first) + 20 * MS < self.world.now_ns:
                    found.append(f"{name}/{id}")
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
        for layer in self.model.layers.values():
            for token, _ in layer.values():
                promise(tokens[token][0] == self.world.epoch, "nothing is left of earlier lives")
