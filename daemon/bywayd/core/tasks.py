"""
What workers are at: each task reads one snapshot, which stays pinned until the task has ended.

A task whose replan has been answered (late, cancelled, its worker killed) is disowned: it goes on
until the worker says that it has ended, or is gone, and nobody looks at what came of it.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, TypeAlias

from bywayd.core.docket import Docket
from bywayd.core.instants import Instant
from bywayd.core.invariant import invariant
from bywayd.core.roster import Roster
from bywayd.core.snapshots import Snapshot, Snapshots

Kind: TypeAlias = Literal["plan", "check"]


@dataclass(slots=True)
class Task:
    """What one worker was given: a replan to plan, or its route to check."""

    number: int
    kind: Kind
    worker: int
    snapshot: Snapshot
    since: Instant
    #: None once nobody is interested in how it ends.
    docket: Docket | None


class Tasks:
    """Owned by dispatch. Gives tasks to workers and takes them back, with their snapshots."""

    __slots__ = ("_serial", "_snapshots", "_tasks", "_workers")

    def __init__(self, workers: Roster, snapshots: Snapshots) -> None:
        # -- shared with the rest of the front ------------------------------------------------
        self._workers = workers
        self._snapshots = snapshots
        # -- state ----------------------------------------------------------------------------
        #: Those that have not ended, by number.
        self._tasks: dict[int, Task] = {}
        self._serial = 0

    def begin(
        self, kind: Kind, docket: Docket, worker: int, deadline: Instant, now: Instant
    ) -> Task:
        """Give an idle worker a task on the newest snapshot."""
        self._serial += 1
        task = Task(self._serial, kind, worker, self._snapshots.pin(), now, docket)
        self._tasks[task.number] = task
        self._workers.give(worker, task.number, deadline, now)
        return task

    def find(self, worker: int, number: int, kind: Kind | None) -> Task | None:
        """Return a task if it is this worker's and of this kind (None: of any)."""
        task = self._tasks.get(number)
        if task is None or task.worker != worker or kind not in (None, task.kind):
            return None
        return task

    def of_docket(self, docket: Docket) -> Task | None:
        """Return the task under way for a replan."""
        return None if docket.task is None else self._tasks[docket.task]

    def of_worker(self, worker: int) -> list[Task]:
        """Return what a worker is at, or was when it was killed."""
        return [task for task in self._tasks.values() if task.worker == worker]

    def end(self, task: Task, now: Instant) -> None:
        """The worker has said that it is done."""
        self._workers.done(task.worker, task.number, now)
        self._drop(task)

    def lost(self, worker: int, why: str, now: Instant) -> list[Task]:
        """The worker is gone. Returns what it was at."""
        tasks = [self._tasks[number] for number in self._workers.lost(worker, why, now)]
        for task in tasks:
            self._drop(task)
        return tasks

    def _drop(self, task: Task) -> None:
        del self._tasks[task.number]
        self._snapshots.unpin(task.snapshot.revision)

    def coming_free(self) -> int:
        """How many workers will be idle soon: told to end, checking, or disowned."""
        return sum(
            self._workers.phase(task.worker) != "killed"
            and (task.docket is None or task.docket.phase != "planning")
            for task in self._tasks.values()
        )

    def check(self) -> None:
        """Stop with a `Defect` unless tasks, replans and pins agree."""
        pins: dict[int, int] = {}
        for task in self._tasks.values():
            pins[task.snapshot.revision] = pins.get(task.snapshot.revision, 0) + 1
            docket = task.docket
            if docket is not None:
                invariant(docket.task == task.number, "a task knows its replan", docket.story)
                invariant(docket.worker == task.worker, "a replan its worker", docket.story)
        invariant(pins == self._snapshots.pins(), "every task, and nobody else, pins a snapshot")
