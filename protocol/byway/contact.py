"""
What stands behind a client's calls: sockets, the daemon's life, what is open.

Opened at the first call, used by one thread. What takes a while is a generator of steps, which a
blocking client and an event loop drive alike. The calls themselves, and what they mean, are in
client.py and aio.py.
"""

import contextlib
import functools
import math
import os
import secrets
import threading
import time
from collections import deque
from collections.abc import Callable, Sequence
from importlib.metadata import version
from typing import Final, TypeVar

import zmq

from byway import frames, limits, messages, obstacles
from byway.changing import Made
from byway.conversation import (
    Clock,
    Line,
    Patience,
    Question,
    Requests,
    Updates,
    turned_away,
)
from byway.ear import Ear, Heard
from byway.endpoints import sibling
from byway.errors import BadReply, BadValue, BywayError, DaemonLost, NewEpoch, TimedOut, from_code
from byway.keys import KeysFrom, client_keys
from byway.link import Context, Link, Steps, Waiting
from byway.packed import Bytes
from byway.source import Sent, Source

Told = TypeVar("Told", bound=messages.Message)


class Contact:
    """The contact of one client with one daemon."""

    def __init__(
        self,
        endpoint: str,
        patience: Patience,
        client_id: str | None,
        clock: Clock,
        keys: KeysFrom | None = None,
    ) -> None:
        # -- fixed ---------------------------------------------------------------------------------
        self.endpoint: Final = endpoint
        self.patience: Final = patience
        self.clock: Final = clock
        self._keys: Final = None if keys is None else client_keys(keys)
        #: In every request id: ids of two clients must never be the same.
        self._token: Final = secrets.token_hex(8)
        self.client_id: Final = self._token if client_id is None else client_id
        # -- owned by the one thread that uses the client ------------------------------------------
        self._owner: tuple[int, int] | None = None
        self.is_closed = False
        self._context: Context | None = None
        self._requests: Requests | None = None
        self._updates: Updates | None = None
        self.source: Final = Source(self._token)
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
        #: Called before a socket is closed.
        self.before_close: Callable[[], object] = lambda: None

    # -- who may use it --------------------------------------------------------------------------

    def enter(self) -> None:
        """Refuse with RuntimeError whoever must not use it: every call begins here."""
        if self.is_closed:
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
        if self.is_closed:
            return
        self.enter()
        self.is_closed = True
        for conversation in (self._requests, self._updates):
            if conversation is not None:
                conversation.close()
        for ear in self._ears:
            ear.link.close()
        if self._context is not None:
            self._context.term()

    # -- questions -------------------------------------------------------------------------------

    def hello(self) -> Steps[messages.Welcome]:
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
        self._welcome = welcome = yield from self.ask(asked, messages.Welcome)
        self.clock_offset_s = welcome.wall_s - 0.5 * (sent_s + time.time_ns() * 1e-9)
        return welcome

    def meet(self) -> Steps[messages.Welcome]:
        """Be sure that the daemon's endpoints and epoch are known."""
        return self._welcome or (yield from self.hello())

    def ask(self, message: messages.Request, told: type[Told], packed: Bytes = b"") -> Steps[Told]:
        """Send a request and return what is in its one reply."""
        found = (yield from self.ask_raw(message, packed)).message
        if not isinstance(found, told):
            raise BadReply(f"a {found.kind} in reply to {message.kind}")
        return found

    def ask_raw(self, message: messages.Request, packed: Bytes = b"") -> Steps[frames.Received]:
        """Send a request and return its one reply."""
        self.enter()
        deadline_s = self.clock() + self.patience.timeout_s
        question = self._talk().ask(self._new_id(), message, deadline_s, packed=packed)
        try:
            return (yield from self.reply_to(question))
        finally:
            # The caller hears of it, so it must not be sent by some later call.
            self._talk().end(question)

    def begin(self, message: messages.Replan, *, wants_better: bool = False) -> Steps[Question]:
        """Send a replan, once the daemon has all that it had before."""
        yield from self.meet()
        yield from self._restore()
        question = self._talk().ask(
            self._new_id(),
            message,
            self.clock() + message.budget_s + self.patience.timeout_s,
            epoch=self.epoch,
            work_s=message.budget_s,
        )
        if wants_better:
            self.want_better(question.id)  # the first may come together with `accepted`
        try:
            while not question.is_sent:
                yield from self.turn(question)
        except BaseException:
            self.end(question)
            raise
        return question

    def reply_to(self, question: Question) -> Steps[frames.Received]:
        """Wait for the reply that ends a question. Raises what it says if that is an error."""
        while question.reply is None:
            yield from self.turn(question)
        received = question.reply
        message = received.message
        if isinstance(message, messages.ErrorMessage):
            error = from_code(message.code, message.text, message.facts, message.retry_after_s)
            if isinstance(error, NewEpoch):
                yield from self._meet_epoch(received.header.epoch)
            raise error
        # One that warms up will not acknowledge anything soon, and is asked about just that.
        match message:
            case messages.Welcome(state="warming") | messages.HealthIs(state="warming"):
                yield from self._meet_epoch(received.header.epoch, restores=False)
            case _:
                yield from self._meet_epoch(received.header.epoch)
        return received

    def turn(self, question: Question) -> Steps[None]:
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
            since_s = math.inf if question.is_sent else question.asked_s
            yield from self._turn(requests, question.deadline_s, since_s)
        except BywayError:
            requests.end(question)
            raise

    def _turn(self, line: Line, until_s: float, since_s: float) -> Steps[None]:
        """
        Let one conversation work, and wait until something has happened, on any of them.

        Raises:
            DaemonLost, BadReply; and what the daemon says to the source as a whole, such as
            Stopping: the changes stay in the line.
        """
        if line.work():
            self._hear()
            return
        line.check(since_s)
        link, wake_s = line.waits_for(since_s)
        links, wakes_s = [link], [until_s, wake_s]
        for other in (self._requests, self._updates):
            if other is None or other is line:
                continue
            # Nobody waits for it, so nobody hears of its faults; whoever does will meet them.
            with contextlib.suppress(BywayError):
                other.work()
            link, wake_s = other.waits_for()
            links.append(link)
            wakes_s.append(wake_s)
        if self._ear is not None:
            links.append((self._ear.link, False))
        yield Waiting(links, min(wakes_s))
        line.take_in()
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
            self._requests = Requests(self._link(self.endpoint), self.patience, self.clock)
        return self._requests

    # -- the daemon's life -----------------------------------------------------------------------

    def _meet_epoch(self, epoch: str, *, restores: bool = True) -> Steps[None]:
        """Take note of the daemon's life; give a new one the layers that the old one had."""
        if epoch != self.epoch:
            self.epoch = epoch
            if self.source.epoch != epoch:
                self.source.begin_again(epoch, 0, self.clock())
        if restores:
            yield from self._restore()

    def _restore(self) -> Steps[None]:
        """Be sure that a new life of the daemon has the layers that the old one had."""
        restoring = [sent for sent in self.source.line if sent.purpose == "restore"]
        if restoring:
            yield from self.settle(restoring)
        self.raise_losses()

    def raise_losses(self, layer: str | None = None) -> None:
        """Raise the first refusal that nobody has heard of: of a layer, or of all not kept."""
        for name, error in self.source.losses:
            if name == layer or (layer is None and name not in self.source.kept):
                # Of one event there may be several; the first says it.
                self.source.losses = [
                    each
                    for each in self.source.losses
                    if each[0] != layer and (layer is not None or each[0] in self.source.kept)
                ]
                raise error

    # -- changes of the site ---------------------------------------------------------------------

    def change(self, changes: Sequence[Made]) -> Steps[int]:
        """Send changes and wait until they are visible; return the revision that has them."""
        self.enter()
        yield from self.meet()
        revision = 0
        for made in changes:
            yield from self.make_room(limits.unacknowledged_max)
            sent = self.add(made)
            yield from self.settle(sent)
            for each in sent:
                if each.error is not None:
                    raise each.error
            revision = sent[-1].revision
        self.raise_losses()
        return revision

    def make_room(self, window: int, layer: str | None = None) -> Steps[None]:
        """Be sure that fewer changes than that are undecided: of a layer, or of all."""
        line = [
            each
            for each in self.source.line
            if not each.is_decided and layer in (None, each.message.layer)
        ]
        if len(line) >= window:
            yield from self.settle(line[: len(line) - window + 1])

    def add(self, made: Made, *, is_awaited: bool = True) -> list[Sent]:
        """Put a change in the line, after a claim if its layer is not this source's yet."""
        source, now_s = self.source, self.clock()
        message, packed = made
        sent: list[Sent] = []
        claims = isinstance(message, messages.Claim | messages.ReplaceLayer)
        if not claims and not source.knows(message.layer):
            claim = messages.Claim(layer=message.layer)
            sent.append(source.add(claim, b"", now_s, is_awaited=is_awaited))
        sent.append(source.add(message, packed, now_s, is_awaited=is_awaited))
        return sent

    def settle(self, made: Sequence[Sent]) -> Steps[None]:
        """Wait until these changes are decided."""
        began_s = self.clock()
        deadline_s = began_s + self.patience.timeout_s
        while not all(sent.is_decided for sent in made):
            updates = yield from self._bring()
            if self.clock() >= deadline_s:
                self.source.send_again()  # by the next call, at once
                what = f"{len(self.source.line)} changes"
                raise self._late(what, is_connected=updates.is_connected)
            yield from self._turn(updates, deadline_s, began_s)
        self.epoch = self.source.epoch

    def _bring(self) -> Steps[Updates]:
        if self._updates is None:
            link = self._link((yield from self._sibling("updates")))
            self._updates = Updates(link, self.patience, self.clock, self.source)
        return self._updates

    def work(self) -> None:
        """Send what can be sent, and take in what has come, without waiting."""
        for line in (self._requests, self._updates):
            with contextlib.suppress(BywayError):
                # What came first, then what is to be sent.
                while line is not None and line.work():
                    pass

    def idle(self, until_s: float) -> Steps[None]:
        """
        Look after what is open until then; return earlier if something has happened.

        Faults of the link are passed over: it goes on as soon as that can be.
        """
        with contextlib.suppress(BywayError):
            updates = yield from self._bring()
            yield from self._turn(updates, until_s, math.inf)
            return
        # It was sent away, or the daemon is not there yet: not again at once.
        yield Waiting([], min(until_s, self.clock() + 0.1))

    # -- events ----------------------------------------------------------------------------------

    def new_ear(self, topics: Sequence[str]) -> Steps[Ear]:
        """Listen to some topics, until `close_ear`."""
        ear = Ear(self._link((yield from self._sibling("events")), topics))
        self._ears.append(ear)
        return ear

    def close_ear(self, ear: Ear) -> None:
        """Listen no more; nothing to do if the client was closed before."""
        if not self.is_closed:
            self._ears.remove(ear)
            ear.link.close()

    def next_event(self, ear: Ear, until_s: float) -> Steps[Heard | None]:
        """
        Return the next event; None: there was none until then.

        Raises:
            DaemonLost: If there is no connection for too long.
        """
        self.enter()
        down_since_s: float | None = None
        while True:
            ear.look()
            if (heard := ear.next()) is not None:
                return heard
            now_s = self.clock()
            if now_s >= until_s:
                return None
            if ear.link.is_connected:
                down_since_s, wake_s = None, math.inf
            else:
                down_since_s = now_s if down_since_s is None else down_since_s
                wake_s = down_since_s + self.patience.reconnect_s
                if ear.link.is_refused:
                    raise turned_away(ear.link)
                if now_s >= wake_s:
                    raise self._late("events", is_connected=False, trouble=ear.link.trouble)
            yield Waiting([(ear.link, False)], min(until_s, wake_s))

    def listen_to(self, unit: str) -> Steps[None]:
        """Be sure that the next better route of the unit will be heard, if that can be."""
        yield from self.meet()
        topic = f"better.{unit}"
        if self._ear is None:
            self._ear = yield from self.new_ear([])
        ear = self._ear
        if ear.link.is_refused:
            ear.link.reopen()  # perhaps the key is known by now
        ear.link.subscribe(topic)
        until_s = self.clock() + self.patience.listen_s
        while topic not in ear.confirmed and self.clock() < until_s:
            yield Waiting([(ear.link, False)], until_s)
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

    @property
    def came(self) -> int:
        """How many messages have come: more of them may be what somebody else waits for."""
        lines = sum(each.came for each in (self._requests, self._updates) if each is not None)
        return lines + sum(ear.came for ear in self._ears)

    def _link(self, endpoint: str, topics: Sequence[str] | None = None) -> Link:
        if self._context is None:
            self._context = zmq.Context()
        link = Link(self._context, endpoint, topics, self._keys)
        link.before_close = lambda: self.before_close()
        return link

    def _sibling(self, socket: str) -> Steps[str]:
        welcome = yield from self.meet()
        offered = welcome.updates_endpoints if socket == "updates" else welcome.events_endpoints
        return sibling(self.endpoint, socket, offered)

    def _late(self, what: str, *, is_connected: bool, trouble: str = "") -> BywayError:
        facts = {"endpoint": self.endpoint}
        if is_connected:
            return TimedOut(f"{self.endpoint} has not replied to {what} in time", facts)
        why = f": it {trouble}" if trouble else ""
        return DaemonLost(f"no connection to {self.endpoint} for {what}{why}", facts)


@functools.cache
def _software() -> str:
    # Looked up once: reading the metadata of a package takes longer than the whole round trip.
    return f"byway {version('byway')}"
