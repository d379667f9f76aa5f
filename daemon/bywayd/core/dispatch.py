"""
Who works on which replan: hands out jobs, takes in what comes of them, keeps the deadlines.

A budget stretches, it does not break. The worker is given a deadline before the end of the
budget; the front holds the best verified route that it has sent, and answers with that when the
worker is late, dead or silent. When more is asked than the workers can do, those that have a
route stop improving it for those that have none.
"""

from __future__ import annotations

import math
from typing import Literal

from byway.errors import CODES
from bywayd.core.alarms import Alarms
from bywayd.core.answering import Answering, better_message
from bywayd.core.docket import Act, Docket, Held, Hurry
from bywayd.core.effects import Job, KillWorker, Recheck, StartJob, SteerJob
from bywayd.core.events import (
    Outcome,
    WorkerBetter,
    WorkerChecked,
    WorkerDone,
    WorkerFailed,
)
from bywayd.core.front_settings import FrontSettings
from bywayd.core.health import Health
from bywayd.core.instants import Instant
from bywayd.core.invariant import invariant, known
from bywayd.core.outbox import Outbox
from bywayd.core.pressure import improving, pressure
from bywayd.core.roster import Roster
from bywayd.core.snapshots import Snapshots
from bywayd.core.tasks import Kind, Task, Tasks
from bywayd.core.waiting import WaitingRoom


