"""The crew of the simulated world: workers that find routes, and the surveyor."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from tests.simulation import routes
from tests.simulation.checkers import promise
from tests.simulation.clerk import Clerk
from tests.simulation.surveyor import Surveyor
from tests.simulation.times import MS

from bywayd.core import effects, events, kept

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


class Crew:
    """All processes but the front."""

    def __init__(self, world: World) -> None:
        self.world = world
        self.workers: dict[int, Worker] = {}
        #: Which life of the daemon this is; what was said in an earlier one is not heard.
        self.life = 0
        self.surveyor = Surveyor(world, self)
        self.clerk = Clerk(world, self)

    # -- all of them ----------------------------------------------------------------------------

    def all_gone(self) -> None:
        """The daemon is killed, and its children die with it."""
        self.life += 1
        self.workers.clear()
        self.surveyor.all_gone()
        self.clerk.all_gone()

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
        if surveyor is not None and surveyor != self.surveyor.number:
            return
        clerk = getattr(event, "clerk", None)
        if clerk is not None and clerk != self.clerk.number:
            return
        if isinstance(event, kept.ClerkLost):
            self.clerk.number = None
        if isinstance(event, kept.Recalled):
            self.clerk.heard_recall(event)
        if isinstance(event, events.WorkerLost):
            del self.workers[event.worker]
        if isinstance(event, events.SurveyorLost):
            self.surveyor.number = None
        self.surveyor.heard(event)
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
            case (
                kept.SpawnClerk()
                | kept.KillClerk()
                | kept.PingClerk()
                | kept.RecallChanges()
                | kept.KeepChanges()
            ):
                self.clerk.carry_out(effect)
            case _:
                self.surveyor.carry_out(effect)

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
            job.revision in self.surveyor.snapshots,
            "a job reads a snapshot that is there",
            job.revision,
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
        columns, packed = routes.table(job.start[0], job.goal[0], job.start_speed_mps)
        body = routes.body(columns, cost, job=job.job, life=self.life)
        self.world.checkers.found(body, cost, job.revision, f"replan{int(job.goal[0])}")
        return events.Outcome("route", cost, body, packed, path=job.job)

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
            body = routes.body({}, None, kind, job=job.job)
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
