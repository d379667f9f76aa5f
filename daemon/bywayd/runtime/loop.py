"""
The loop: one thread that waits for everything, hands events to the core and does what it says.

A turn takes what is there, from each origin a bounded amount, and comes round again; so a
flood on one socket cannot keep deadlines, the crew or another socket waiting. Each event is
handed in with the time at which it was taken, and all its effects are carried out before the
next one. What carrying out an effect brings about (a reply that nobody takes) waits its turn.
"""

import contextlib
import functools
import os
import signal
import time
from collections import deque
from collections.abc import Callable, Mapping
from typing import Any, Final, Protocol

import structlog

from bywayd.core import effects, events, kept
from bywayd.core.instants import SECOND_NS, Instant
from bywayd.runtime.alarm import Alarm
from bywayd.runtime.clerking import keepsake_message, recall_begin
from bywayd.runtime.clock import SystemClock
from bywayd.runtime.logs import LogWriter
from bywayd.runtime.outside import Outside
from bywayd.runtime.staff import Member, Message, Role, Staff, StaffReports
from bywayd.runtime.translate import (
    Nonsense,
    change_message,
    event_of,
    job_message,
    outcome_message,
    watch_message,
)
from bywayd.runtime.vitals import Memories, Turns
from bywayd.runtime.watch import Watch

vitals_every_ns: Final = SECOND_NS

#: Lines from the crew's common pipe that are logged per second; a crashing crew can say a lot.
said_lines_max: Final = 50


class Core(Protocol):
    """`bywayd.core.front.Front`, or whatever a test puts in its place."""

    def handle(self, event: events.Event, now: Instant) -> list[effects.Effect]: ...