class Dispatch:
    """Owned by the front."""

    def __init__(
        self,
        settings: FrontSettings,
        outbox: Outbox,
        health: Health,
        snapshots: Snapshots,
        workers: Roster,
        answering: Answering,
    ) -> None:
        # -- shared with the rest of the front -------------------------------------------------
        self._settings = settings
        self._outbox = outbox
        self._health = health
        self._snapshots = snapshots
        self._workers = workers
        self._answering = answering
        # -- state -----------------------------------------------------------------------------
        self.room = WaitingRoom(settings.workers, settings.waiting_max, settings.patience_ratio)
        #: The replan of each unit that a worker is at, or that has lost its worker.
        self._at_work: dict[str, Docket] = {}
        self._tasks = Tasks(workers, snapshots)
        #: By request id, when an open replan must be answered; "" for when somebody who waits
        #: runs out of patience.
        self._alarms: Alarms[str] = Alarms()
        self._draining = False
        #: Whether anything has changed that may let somebody go on.
        self._restless = False

    # -- what clients want ---------------------------------------------------------------------

    @property
    def has_room(self) -> bool:
        """Whether one more replan can be taken in."""
        return self._workers.idle_count > 0 or not self.room.is_full

    def enter(self, docket: Docket, now: Instant) -> None:
        """Let a replan wait for a worker; it takes the place of an older one of its slot."""
        older = self.room.of_unit(docket.slot)
        if older is not None:
            self._act(older, older.move("supersede", now), now)
        self._answering.take_in(docket)
        if docket.guard is None:
            self.room.enter(docket)
        else:
            self.room.return_to(docket)  # before all others
        self._alarms.set(docket.id, docket.times.start_by)
        self._restless = True

    def of_unit(self, unit: str) -> list[Docket]:
        """Return the open replans of a unit, the older first."""
        found = (self._at_work.get(unit), self.room.of_unit(unit))
        return [docket for docket in found if docket is not None]

    def cancel(self, docket: Docket, now: Instant) -> None:
        """End a replan without an answer."""
        self._act(docket, docket.move("cancel", now), now)

    def finish(self, docket: Docket, now: Instant) -> None:
        """Answer a replan with the best there is, now or as soon as its worker has heard."""
        self._hasten(docket, "finish", now)

    def drain(self, now: Instant) -> None:
        """Begin nothing any more, and improve nothing."""
        self._draining = True
        self._restless = True
        for docket in list(self.room):
            self._act(docket, docket.move("stop", now), now)

    def stop(self, now: Instant) -> None:
        """Answer everything that is open."""
        for docket in list(self._answering.open.values()):
            self._act(docket, docket.move("stop", now), now)

    def look_again(self) -> None:
        """Something has changed that may let somebody go on: look at the next `settle`."""
        self._restless = True

    # -- what workers say ----------------------------------------------------------------------

    def better(self, event: WorkerBetter, now: Instant) -> None:
        """A better route has come."""
        task = self._tasks.find(event.worker, event.job, "plan")
        outcome = event.outcome
        if task is None:
            self._nonsense(event.worker, f"a better route for job {event.job}", now)
        elif outcome.kind != "route" or not math.isfinite(outcome.cost):
            self._nonsense(event.worker, f"a better route that is none: {outcome.kind}", now)
        elif task.docket is not None:
            docket = task.docket
            self._restless = self._restless or docket.best is None
            if docket.hold(outcome, task.snapshot.revision, now):
                docket.expect_changes(now)
                looks_from = known(docket.looks_from, "who has a route looks", docket.story)
                if now < looks_from:
                    self._alarms.set(docket.id, looks_from)
                self._act(docket, docket.move("better", now), now)

    def done(self, event: WorkerDone, now: Instant) -> None:
        """A job has ended with an outcome."""
        outcome = event.outcome
        if outcome.kind == "route" and not math.isfinite(outcome.cost):
            self._nonsense(event.worker, "a route without a cost", now)
            return
        task = self._end(event.worker, event.job, "plan", now)
        if task is None or task.docket is None:
            return
        docket = task.docket
        docket.ended(outcome, task.snapshot.revision, now)
        best = docket.best
        stale = best is not None and best.revision < self._snapshots.revision
        if stale and now < docket.times.answer_by:
            self._act(docket, docket.move("ended_stale", now), now, event.worker)
        else:
            self._act(docket, docket.move("ended_fresh", now), now)

    def failed(self, event: WorkerFailed, now: Instant) -> None:
        """A job, or a check, has ended with an error."""
        task = self._end(event.worker, event.job, None, now)
        self._health.count("worker_failures_total")
        self._outbox.log(
            "warning" if event.code == "bad_value" else "error",
            "worker.failed",
            worker=event.worker,
            code=event.code,
            text=event.text,
        )
        if task is not None and task.docket is not None:
            docket = task.docket
            code = event.code if event.code in CODES else "internal"
            docket.failure = (code, event.text, event.facts)
            self._act(docket, docket.move("failed", now), now)

    def checked(self, event: WorkerChecked, now: Instant) -> None:
        """A route has been checked on a newer snapshot."""
        task = self._end(event.worker, event.job, "check", now)
        if task is None or task.docket is None:
            return
        docket = task.docket
        self._health.observe("recheck_s", now.since(task.since))
        if event.good:
            best = known(docket.best, "what was checked is a route", docket.story)
            docket.best = Held(best.outcome, task.snapshot.revision)
            self._act(docket, docket.move("stood", now), now)
            return
        self._health.count("rechecks_failed_total")
        self._outbox.log("info", "replan.blocked", request_id=docket.id, text=event.text)
        docket.blocked()
        again = self._has_another_try(docket, now)
        self._act(docket, docket.move("fell_early" if again else "fell_late", now), now)

    def lost(self, worker: int, why: str, now: Instant) -> None:
        """A worker is gone; what it was at goes to another, or is answered."""
        self._health.count("workers_lost_total")
        self._outbox.log("warning", "worker.lost", worker=worker, why=why)
        for task in self._tasks.lost(worker, why, now):
            self._disown(task, now)
        self._restless = True

    def kill(self, worker: int, why: str, now: Instant) -> None:
        """Have a worker killed; what it was at does not wait for that."""
        self._workers.kill(worker, why)
        self._health.count("workers_killed_total")
        self._outbox.add(KillWorker(worker, why))
        self._outbox.log("warning", "worker.killed", worker=worker, why=why)
        # Its snapshot stays pinned until it is certainly gone.
        for task in self._tasks.of_worker(worker):
            self._disown(task, now)

    # -- what time does ------------------------------------------------------------------------

    def settle(self, now: Instant) -> None:
        """Answer what is due, then let whoever can go on do so."""
        while (id := self._alarms.pop_due(now)) is not None:
            self._restless = True
            docket = self._answering.open.get(id)
            if docket is None:
                continue
            if docket.phase != "waiting" and now < docket.times.answer_by:
                self._alarms.set(id, docket.times.answer_by)  # it was time to look, below
            else:
                self._act(docket, docket.move("due", now), now)
        self._look_at_changes(now)
        while self._restless:
            self._restless = False
            self._begin_jobs(now)
            self._press(now)

    def next_alarm(self) -> Instant | None:
        """Return when `settle` is to be called again."""
        return self._alarms.next()

    # -- jobs ----------------------------------------------------------------------------------

    def _begin_jobs(self, now: Instant) -> None:
        while (worker := self._workers.idle()) is not None:
            docket = self.room.next(self._at_work)
            if docket is None:
                return
            self.room.leave(docket)
            self._at_work[docket.slot] = docket
            if docket.begun_at is None:
                self._health.observe("waited_s", now.since(docket.times.arrived))
            deadline = docket.times.work_by
            task = self._tasks.begin("plan", docket, worker, deadline, now)
            docket.begin(task.number, worker, now)
            self._alarms.set(docket.id, docket.times.answer_by)
            self._outbox.add(StartJob(worker, self._job(task, docket, deadline)))

    def _recheck(self, docket: Docket, worker: int, outcome: Outcome, now: Instant) -> None:
        deadline = docket.times.answer_by
        task = self._tasks.begin("check", docket, worker, deadline, now)
        docket.task, docket.worker = task.number, worker
        self._outbox.add(Recheck(worker, self._job(task, docket, deadline), outcome))

    def _job(self, task: Task, docket: Docket, deadline: Instant) -> Job:
        ask = docket.ask
        return Job(
            job=task.number,
            vehicle=self._settings.vehicles[ask.vehicle].settings,
            start=ask.start,
            goal=ask.goal,
            deadline=deadline,
            seed=docket.seed,
            method=ask.method,
            left_out=tuple(ask.leave_out),
            clearance_m=ask.clearance_m,
            start_speed_mps=ask.start_speed_mps,
            start_curvature_per_m=ask.start_curvature_per_m,
            gap_wanted=ask.gap_wanted,
            revision=task.snapshot.revision,
            handle=task.snapshot.handle,
        )

    def _end(self, worker: int, number: int, kind: Kind | None, now: Instant) -> Task | None:
        """Take a task from its worker; None if the worker talks nonsense."""
        task = self._tasks.find(worker, number, kind)
        if task is None:
            self._nonsense(worker, f"the end of job {number}", now)
            return None
        self._tasks.end(task, now)
        if task.kind == "plan":
            self._answering.note_hold(now.since(task.since))
        if task.docket is not None:
            task.docket.leave_worker()
        self._restless = True
        return task

    def _nonsense(self, worker: int, what: str, now: Instant) -> None:
        """A worker said what it cannot know: its memory is not what it was."""
        if self._workers.phase(worker) != "killed":
            self._health.count("worker_nonsense_total")
            self.kill(worker, f"spoke nonsense: {what}", now)

    def _disown(self, task: Task, now: Instant) -> None:
        docket, task.docket = task.docket, None
        if docket is None:
            return
        docket.leave_worker()
        again = self._has_another_try(docket, now)
        self._act(docket, docket.move("lost_early" if again else "lost_late", now), now)

    def _has_another_try(self, docket: Docket, now: Instant) -> bool:
        newer = self.room.of_unit(docket.slot)
        return newer is None and not self._draining and docket.has_another_try(now)

    # -- acts ----------------------------------------------------------------------------------

    def _act(self, docket: Docket, act: Act, now: Instant, worker: int | None = None) -> None:
        """Do what a docket has decided. `worker` is idle and has just been at it."""
        if act == "publish":
            if docket.guard is not None:
                return  # there is nobody who could use it before the new guard stands
            best = known(docket.best, "what is published is there", docket.story)
            self._health.count("better_total")
            message = better_message(docket, best, now)
            packed = best.outcome.packed
            self._outbox.publish(f"better.{docket.ask.unit}", message, packed, id=docket.id)
        elif act == "steer":
            self._steer(docket, "finish", now)
        elif act == "recheck":
            best = known(docket.best, "what is checked is there", docket.story)
            self._recheck(docket, known(worker, "its worker is idle"), best.outcome, now)
        elif act == "again":
            self._health.count("retries_total")
            self.room.return_to(docket)
            self._alarms.set(docket.id, docket.times.start_by)
            self._restless = True
        elif act != "nothing":
            self._close(docket, act, now)

    def _close(self, docket: Docket, act: Act, now: Instant) -> None:
        waiting = len(self.room)
        if self.room.holds(docket):
            self.room.leave(docket)
        if self._at_work.get(docket.slot) is docket:
            del self._at_work[docket.slot]
        self._alarms.clear(docket.id)
        task = self._tasks.of_docket(docket)
        if task is not None:
            # A worker is still at it: it is wanted elsewhere.
            task.docket = None
            if task.kind == "plan":
                self._steer(docket, "cancel", now)
            docket.leave_worker()
        self._answering.conclude(docket, act, waiting, now)
        self._restless = True

    def _steer(self, docket: Docket, how: Literal["finish", "cancel"], now: Instant) -> None:
        task = known(self._tasks.of_docket(docket), "who is steered has a task", docket.story)
        self._workers.hurry(task.worker, task.number, now)
        self._outbox.add(SteerJob(task.worker, task.number, how))

    def _hasten(self, docket: Docket, why: Hurry, now: Instant) -> None:
        docket.hurry = why
        self._act(docket, docket.move("finish" if why == "finish" else "shorten", now), now)

    def _look_at_changes(self, now: Instant) -> None:
        """End the jobs whose site has changed while there is time for another search."""
        newest = self._snapshots.revision
        for docket in list(self._at_work.values()):
            best, looks_from = docket.best, docket.looks_from
            if docket.phase != "planning" or best is None or looks_from is None:
                continue
            changed = best.revision < newest and now >= looks_from
            if changed and self._has_another_try(docket, now):
                self._health.count("changed_under_way_total")
                self._hasten(docket, "changed", now)

    def _press(self, now: Instant) -> None:
        """Cut short whoever has a route already, for those who have waited long enough."""
        self._alarms.clear("")
        if self._draining:
            for docket in improving(self._at_work):
                self._hasten(docket, "finish", now)
        elif len(self.room) > 0:
            found = pressure(self.room, self._at_work, self._tasks.coming_free(), now)
            for docket, why in found.hasten:
                self._health.count("shortened_total")
                self._hasten(docket, why, now)
            if found.look_again_at is not None:
                self._alarms.set("", found.look_again_at)

    # -- looking at it -------------------------------------------------------------------------

    def check(self) -> None:
        """Stop with a `Defect` if somebody could be forgotten."""
        self._alarms.check()
        self.room.check()
        waiting = {docket.id for docket in self.room}
        for docket in self._answering.open.values():
            invariant(
                self._alarms.at(docket.id) is not None, "every replan has a deadline", docket.story
            )
            invariant(
                (docket.phase == "waiting") == (docket.id in waiting),
                "who waits is in the room",
                docket.story,
            )
        for unit, docket in self._at_work.items():
            invariant(
                self._answering.open.get(docket.id) is docket and docket.slot == unit,
                "who is at work is open",
                docket.story,
            )
        self._tasks.check()
