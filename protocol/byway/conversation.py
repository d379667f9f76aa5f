"""
The two conversations with a daemon: questions on the requests socket, changes on the updates one.

Both go on over lost connections: what is open is sent again on a fresh socket, with the same id or
number, so that the daemon does it once. Neither waits by itself: `work` takes in what came, or
sends what is to be sent; `waits_for` says what to wait for before the next time.
"""

import math
from abc import ABC, abstractmethod
from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

from byway import frames, messages
from byway.errors import BadReply, BywayError, DaemonLost, Forbidden, SenderFault, from_code
from byway.link import Link
from byway.packed import Bytes
from byway.source import Source

#: How long a source that was sent away waits before it tries again by itself.
_HOLD_S: Final = 0.1
#: How long a client that was not let in waits before it knocks again.
_KNOCK_AGAIN_S: Final = 0.5

#: What a client reads from its clock: seconds, from anywhere.
Clock = Callable[[], float]


@dataclass(frozen=True, slots=True)
class Patience:
    """
    How long a client waits for what, in seconds.

    Attributes:
        timeout_s: For the reply to a call; a replan adds its budget.
        reconnect_s: For a connection, when there is none.
        repeat_s: For a sign of life before a message is sent again; doubles each time.
        listen_s: For the daemon's word that a subscription has reached it.
    """

    timeout_s: float = 5.0
    reconnect_s: float = 1.0
    repeat_s: float = 1.0
    listen_s: float = 0.25


class Line(ABC):
    """What both conversations have in common: a link, and since when it has been down."""

    def __init__(self, link: Link, patience: Patience, clock: Clock) -> None:
        self.link: Final = link
        self._patience: Final = patience
        self._clock: Final = clock
        #: Since when something could not be sent.
        self._down_since_s: float | None = None
        #: Since when the daemon does not let us in.
        self._refused_at_s: float | None = None
        #: How many messages have come.
        self.came = 0

    @property
    def is_connected(self) -> bool:
        """Whether there is a connection, as far as is known."""
        return self.link.is_connected

    def close(self) -> None:
        """End the conversation."""
        self.link.close()

    def work(self) -> bool:
        """
        Take in what has come; if nothing has, send what is to be sent.

        Returns:
            Whether something had come.

        Raises:
            BadReply; and what the daemon says to a source as a whole.
        """
        # What came since the last time counts, however long ago that was.
        if self.take_in():
            return True
        now_s = self._clock()
        self._renew(now_s)
        self._send(now_s)
        return False

    def check(self, since_s: float) -> None:
        """Raise DaemonLost or Forbidden if somebody has waited for a connection since then."""
        if self._refused_at_s is not None and self._refused_at_s >= since_s:
            raise turned_away(self.link)
        if self._clock() >= self._given_up_at_s(since_s):
            why = f": it {self.link.trouble}" if self.link.trouble else ""
            raise DaemonLost(
                f"no connection to {self.link.endpoint} within "
                f"{self._patience.reconnect_s:g} s{why}",
                {"endpoint": self.link.endpoint},
            )

    def _given_up_at_s(self, since_s: float) -> float:
        if self._down_since_s is None:
            return math.inf
        return max(self._down_since_s, since_s) + self._patience.reconnect_s

    def waits_for(self, since_s: float = math.inf) -> tuple[tuple[Link, bool], float]:
        """
        Return what to wait for, and when to work again at the latest.

        Args:
            since_s: Since when somebody waits, see `check`.
        """
        at_s = min(self._wake_s(), self._given_up_at_s(since_s))
        if self._refused_at_s is not None:
            at_s = min(at_s, self._refused_at_s + _KNOCK_AGAIN_S)
        return (self.link, self._wants_to_send()), at_s

    def take_in(self) -> bool:
        """Take in all messages that have come; tell whether there were any. Raises BadReply."""
        any_came = False
        while (parts := self.link.receive()) is not None:
            self.came += 1
            try:
                received = frames.decode(parts, frames.REPLIES)
            except SenderFault as fault:
                raise BadReply(
                    f"{self.link.endpoint} sent what cannot be read: {fault.text}", fault.facts
                ) from fault
            self._take_in(received)
            any_came = True
        return any_came

    def _look(self) -> bool:
        """Take note of the connection; tell whether a fresh one was begun."""
        self.link.look()
        if self.link.is_refused:
            now_s = self._clock()
            if self._refused_at_s is None:
                self._refused_at_s = now_s
            if now_s < self._refused_at_s + _KNOCK_AGAIN_S:
                return False
        elif not self.link.is_lost:
            return False
        self._refused_at_s = None
        self.link.reopen()
        return True

    def _note_sent(self, now_s: float, *, is_sent: bool) -> bool:
        """Take note that something could be sent, or could not."""
        if is_sent:
            self._down_since_s = None
        elif self._down_since_s is None:
            self._down_since_s = now_s
        return is_sent

    @abstractmethod
    def _renew(self, now_s: float) -> None:
        """Look after the connection and after what is overdue."""

    @abstractmethod
    def _send(self, now_s: float) -> None:
        """Send what is to be sent, as far as that can be."""

    @abstractmethod
    def _wants_to_send(self) -> bool:
        """Whether something waits for a connection."""

    @abstractmethod
    def _wake_s(self) -> float:
        """Return when something is due."""

    @abstractmethod
    def _take_in(self, received: frames.Received) -> None:
        """Take in one message."""


def turned_away(link: Link) -> BywayError:
    """Return the error for a link that the daemon has turned away."""
    text = f"the daemon at {link.endpoint} {link.trouble}"
    return Forbidden(text, {"endpoint": link.endpoint})


