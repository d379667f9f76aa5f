"""
The promises of the design, checked from outside at every step.

Nothing here looks into the core: it sees what was handed in and what came out, and what clients,
sources, workers and the surveyor of the simulated world know of each other.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Callable
from dataclasses import dataclass, field

from tests.simulation.freshcheck import FreshCheck
from tests.simulation.guardcheck import GuardCheck
from tests.simulation.promises import BrokenPromise, promise

from byway import messages
from byway.packed import Bytes
from bywayd.core import effects, events
from bywayd.core.front_settings import FrontSettings

__all__ = ["BrokenPromise", "Checkers", "describes", "promise"]

FINALS = (messages.AnswerMessage, messages.ErrorMessage)


@dataclass(slots=True)
class Request:
    """What is known of one replan, by its id, in one epoch."""

    id: str
    #: What each body that came in under this id asked for; the first counts.
    body: bytes = b""
    unit: str = ""
    ask: messages.Replan | None = None
    budget_ns: int = 0
    arrivals: int = 0
    conflicts: int = 0
    accepted_ns: int | None = None
    accepted_revision: int = 0
    #: Highest revision that any source knew to be acknowledged when the client sent this.
    seen_revision: int = 0
    final: messages.Message | None = None
    final_ns: int = 0
    finals: int = 0
    refusals: int = 0
    #: The stream of better routes: revision and cost of the last.
    best: tuple[int, float] | None = None


@dataclass(slots=True)
class Numbers:
    """What is known of one source in one epoch."""

    acknowledged: int = 0
    refused: set[int] = field(default_factory=set)
    #: Claims by number: nothing of them is to be seen on the site.
    traceless: dict[int, messages.Claim] = field(default_factory=dict)


class Checkers:
    """One life of the daemon: a new epoch gets new checkers."""

    def __init__(
        self,
        epoch: str,
        sees: Callable[[str, int, int], bool],
        settings: FrontSettings,
        is_safe: Callable[[str, str, int], bool],
        recall_is_visible: Callable[[], bool],
        fresh: FreshCheck,
    ) -> None:
        self.epoch = epoch
        self.sees = sees
        self.is_safe = is_safe
        self.recall_is_visible = recall_is_visible
        self.fresh = fresh
        self.requests: dict[str, Request] = {}
        self.sources: dict[str, Numbers] = defaultdict(Numbers)
        self.revision = 0
        #: Highest revision in an acknowledgement that has reached its source.
        self.known_revision = 0
        self.streams: dict[str, int] = defaultdict(int)
        #: (outcome body, revision): routes that a worker found or checked.
        self.verified: set[tuple[bytes, int]] = set()
        self.costs: dict[bytes, float] = {}
        #: Whose replan an outcome is about; that of a guard's own goes to the same goal.
        self.about: dict[bytes, str] = {}
        self.guards = GuardCheck(
            settings.guard_silence_s, settings.guard_news_m, settings.guards_max, self.verified
        )
        #: Revisions read by tasks under way, by (worker, job).
        self.reading: dict[tuple[int, int], int] = {}
        self.released_before = 0
        self.answered = 0

    # -- what goes in -------------------------------------------------------------------------

    def sent(self, id: str) -> None:
        """A client sends a replan for the first time."""
        self.requests.setdefault(id, Request(id)).seen_revision = self.known_revision

    def came(self, came: messages.Message, id: str, body: bytes, now_ns: int) -> None:
        """A replan reaches the front."""
        request = self.requests.setdefault(id, Request(id))
        if request.arrivals + request.conflicts == 0 or request.body == body:
            request.body = body
            request.arrivals += 1
            if request.arrivals == 1 and isinstance(came, messages.Replan):
                request.unit, request.ask = came.unit, came
                request.budget_ns = round(came.budget_s * 1e9)
        else:
            request.conflicts += 1

    def found(self, body: bytes, cost: float, revision: int, about: str) -> None:
        """A worker has verified a route on this revision."""
        self.about[body] = about
        self.verified.add((body, revision))
        self.costs[body] = cost

    # -- what comes out -----------------------------------------------------------------------

    def reply(self, effect: effects.Reply, now_ns: int) -> None:
        """A reply leaves the front."""
        promise(effect.header.epoch == self.epoch, "every reply names the epoch")
        promise(effect.header.kind == effect.message.kind, "a header names its message")
        message = effect.message
        self.guards.reply(effect, now_ns)
        if isinstance(message, messages.Acknowledged | messages.Refused):
            self._told_source(message, now_ns)
        elif effect.peer.channel == "requests" and effect.header.id.startswith("replan"):
            self._told_asker(effect, now_ns)
        if isinstance(message, messages.Acknowledged | messages.Accepted | messages.Welcome):
            self._rises(message.revision)

    def _rises(self, revision: int) -> None:
        promise(revision >= self.revision, "revisions never go back", revision, self.revision)
        self.revision = revision

    def _told_source(self, message: messages.Acknowledged | messages.Refused, now_ns: int) -> None:
        numbers = self.sources[message.source]
        if isinstance(message, messages.Refused):
            if message.number > numbers.acknowledged:
                numbers.refused.add(message.number)
            return
        last = numbers.acknowledged
        promise(message.number >= last, "acknowledgements never go back", message.number, last)
        for number in range(last + 1, message.number + 1):
            promise(
                number in numbers.refused
                or number in numbers.traceless
                or self.sees(message.source, number, message.revision),
                "what is acknowledged is visible, or was refused",
                *(message.source, number, message.revision),
            )
            promise(
                number in numbers.refused or self.is_safe(self.epoch, message.source, number),
                "what is acknowledged of a durable layer is on the disk",
                *(message.source, number),
            )
            claim = numbers.traceless.pop(number, None)
            if claim is not None and claim.expected_period_s and number not in numbers.refused:
                self.fresh.acknowledged(claim.layer, now_ns)
            numbers.refused.discard(number)
        numbers.acknowledged = message.number

    def _told_asker(self, effect: effects.Reply, now_ns: int) -> None:
        message, request = effect.message, self.requests.get(effect.header.id)
        promise(request is not None, "nobody is answered who did not ask", effect.header.id)
        assert request is not None
        if isinstance(message, messages.Accepted):
            promise(request.accepted_ns is None, "a request is taken in once", request.id)
            promise(request.final is None, "nothing is taken in after its end", request.id)
            promise(self.recall_is_visible(), "no replan before what is kept is there", request.id)
            request.accepted_ns = now_ns
            request.accepted_revision = message.revision
            assert request.ask is not None
            self.fresh.accepted(request.ask, now_ns)
            promise(
                message.revision >= request.seen_revision,
                "a replan sees what was acknowledged before it was sent",
                request.id,
            )
        elif isinstance(message, messages.ErrorMessage) and message.code == "conflict":
            request.conflicts -= 1
            promise(request.conflicts >= 0, "a conflict is told for another body", request.id)
        else:
            promise(isinstance(message, FINALS), "a replan gets an answer", message.kind)
            self._final(request, message, effect.packed, now_ns)

    def _final(
        self, request: Request, message: messages.Message, packed: Bytes, now_ns: int
    ) -> None:
        request.finals += 1
        promise(
            request.finals <= request.arrivals, "an answer is repeated to repeats only", request.id
        )
        if request.final is not None:
            promise(message == request.final, "a repeat gets the same answer again", request.id)
            return
        request.final, request.final_ns = message, now_ns
        self.answered += 1
        if isinstance(message, messages.ErrorMessage) and request.ask is not None:
            self.fresh.refused(request.ask, message, now_ns)
        if request.accepted_ns is not None:
            took_ns = now_ns - request.accepted_ns
            promise(
                took_ns <= request.budget_ns,
                "an answer leaves within its budget",
                request.id,
                took_ns / 1e6,
                request.budget_ns / 1e6,
            )
        if isinstance(message, messages.AnswerMessage):
            self._answer(request, message)
            assert request.ask is not None
            self.guards.answer(request.ask, message, packed, now_ns)

    def _answer(self, request: Request, message: messages.AnswerMessage) -> None:
        body, revision = bytes(message.outcome), message.revision
        promise(request.accepted_ns is not None, "who is answered was taken in", request.id)
        promise(
            revision >= request.seen_revision,
            "an answer knows what was acknowledged before its replan was sent",
            *(request.id, revision, request.seen_revision),
        )
        promise(
            revision >= request.accepted_revision,
            "an answer is not older than its replan",
            request.id,
        )
        promise(message.unit == request.unit, "an answer is for the unit that asked", request.id)
        if body not in self.costs:
            return
        promise(
            (body, revision) in self.verified,
            "a route was verified at the revision that its answer names",
            *(request.id, revision),
        )
        promise(self.about[body] == request.id, "an answer is about its replan", request.id)
        if request.best is not None and request.best[0] == revision:
            promise(
                self.costs[body] <= request.best[1], "the answer repeats the best route", request.id
            )

    def publish(self, effect: effects.Publish, now_ns: int) -> None:
        """An event leaves the front."""
        number = effect.header.number
        self.streams[effect.topic] += 1
        promise(number == self.streams[effect.topic], "streams are numbered", effect.topic, number)
        message = effect.message
        if self.guards.publish(effect, now_ns):
            return
        if isinstance(message, messages.LayerState):
            self.fresh.layer_state(effect.topic, message, now_ns)
            return
        if isinstance(message, messages.HealthIs):
            self.fresh.health(message, now_ns)
            self._rises(message.revision)
            return
        promise(isinstance(message, messages.BetterMessage), "routes and health are published")
        assert isinstance(message, messages.BetterMessage)
        request = self.requests.get(effect.header.id)
        promise(
            request is not None and request.accepted_ns is not None and request.final is None,
            "better routes come between taking in and answer",
            effect.header.id,
        )
        assert request is not None
        promise(effect.topic == f"better.{request.unit}", "a route goes to its unit's topic")
        cost = self.costs[bytes(message.outcome)]
        if request.best is not None:
            revision, best = request.best
            promise(message.revision >= revision, "a stream's revision never goes back", request.id)
            promise(
                message.revision > revision or cost < best,
                "costs never rise within a stream",
                *(request.id, best, cost),
            )
        request.best = (message.revision, cost)

    # -- snapshots ----------------------------------------------------------------------------

    def begins(self, worker: int, job: effects.Job) -> None:
        """A worker is given something to read."""
        promise(job.revision >= self.released_before, "no job reads what was given back", job.job)
        self.reading[worker, job.job] = job.revision

    def ends(self, worker: int, job: int) -> None:
        """A worker does not read any more."""
        self.reading.pop((worker, job), None)

    def worker_ends(self, worker: int) -> None:
        """A worker is certainly dead."""
        for key in [key for key in self.reading if key[0] == worker]:
            del self.reading[key]

    def releases(self, revision: int) -> None:
        """Memory of older snapshots is given back."""
        oldest = min(self.reading.values(), default=revision)
        promise(oldest >= revision, "no snapshot is given back while it is read", revision, oldest)
        self.released_before = max(self.released_before, revision)

    def successor(self, effect: effects.SpawnSurveyor) -> None:
        """A new surveyor gives back whatever it is not told to keep."""
        kept = {handle["revision"] for handle in effect.in_use}  # type: ignore[index]
        lost = [revision for revision in self.reading.values() if revision not in kept]
        promise(not lost, "a successor keeps every snapshot that is read", lost, kept)

    # -- the end ------------------------------------------------------------------------------

    def forget(self, now_ns: int, after_ns: int) -> None:
        """Let go of requests that were answered long ago: a long run must not fill the memory."""
        old = [
            id
            for id, request in self.requests.items()
            if request.final is not None and now_ns - request.final_ns > after_ns
        ]
        for id in old:
            del self.requests[id]
        used = {bytes(r.final.outcome) for r in self.requests.values() if _is_answer(r.final)}
        if len(self.costs) > 20_000:
            live = set(self.requests)
            gone = [b for b in self.costs if b not in used and self.about[b] not in live]
            for body in gone:
                del self.costs[body]
                del self.about[body]
            self.verified &= {entry for entry in self.verified if entry[0] in self.costs}
        self.guards.forget(now_ns, after_ns)

    def open(self) -> list[str]:
        """Return who was taken in and has no answer."""
        return [
            id
            for id, request in self.requests.items()
            if request.accepted_ns is not None and request.final is None
        ]


def _is_answer(message: messages.Message | None) -> bool:
    return isinstance(message, messages.AnswerMessage)


def describes(event: events.Event) -> str:
    """One line about an event, for the story of a run."""
    name = type(event).__name__
    if isinstance(event, events.Received):
        header, peer = event.came.header, event.peer.identity.decode()
        return f"{name} {peer} {header.kind} {header.id}{header.source} {header.number or ''}"
    named = ("worker", "surveyor", "clerk", "job", "batch", "ticket", "task", "revision", "good")
    told = [f"{key}={getattr(event, key)}" for key in (*named, "why") if hasattr(event, key)]
    outcome = getattr(event, "outcome", None)
    if outcome is not None:
        told.append(f"{outcome.kind} {outcome.cost:.2f}")
    return f"{name} {' '.join(told)}"