class Loop:
    """One life of the front. `run` returns when the core has said `Stop`."""

    def __init__(
        self,
        clock: SystemClock,
        watch: Watch,
        site_settings: dict[str, Any],
        logs: LogWriter,
        keep_file: str = "",
    ) -> None:
        # -- fixed ----------------------------------------------------------------------------
        self._clock = clock
        self._watch = watch
        self._site_settings = site_settings
        self._keep_file = keep_file
        self._logs = logs
        # Bound once: the lazy one costs as much again at every line.
        self._logger = structlog.get_logger().bind()
        # -- given to `run`; the staff tells us news before that already -------------------------
        self._core: Core
        self._outside: Outside
        self._crew: Staff
        self._do: dict[type, Callable[[Any], None]]
        # -- owned by the thread that runs -------------------------------------------------------
        self._alarm = Alarm()
        self._inbox: deque[events.Event] = deque()
        self._handling = False
        self._wake: Instant | None = None
        self._vitals_at = clock.now()
        self._stopped: str | None = None
        #: The core has stopped because it cannot do what it is there for.
        self.has_failed = False
        self._stops_asked = 0
        self._turns = Turns()
        self._memories = Memories()
        self._said_lines = 0
        self._progress_ns = 0

    def _effects(self) -> dict[type, Callable[[Any], None]]:
        """How each effect is carried out."""
        return {
            effects.Reply: self._reply,
            effects.Publish: self._outside.publish,
            effects.SpawnWorker: lambda e: self._crew.spawn("worker", e.worker),
            effects.KillWorker: lambda e: self._crew.kill("worker", e.worker, e.why),
            effects.PingWorker: lambda e: self._tell("worker", e.worker, "ping"),
            effects.StartJob: self._start_job,
            effects.SteerJob: lambda e: self._tell("worker", e.worker, e.how, job=e.job),
            effects.Recheck: self._recheck,
            effects.SpawnSurveyor: self._spawn_surveyor,
            effects.KillSurveyor: lambda e: self._crew.kill("surveyor", e.surveyor, e.why),
            effects.PingSurveyor: lambda e: self._tell("surveyor", e.surveyor, "ping"),
            effects.ApplyChanges: self._apply_changes,
            effects.ReleaseBefore: self._release_before,
            effects.DescribeSite: self._describe_site,
            effects.WatchRoute: self._watch_route,
            effects.MoveGuard: lambda e: self._tell(
                *("surveyor", e.surveyor, "move"), guard=e.guard, progress_m=e.progress_m
            ),
            effects.Unwatch: lambda e: self._tell("surveyor", e.surveyor, "unwatch", guard=e.guard),
            kept.SpawnClerk: lambda e: self._crew.spawn(
                "clerk", e.clerk, {"do": "begin", "file": self._keep_file}
            ),
            kept.KillClerk: lambda e: self._crew.kill("clerk", e.clerk, e.why),
            kept.PingClerk: lambda e: self._tell("clerk", e.clerk, "ping"),
            kept.RecallChanges: self._recall_changes,
            kept.KeepChanges: self._keep_changes,
            effects.Log: self._log,
            effects.Wake: self._set_wake,
            effects.Stop: self._stop,
        }

    # -- the life ---------------------------------------------------------------------------

    def reports(self) -> StaffReports:
        """Where the staff is to tell its news."""
        return StaffReports(
            message=self._hear,
            lost=self._lose,
            progress=self._note_progress,
            warm=lambda: self._logger.info("crew.warm"),
            said=self._note_said,
            template_lost=lambda why: self._logger.error("template.lost", why=why),
        )

    def run(self, core: Core, outside: Outside, staff: Staff, signals: int) -> str:
        """
        Turn until the core says stop; return why.

        Args:
            signals: Descriptor from which the numbers of arrived signals can be read.
        """
        self._core, self._outside, self._crew = core, outside, staff
        self._do = self._effects()
        for name in ("requests", "updates"):
            receive = functools.partial(outside.receive, name, self.hand_in)
            self._watch.add(outside.sockets[name], receive)
        self._watch.add(outside.sockets["events"], outside.receive_subscriptions)
        if outside.admission is not None:
            self._watch.add(outside.admission.socket, outside.admission.answer)
        for monitor in outside.doorman.monitors:
            self._watch.add(monitor, self._look_at_doors)
        self._watch.add(self._alarm, self._tick_if_due)
        self._watch.add(signals, lambda: self._note_signals(signals))
        self.hand_in(events.Started(self._clock.wall_s()))
        try:
            while self._stopped is None:
                self._turn()
        finally:
            self._watch.remove(self._alarm)
            self._alarm.close()
        return self._stopped

    def _turn(self) -> None:
        ready = self._watch.wait(self._wait_ms())
        began_ns = time.monotonic_ns()
        for handler in ready:
            handler()
            self._tick_if_due()
        self._crew.hear_backlog()
        self._tick_if_due()
        if self._clock.now() >= self._vitals_at:
            self._vitals()
        self._turns.note(time.monotonic_ns() - began_ns)

    def _wait_ms(self) -> int:
        if self._crew.backlog:
            return 0
        return -(-self._clock.now().until(self._vitals_at).ns // 1_000_000)

    def _tick_if_due(self) -> None:
        if self._wake is not None and self._clock.now() >= self._wake:
            self._wake = None
            self._alarm.clear()
            self.hand_in(events.Tick())

    # -- events in --------------------------------------------------------------------------

    def hand_in(self, event: events.Event) -> None:
        """Hand an event to the core and carry out what comes of it."""
        self._inbox.append(event)
        if self._handling:
            return
        self._handling = True
        try:
            while self._inbox:
                for effect in self._core.handle(self._inbox.popleft(), self._clock.now()):
                    self._do[type(effect)](effect)
        finally:
            self._handling = False

    def _hear(self, role: Role, number: int, message: Message) -> None:
        if message.get("say") == "trouble":
            self._logger.error("crew.trouble", role=role, number=number, text=message.get("text"))
            return
        try:
            event = event_of(role, number, message)
        except Nonsense as fault:
            self._crew.kill(role, number, str(fault))
            return
        self.hand_in(event)

    def _lose(self, role: Role, number: int, why: str) -> None:
        self.hand_in(_LOST[role](number, why))

    def _look_at_doors(self) -> None:
        if self._outside.doorman.look():
            doorman = self._outside.doorman
            event = "doors.opened" if doorman.is_open else "doors.shut"
            self._logger.warning(event, peers=doorman.peers, peers_max=doorman.peers_max)

    def _note_signals(self, descriptor: int) -> None:
        with contextlib.suppress(BlockingIOError):
            for number in os.read(descriptor, 64):
                why = signal.Signals(number).name
                self._stops_asked += 1
                if self._stops_asked == 1:
                    self.hand_in(events.StopAsked(why))
                else:  # whoever asks twice does not want to wait
                    self._stopped = f"{why}, asked twice"

    def _note_progress(self, done: int, total: int, name: str) -> None:
        now_ns = time.monotonic_ns()
        # From a warm cache all of them load within a second, and nobody needs to know each.
        if now_ns - self._progress_ns > SECOND_NS:
            self._progress_ns = now_ns
            self._logger.info("crew.warming", done=done, total=total, kernel=name)

    def _note_said(self, line: str) -> None:
        self._said_lines += 1
        if self._said_lines <= said_lines_max:
            self._logger.warning("crew.said", line=line[:500])

    # -- effects out ------------------------------------------------------------------------

    def _reply(self, effect: effects.Reply) -> None:
        if not self._outside.reply(effect):
            self._inbox.append(events.Undeliverable(effect.peer))

    def _tell(self, role: Role, number: int, what: str, **more: Any) -> None:
        self._crew.put(role, number, {"do": what, **more})

    def _start_job(self, effect: effects.StartJob) -> None:
        job = job_message(effect.job, self._clock.host_ns)
        self._tell("worker", effect.worker, "plan", **job)

    def _recheck(self, effect: effects.Recheck) -> None:
        job = job_message(effect.job, self._clock.host_ns)
        outcome = outcome_message(effect.outcome)
        self._tell("worker", effect.worker, "check", outcome=outcome, **job)

    def _spawn_surveyor(self, effect: effects.SpawnSurveyor) -> None:
        order = {
            "do": "begin",
            "settings": self._site_settings,
            "revision": effect.revision,
            "handle": effect.handle,
            "in_use": effect.in_use,
        }
        self._crew.spawn("surveyor", effect.surveyor, order)

    def _apply_changes(self, effect: effects.ApplyChanges) -> None:
        host_ns = self._clock.host_ns
        changes = [change_message(change, host_ns) for change in effect.changes]
        at_s = host_ns(effect.at) / SECOND_NS
        self._tell(
            "surveyor", effect.surveyor, "apply", batch=effect.batch, changes=changes, at_s=at_s
        )

    def _release_before(self, effect: effects.ReleaseBefore) -> None:
        self._tell("surveyor", effect.surveyor, "release", revision=effect.revision)

    def _describe_site(self, effect: effects.DescribeSite) -> None:
        question = effect.message.model_dump()
        self._tell("surveyor", effect.surveyor, "describe", ticket=effect.ticket, question=question)

    def _watch_route(self, effect: effects.WatchRoute) -> None:
        self._tell("surveyor", effect.surveyor, "watch", **watch_message(effect))

    def _recall_changes(self, effect: kept.RecallChanges) -> None:
        place = recall_begin if effect.place is None else effect.place
        self._tell("clerk", effect.clerk, "recall", task=effect.task, place=place)

    def _keep_changes(self, effect: kept.KeepChanges) -> None:
        changes = [keepsake_message(each, self._clock.host_ns) for each in effect.keepsakes]
        self._tell("clerk", effect.clerk, "keep", task=effect.task, changes=changes)

    def _log(self, effect: effects.Log) -> None:
        getattr(self._logger, effect.level)(effect.event, **effect.facts)

    def _set_wake(self, effect: effects.Wake) -> None:
        self._wake = effect.at
        self._alarm.set(self._clock.host_ns(effect.at))

    def _stop(self, effect: effects.Stop) -> None:
        self._stopped = effect.why
        self.has_failed = effect.is_failure

    # -- once a second ----------------------------------------------------------------------

    def _vitals(self) -> None:
        self._vitals_at = Instant(self._clock.now().ns + vitals_every_ns)
        self._crew.kill_silent()
        if self._outside.admission is not None:
            self._outside.admission.look()
        if self._said_lines > said_lines_max:
            self._logger.warning("crew.said.more", lines=self._said_lines - said_lines_max)
        self._said_lines = 0
        processes = {"front": os.getpid()}
        if self._crew.template_pid is not None:
            processes["template"] = self._crew.template_pid
        for member in self._crew.members.values():
            if member.pid is not None:
                processes[_name_of(member)] = member.pid
        memory = {**self._memories.look(processes), "site": self._crew.memory.taken_bytes}
        self.hand_in(events.Vitals(self._measured(), self._clock.wall_s(), memory))

    def _measured(self) -> dict[str, int]:
        doorman, admission = self._outside.doorman, self._outside.admission
        return {
            "admitted_total": 0 if admission is None else admission.admitted,
            "turned_away_total": 0 if admission is None else admission.rejected,
            "peers": doorman.peers,
            "doors_shut_total": doorman.shut_count,
            "accepts_failed_total": doorman.failures,
            "undelivered_total": self._outside.undelivered,
            "log_lines_dropped_total": self._logs.dropped,
            **self._turns.report(),
        }


_LOST: Final[Mapping[Role, Callable[[int, str], events.Event]]] = {
    "worker": events.WorkerLost,
    "surveyor": events.SurveyorLost,
    "clerk": kept.ClerkLost,
}


def _name_of(member: Member) -> str:
    # There is one surveyor and one clerk, and successors go on under the same name.
    return f"worker_{member.number}" if member.role == "worker" else member.role
