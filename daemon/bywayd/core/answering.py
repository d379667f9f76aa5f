"""
The one place where replans end: each gets exactly one final answer, and it is remembered.

What planning came to is an answer, whatever it is; an error says that no worker could be had, or
that somebody did not want the answer any more. A repeat of the request gets the same again.
"""

from __future__ import annotations

from typing import TypeAlias

from byway import frames, messages
from byway.frames import Header
from byway.messages import AnswerMessage, ErrorMessage, OutcomeIs
from byway.packed import Bytes
from bywayd.core.answers import Answered, Answers
from bywayd.core.docket import Act, Docket, Held
from bywayd.core.events import Outcome, Peer
from bywayd.core.front_settings import FrontSettings
from bywayd.core.guarding import Guarding
from bywayd.core.health import Health
from bywayd.core.instants import Duration, Instant
from bywayd.core.invariant import invariant, known
from bywayd.core.outbox import Outbox, error_of
from bywayd.core.snapshots import Snapshots

#: A replan of our own, and what a client would be told.
Ended: TypeAlias = tuple[Docket, AnswerMessage | ErrorMessage]

#: How much a job that has just ended says about how long the next will hold its worker.
_HOLD_WEIGHT = 0.1


class Answering:
    """Owned by the front. Knows all open replans; whoever ends one does it here."""

    def __init__(
        self,
        settings: FrontSettings,
        outbox: Outbox,
        health: Health,
        snapshots: Snapshots,
        guarding: Guarding,
    ) -> None:
        # -- shared with the rest of the front -------------------------------------------------
        self._outbox = outbox
        self._health = health
        self._snapshots = snapshots
        self._guarding = guarding
        # -- state -----------------------------------------------------------------------------
        #: Every replan that was taken in and has no answer yet, by request id.
        self.open: dict[str, Docket] = {}
        keep = Duration.of_s(settings.answers_kept_s)
        self.answers = Answers(settings.answers_max, settings.answers_bytes_max, keep)
        #: The same for requests that were not taken in; a flood of those must not push out answers.
        self.refusals = Answers(settings.answers_max, settings.answers_bytes_max, keep)
        #: Replans of our own that have ended, with what a client would be told.
        self._ended: list[Ended] = []
        #: A running mean of how long a job holds its worker.
        self._hold_s = 0.0
        self._workers = settings.workers

    def take_in(self, docket: Docket) -> None:
        """Promise an answer."""
        invariant(docket.id not in self.open, "a request is taken in once")
        self.open[docket.id] = docket

    def refuse(
        self, peer: Peer, header: Header, body: bytes, refusal: ErrorMessage, now: Instant
    ) -> None:
        """Tell why a request is not taken in."""
        self._health.count(f"refused_{refusal.code}_total")
        self.refusals.keep(header.id, body, refusal, 0, b"", now)
        self._outbox.reply(peer, header, refusal)

    def known(self, id: str) -> Answered | None:
        """Return what ended this request, if that is remembered."""
        return self.answers.get(id) or self.refusals.get(id)

    def note_hold(self, held: Duration) -> None:
        """Take note of how long a job has held its worker."""
        self._hold_s += _HOLD_WEIGHT * (held.s - self._hold_s)

    def retry_after_s(self, waiting: int) -> float:
        """Return when a worker may be free for somebody who asks now."""
        return self._hold_s * (waiting + 1) / self._workers

    def conclude(self, docket: Docket, act: Act, waiting: int, now: Instant) -> None:
        """Answer, as the docket has decided."""
        invariant(docket.phase == "answered", "who is answered has ended", docket.story)
        message, packed = self._message(docket, act, waiting, now)
        del self.open[docket.id]
        if docket.peer is None:
            self._ended.append((docket, message))
            return
        size = len(message.outcome) if isinstance(message, AnswerMessage) else 0
        self.answers.keep(docket.id, docket.body, message, size, packed, now)
        self._outbox.reply(docket.peer, docket.header, message, packed)
        self._take_stock(docket, message, now)

    def take_ended(self) -> list[Ended]:
        """Return the replans of our own that have ended since the last time."""
        ended, self._ended = self._ended, []
        return ended

    def _message(
        self, docket: Docket, act: Act, waiting: int, now: Instant
    ) -> tuple[AnswerMessage | ErrorMessage, Bytes]:
        unit = {"unit": docket.ask.unit}
        held = docket.best or docket.verdict
        if docket.hurry == "newer" and held is not None and held.outcome.kind == "not_found":
            held = None  # it was cut short
        if act == "answer_cancelled":
            return error_of("cancelled", "the replan was cancelled", unit), b""
        if act == "answer_superseded":
            text = "a newer replan of the same unit took its place"
            return error_of("superseded", text, unit), b""
        if held is not None:
            return self._answer(docket, held, now), held.outcome.packed
        if act == "answer_stopping":
            return error_of("stopping", "the daemon ends before a route was found"), b""
        if act == "answer_failed":
            code, text, facts = known(docket.failure, "a failure has a reason", docket.story)
            return error_of(code, text, facts), b""
        if act == "answer_unserved" and docket.begun_at is None:
            waited_s = now.since(docket.times.arrived).s
            text = f"no worker was free within {waited_s:.3f} s"
            facts = {"waited_s": waited_s, "waiting": waiting}
            return error_of("overloaded", text, facts, self.retry_after_s(waiting)), b""
        if docket.hurry == "newer":
            text = "a newer replan of the same unit took its place before a route was found"
            return error_of("superseded", text, unit), b""
        nothing = Held(not_found(docket), self._snapshots.revision)
        return self._answer(docket, nothing, now), b""

    def _answer(self, docket: Docket, held: Held, now: Instant) -> AnswerMessage:
        arrived = docket.times.arrived
        begun = docket.begun_at or now
        first = docket.first_at if held.outcome.kind == "route" else None
        guard = self._guarding.of_answer(docket, held.outcome, now)
        return AnswerMessage(
            unit=docket.ask.unit,
            revision=held.revision,
            first_s=None if first is None else first.since(arrived).s,
            waited_s=begun.since(arrived).s,
            total_s=now.since(arrived).s,
            attempts=docket.attempts,
            outcome=held.outcome.body,
            guard=None if guard is None else guard.id,
        )

    def _take_stock(
        self, docket: Docket, message: AnswerMessage | ErrorMessage, now: Instant
    ) -> None:
        arrived = docket.times.arrived
        total = now.since(arrived)
        held = docket.best or docket.verdict
        if isinstance(message, ErrorMessage):
            kind = message.code
            self._health.count(f"errors_{kind}_total")
        else:
            kind = held.outcome.kind if held is not None else "not_found"
            self._health.count(f"answers_{kind}_total")
            self._health.observe("answer_s", total)
            if held is not None and held.revision < self._snapshots.revision:
                # True of the revision that it names; there was no time to look at the newest.
                self._health.count("answers_behind_total")
            if docket.first_at is not None:
                self._health.observe("first_s", docket.first_at.since(arrived))
        budget = Duration.of_s(docket.ask.budget_s)
        late = total > budget
        if late:
            self._health.count("answers_late_total")
            self._health.observe("late_s", Duration(total.ns - budget.ns))
        self._outbox.log(
            "warning" if late else "info",
            "replan.late" if late else "replan.answered",
            request_id=docket.id,
            unit=docket.ask.unit,
            kind=kind,
            cost_m=docket.best.outcome.cost if docket.best is not None else None,
            revision=held.revision if held is not None else None,
            budget_s=docket.ask.budget_s,
            total_s=total.s,
            attempts=docket.attempts,
        )

    def check(self) -> None:
        """Stop with a `Defect` if somebody could wait for ever, or be answered twice."""
        self.answers.check()
        self.refusals.check()
        for id, docket in self.open.items():
            invariant(id == docket.id, "open replans are known by their id")
            invariant(docket.phase != "answered", "who was answered is closed", docket.story)
            invariant(self.answers.get(id) is None, "an open replan has no answer", docket.story)
            docket.check()


def not_found(docket: Docket) -> Outcome:
    """Return the outcome of a search that nobody could finish: nothing found, nothing proved."""
    body = frames.encode_body(
        OutcomeIs(
            kind="not_found",
            gap=1.0,
            seed=docket.seed,
            left_out=list(docket.ask.leave_out),
        )
    )
    return Outcome("not_found", float("inf"), body)


def better_message(docket: Docket, held: Held, now: Instant) -> messages.BetterMessage:
    """Return what listeners are told about a better route."""
    return messages.BetterMessage(
        unit=docket.ask.unit,
        revision=held.revision,
        elapsed_s=now.since(docket.times.arrived).s,
        outcome=held.outcome.body,
    )