@dataclass(slots=True, eq=False)
class Question:
    """
    One request and the reply to it.

    Attributes:
        work_s: How long the daemon may take after it has said `accepted`.
        asked_s: When it was made.
        deadline_s: When nobody waits for it any more.
        reply: The one that ends it, once it is there.
    """

    id: str
    parts: list[Bytes]
    work_s: float
    asked_s: float
    deadline_s: float
    repeat_s: float
    reply: frames.Received | None = None
    is_sent: bool = False
    repeat_at_s: float = 0.0


class Requests(Line):
    """The conversation on the requests socket. Any number of questions may be open."""

    def __init__(self, link: Link, patience: Patience, clock: Clock) -> None:
        super().__init__(link, patience, clock)
        #: Without a reply, and still waited for.
        self._open: dict[str, Question] = {}

    def ask(
        self,
        id: str,
        message: messages.Request,
        deadline_s: float,
        *,
        packed: Bytes = b"",
        epoch: str = "",
        work_s: float = 0.0,
    ) -> Question:
        """Open a question; it is sent when there is work next."""
        parts = frames.encode(frames.Header(message.kind, id, epoch=epoch), message, packed)
        repeat_s = self._patience.repeat_s
        question = Question(id, parts, work_s, self._clock(), deadline_s, repeat_s)
        self._open[id] = question
        return question

    def end(self, question: Question) -> None:
        """Be no longer interested in the replies to a question."""
        self._open.pop(question.id, None)

    def _renew(self, now_s: float) -> None:
        for question in [each for each in self._open.values() if now_s >= each.deadline_s]:
            self.end(question)
        if self._look() or self._is_silent(now_s):
            for question in self._open.values():
                question.is_sent = False

    def _is_silent(self, now_s: float) -> bool:
        """Tell whether a reply is overdue, and begin a fresh connection if so."""
        overdue = [
            each for each in self._open.values() if each.is_sent and now_s >= each.repeat_at_s
        ]
        for question in overdue:
            question.repeat_s *= 2.0
        if overdue:
            self.link.reopen()
        return bool(overdue)

    def _send(self, now_s: float) -> None:
        for question in self._open.values():
            if question.is_sent:
                continue
            question.is_sent = self._note_sent(now_s, is_sent=self.link.send(question.parts))
            if not question.is_sent:
                return
            question.repeat_at_s = now_s + question.repeat_s

    def _wants_to_send(self) -> bool:
        return any(not question.is_sent for question in self._open.values())

    def _wake_s(self) -> float:
        return min(
            (each.repeat_at_s for each in self._open.values() if each.is_sent), default=math.inf
        )

    def _take_in(self, received: frames.Received) -> None:
        question = self._open.get(received.header.id)
        if question is None:
            return  # a reply to a repeat, or to somebody who has given up
        if isinstance(received.message, messages.Accepted):
            question.repeat_at_s = self._clock() + question.work_s + question.repeat_s
            return
        question.reply = received
        self.end(question)


class Updates(Line):
    """The conversation on the updates socket: brings the line of a source to the daemon."""

    def __init__(self, link: Link, patience: Patience, clock: Clock, source: Source) -> None:
        super().__init__(link, patience, clock)
        self._source: Final = source
        self._repeat_s = patience.repeat_s
        self._repeat_at_s = 0.0
        self._hold_until_s = 0.0
        #: The connection is a fresh one: perhaps to another life of the daemon.
        self._wonders = False

    def _renew(self, now_s: float) -> None:
        source = self._source
        if self._look():
            self._wonders, self._hold_until_s = True, 0.0
            source.send_again()
        elif source.line and not source.has_unsent and now_s >= self._repeat_at_s:
            self._repeat_s *= 2.0
            self.link.reopen()
            source.send_again()
        if self._wonders and self.is_connected:
            self._wonders = False
            source.keep(now_s, asks_who_is_there=True)
        elif now_s >= source.keep_at_s():
            source.keep(now_s)

    def _send(self, now_s: float) -> None:
        if now_s < self._hold_until_s:
            return
        for parts in self._source.unsent(now_s):
            if not self._note_sent(now_s, is_sent=self.link.send(parts)):
                return
            self._repeat_at_s = now_s + self._repeat_s

    def _wants_to_send(self) -> bool:
        return self._source.has_unsent and self._clock() >= self._hold_until_s

    def _wake_s(self) -> float:
        source = self._source
        if self._clock() < self._hold_until_s:
            return self._hold_until_s
        if source.line and not source.has_unsent:
            return self._repeat_at_s
        return source.keep_at_s()

    def _take_in(self, received: frames.Received) -> None:
        source, now_s, epoch = self._source, self._clock(), received.header.epoch
        self._repeat_s = self._patience.repeat_s
        self._repeat_at_s = now_s + self._repeat_s
        match received.message:
            case messages.Resend() as message if message.source == source.name:
                source.resend(message, epoch, now_s)
                self._hold_until_s = now_s + (message.retry_after_s or 0.0)
            case messages.Acknowledged() as message if self._is_ours(message.source, epoch):
                source.acknowledged(message, now_s)
            case messages.Refused() as message if self._is_ours(message.source, epoch):
                source.refused(message)
            case messages.ErrorMessage(code=Forbidden.default_code) as message:
                # Of no number that the daemon counts: it does not know this source at all.
                error = from_code(message.code, message.text, message.facts)
                if not source.turned_away(received.header.id, error):
                    raise error
            case messages.ErrorMessage() as message:
                source.send_again()
                self._hold_until_s = now_s + (message.retry_after_s or _HOLD_S)
                raise from_code(message.code, message.text, message.facts, message.retry_after_s)

    def _is_ours(self, source: str, epoch: str) -> bool:
        # What an earlier life of the daemon said is about other numbers.
        return source == self._source.name and epoch == self._source.epoch
