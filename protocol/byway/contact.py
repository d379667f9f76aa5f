"""
What stands behind a client's calls: sockets, the daemon's life, what is open.

Opened at the first call, used by one thread. The calls themselves, and what they mean, are in
client.py.
"""

import functools
import os
import secrets
import threading
import time
from collections import deque
from collections.abc import Sequence
from importlib.metadata import version
from typing import Final, TypeVar

import zmq

from byway import frames, limits, messages, obstacles
from byway.conversation import Clock, Patience, Question, Requests, Updates
from byway.ear import Ear, Heard
from byway.endpoints import sibling
from byway.errors import BadReply, BadValue, BywayError, DaemonLost, NewEpoch, TimedOut, from_code
from byway.link import Context, Link, wait
from byway.packed import Bytes
from byway.source import Sent, Source

Told = TypeVar("Told", bound=messages.Message)


class Contact:
    """The contact of one client with one daemon."""

    def __init__(
        self, endpoint: str, patience: Patience, client_id: str | None, clock: Clock
    ) -> None:
        # -- fixed ---------------------------------------------------------------------------------
        self.endpoint: Final = endpoint
        self.patience: Final = patience
        self.clock: Final = clock
        #: In every request id: ids of two clients must never be the same.
        self._token: Final = secrets.token_hex(8)
        self.client_id: Final = self._token if client_id is None else client_id
        # -- owned by the one thread that uses the client ------------------------------------------
        self._owner: tuple[int, int] | None = None
        self._is_closed = False
        self._context: Context | None = None
        self._requests: Requests | None = None
        self._updates: Updates | None = None
        self._source: Final = Source(self._token)
        self._ear: Ear | None = None
        #: Better routes that came in, by the replan that somebody wants them for.
        self._better: dict[str, deque[Heard]] = {}
        #: All that are open, the one above among them.
        self._ears: list[Ear] = []
        self._welcome: messages.Welcome | None = None
        self.epoch = ""
        self._serial = 0
        #: The daemon's wall clock less ours at the last hello, in seconds; for logs only.
        self.clock_offset_s: float | None = None

    # -- who may use it --------------------------------------------------------------------------

    def enter(self) -> None:
        """Refuse with RuntimeError whoever must not use it: every call begins here."""
        if self._is_closed:
            raise RuntimeError("the client is closed")
        me = (os.getpid(), threading.get_ident())
        if self._owner is None:
            self._owner = me
        elif self._owner != me:
            raise RuntimeError(
                "a client belongs to the thread that made its first call, in the process that did; "
                "make one for each thread"
            )

    def close(self) -> None:
        """Close all sockets."""
        if self._is_closed:
            return
        self.enter()
        self._is_closed = True
        for conversation in (self._requests, self._updates):
            if conversation is not None:
                conversation.close()
        for ear in self._ears:
            ear.link.close()
        if self._context is not None:
            self._context.term()

    # -- questions -------------------------------------------------------------------------------

    def hello(self) -> messages.Welcome:
        """Ask who the daemon is."""
        self.enter()
        if not obstacles.is_id(self.client_id):
            raise BadValue(
                f"{self.client_id!r:.80} is no name for a client", {"field": "client_id"}
            )
        asked = messages.Hello(
            versions=[limits.spec_version],
            client=self.client_id,
            software=_software(),
        )
        sent_s = time.time_ns() * 1e-9
        self._welcome = welcome = self.ask(asked, messages.Welcome)
        self.clock_offset_s = welcome.wall_s - 0.5 * (sent_s + time.time_ns() * 1e-9)
        return welcome

    def meet(self) -> messages.Welcome:
        """Be sure that the daemon's endpoints and epoch are known."""
        return self._welcome or self.hello()

    def ask(self, message: messages.Request, told: type[Told]) -> Told:
        """Send a request and return what is in its one reply."""
        found = self.ask_raw(message).message
        if not isinstance(found, told):
            raise BadReply(f"a {found.kind} in reply to {message.kind}")
        return found

    def ask_raw(self, message: messages.Request) -> frames.Received:
        """Send a request and return its one reply."""
        self.enter()
        deadline_s = self.clock() + self.patience.timeout_s
        question = self._talk().ask(self._new_id(), message, deadline_s)
        return self.reply_to(question)

    def begin(self, message: messages.Replan) -> Question:
        """Send a replan, once the daemon has all that it had before."""
        self.meet()
        self._restore()
        question = self._talk().ask(
            self._new_id(),
            message,
            self.clock() + message.budget_s + self.patience.timeout_s,
            epoch=self.epoch,
            work_s=message.budget_s,
        )
        while not question.is_sent:
            self.turn(question)
        return question

    def reply_to(self, question: Question) -> frames.Received:
        """Wait for the reply that ends a question. Raises what it says if that is an error."""
        while question.reply is None:
            self.turn(question)
        received = question.reply
        message = received.message
        if isinstance(message, messages.ErrorMessage):
            error = from_code(message.code, message.text, message.facts, message.retry_after_s)
            if isinstance(error, NewEpoch):
                self._meet_epoch(received.header.epoch)
            raise error
        # One that warms up will not acknowledge anything soon, and is asked about just that.
        match message:
            case messages.Welcome(state="warming") | messages.HealthIs(state="warming"):
                self._meet_epoch(received.header.epoch, restores=False)
            case _:
                self._meet_epoch(received.header.epoch)
        return received

    def turn(self, question: Question) -> None:
        """
        Let the sockets work until something has happened, because of an open question.

        Raises:
            DaemonLost, TimedOut: Nothing more is to be expected.
        """
        requests = self._talk()
        if self.clock() >= question.deadline_s:
            requests.end(question)
            raise self._late(f"request {question.id}", is_connected=requests.is_connected)
        try:
            requests.turn(question.deadline_s, [] if self._ear is None else [self._ear.link])
        except BywayError:
            # The caller hears of it, so it must not be sent by some later call.
            requests.end(question)
            raise
        self._hear()

    def end(self, question: Question) -> None:
        """Nobody waits for this any more."""
        self._better.pop(question.id, None)
        self._talk().end(question)

    def _new_id(self) -> str:
        self._serial += 1
        return f"{self._token}-{self._serial}"

    def _talk(self) -> Requests:
        if self._requests is None:
            link = Link(self._zmq(), self.endpoint)
            self._requests = Requests(link, self.patience, self.clock)
        return self._requests

    # -- the daemon's life -----------------------------------------------------------------------

    def _meet_epoch(self, epoch: str, *, restores: bool = True) -> None:
        """Take note of the daemon's life; give a new one the layers that the old one had."""
        if epoch != self.epoch:
            self.epoch = epoch
            if self._source.epoch != epoch:
                self._source.begin_again(epoch, 0, self.clock())
        if restores:
            self._restore()

    def _restore(self) -> None:
        """Be sure that a new life of the daemon has the layers that the old one had."""
        restoring = [sent for sent in self._source.line if sent.restores]
        if restoring:
            self.settle(restoring)
        self._raise_losses()

    def _raise_losses(self) -> None:
        if self._source.losses:
            loss, *_ = self._source.losses
            self._source.losses.clear()
            raise loss

    # -- changes of the site ---------------------------------------------------------------------

    def change(self, message: messages.AnyChange, packed: Bytes = b"") -> int:
        """Send a change and wait until it is visible; return the revision that has it."""
        self.enter()
        self.meet()
        source, now_s = self._source, self.clock()
        if len(source.line) >= limits.unacknowledged_max:
            # Nothing more is taken on before what is open is settled: the line is bounded.
            self.settle(list(source.line))
        made: list[Sent] = []
        claims = isinstance(message, messages.Claim | messages.ReplaceLayer)
        if not claims and not source.knows(message.layer):
            made.append(source.add(messages.Claim(layer=message.layer), b"", now_s))
        made.append(source.add(message, packed, now_s))
        self.settle(made)
        for sent in made:
            if sent.error is not None:
                raise sent.error
        self._raise_losses()
        return made[-1].revision

    def settle(self, made: Sequence[Sent]) -> None:
        """Wait until these changes are decided."""
        if self._updates is None:
            link = Link(self._zmq(), self._sibling("updates"))
            self._updates = Updates(link, self.patience, self.clock, self._source)
        updates = self._updates
        deadline_s = self.clock() + self.patience.timeout_s
        while not all(sent.is_decided for sent in made):
            if self.clock() >= deadline_s:
                self._source.send_again()  # by the next call, at once
                what = f"{len(self._source.line)} changes"
                raise self._late(what, is_connected=updates.is_connected)
            updates.turn(deadline_s)
        self.epoch = self._source.epoch

    # -- events ----------------------------------------------------------------------------------

    def new_ear(self, topics: Sequence[str]) -> Ear:
        """Listen to some topics, until `close_ear`."""
        ear = Ear(Link(self._zmq(), self._sibling("events"), topics))
        self._ears.append(ear)
        return ear

    def close_ear(self, ear: Ear) -> None:
        """Listen no more; nothing to do if the client was closed before."""
        if not self._is_closed:
            self._ears.remove(ear)
            ear.link.close()

    def check_ear(self, ear: Ear, down_since_s: float | None) -> float | None:
        """Return since when there is no connection. Raises DaemonLost if that is too long."""
        now_s = self.clock()
        if ear.link.is_connected:
            return None
        if down_since_s is None:
            return now_s
        if now_s - down_since_s >= self.patience.reconnect_s:
            raise self._late("events", is_connected=False)
        return down_since_s

    def listen_to(self, unit: str) -> None:
        """Be sure that the next better route of the unit will be heard, if that can be."""
        self.meet()
        topic = f"better.{unit}"
        if self._ear is None:
            self._ear = self.new_ear([])
        ear = self._ear
        ear.link.subscribe(topic)
        until_s = self.clock() + self.patience.listen_s
        while topic not in ear.confirmed and self.clock() < until_s:
            wait([(ear.link, False)], until_s, self.clock)
            self._hear()

    def want_better(self, replan: str) -> deque[Heard]:
        """Return where the better routes of a replan will be, until it ends."""
        return self._better.setdefault(replan, deque())

    def _hear(self) -> None:
        if self._ear is None:
            return
        self._ear.look()
        while (heard := self._ear.next()) is not None:
            is_better = isinstance(heard.received.message, messages.BetterMessage)
            wanted = self._better.get(heard.received.header.id)
            if is_better and wanted is not None:
                wanted.append(heard)

    # -- within ----------------------------------------------------------------------------------

    def _zmq(self) -> Context:
        if self._context is None:
            self._context = zmq.Context()
        return self._context

    def _sibling(self, socket: str) -> str:
        welcome = self.meet()
        offered = welcome.updates_endpoints if socket == "updates" else welcome.events_endpoints
        return sibling(self.endpoint, socket, offered)

    def _late(self, what: str, *, is_connected: bool) -> BywayError:
        facts = {"endpoint": self.endpoint}
        if is_connected:
            return TimedOut(f"{self.endpoint} has not replied to {what} in time", facts)
        return DaemonLost(f"no connection to {self.endpoint} for {what}", facts)


@functools.cache
def _software() -> str:
    # Looked up once: reading the metadata of a package takes longer than the whole round trip.
    return f"byway {version('byway')}"
