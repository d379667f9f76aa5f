"""
The two conversations with a daemon: questions on the requests socket, changes on the updates one.

Both go on over lost connections: what is open is sent again on a fresh socket, with the same id or
number, so that the daemon does it once. Neither waits by itself: a turn sends what is to be sent,
waits until something happens or a given time, and takes in what came.
"""

from abc import ABC, abstractmethod
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Final

from byway import frames, messages
from byway.errors import BadReply, DaemonLost, SenderFault, from_code
from byway.link import Link, wait
from byway.packed import Bytes
from byway.source import Source

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


class _Line(ABC):
    """What both conversations have in common: a link, and since when it has been down."""

    def __init__(self, link: Link, patience: Patience, clock: Clock) -> None:
        self._link = link
        self._patience: Final = patience
        self._clock: Final = clock
        self._down_since_s: float | None = None

    @property
    def is_connected(self) -> bool:
        """Whether there is a connection, as far as is known."""
        return self._link.is_connected

    def close(self) -> None:
        """End the conversation."""
        self._link.close()

    def _look(self, now_s: float) -> bool:
        """Take note of the connection; tell whether a fresh one was begun."""
        self._link.look()
        if not self._link.is_lost:
            return False
        self._link.reopen()
        self._down_since_s = now_s
        return True

    def _note_sent(self, now_s: float, *, is_sent: bool) -> None:
        """
        Take note that something could be sent, or could not.

        Raises:
            DaemonLost: If there has been no connection for too long.
        """
        if is_sent:
            self._down_since_s = None
            return
        if self._down_since_s is None:
            self._down_since_s = now_s
        if now_s - self._down_since_s >= self._patience.reconnect_s:
            self._down_since_s = None
            raise DaemonLost(
                f"no connection to {self._link.endpoint} within {self._patience.reconnect_s:g} s",
                {"endpoint": self._link.endpoint},
            )

    def _wake_s(self, until_s: float, repeat_at_s: Sequence[float]) -> float:
        if self._down_since_s is not None:
            until_s = min(until_s, self._down_since_s + self._patience.reconnect_s)
        return min([until_s, *repeat_at_s])

    def _take_in_all(self) -> bool:
        """Take in all messages that have come; tell whether there were any. Raises BadReply."""
        any_came = False
        while (parts := self._link.receive()) is not None:
            try:
                received = frames.decode(parts, frames.REPLIES)
            except SenderFault as fault:
                raise BadReply(
                    f"{self._link.endpoint} sent what cannot be read: {fault.text}", fault.facts
                ) from fault
            self._take_in(received)
            any_came = True
        return any_came

    @abstractmethod
    def _take_in(self, received: frames.Received) -> None:
        """Take in one message."""


@dataclass(slots=True, eq=False)
class Question:
    """
    One request and the reply to it.

    Attributes:
        work_s: How long the daemon may take after it has said `accepted`.
        deadline_s: When nobody waits for it any more.
        reply: The one that ends it, once it is there.
    """

    id: str
    parts: list[Bytes]
    work_s: float
    deadline_s: float
    repeat_s: float
    reply: frames.Received | None = None
    is_sent: bool = False
    repeat_at_s: float = 0.0


class Requests(_Line):
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
        epoch: str = "",
        work_s: float = 0.0,
    ) -> Question:
        """Open a question; the next turn sends it."""
        parts = frames.encode(frames.Header(message.kind, id, epoch=epoch), message)
        question = Question(id, parts, work_s, deadline_s, self._patience.repeat_s)
        self._open[id] = question
        return question

    def end(self, question: Question) -> None:
        """Be no longer interested in the replies to a question."""
        self._open.pop(question.id, None)

    def turn(self, until_s: float, others: Sequence[Link] = ()) -> None:
        """
        Send, wait, take in.

        Args:
            until_s: When to return at the latest, by the clock.
            others: Links whose messages end the waiting as well.

        Raises:
            DaemonLost, BadReply.
        """
        # What came since the last turn counts, however long ago that was.
        if self._take_in_all():
            return
        now_s = self._clock()
        for question in [each for each in self._open.values() if now_s >= each.deadline_s]:
            self.end(question)
        if self._look(now_s) or self._is_silent(now_s):
            for question in self._open.values():
                question.is_sent = False
        self._send(now_s)
        unsent = any(not question.is_sent for question in self._open.values())
        repeats_s = [each.repeat_at_s for each in self._open.values() if each.is_sent]
        wake_s = self._wake_s(until_s, repeats_s)
        wait([(self._link, unsent), *((other, False) for other in others)], wake_s, self._clock)
        self._take_in_all()

    def _is_silent(self, now_s: float) -> bool:
        """Tell whether a reply is overdue, and begin a fresh connection if so."""
        overdue = [
            each for each in self._open.values() if each.is_sent and now_s >= each.repeat_at_s
        ]
        for question in overdue:
            question.repeat_s *= 2.0
        if overdue:
            self._link.reopen()
        return bool(overdue)

    def _send(self, now_s: float) -> None:
        for question in self._open.values():
            if question.is_sent:
                continue
            question.is_sent = self._link.send(question.parts)
            self._note_sent(now_s, is_sent=question.is_sent)
            if not question.is_sent:
                return
            question.repeat_at_s = now_s + question.repeat_s

    def _take_in(self, received: frames.Received) -> None:
        question = self._open.get(received.header.id)
        if question is None:
            return  # a reply to a repeat, or to somebody who has given up
        if isinstance(received.message, messages.Accepted):
            question.repeat_at_s = self._clock() + question.work_s + question.repeat_s
            return
        question.reply = received
        self.end(question)


class Updates(_Line):
    """The conversation on the updates socket: brings the line of a source to the daemon."""

    def __init__(self, link: Link, patience: Patience, clock: Clock, source: Source) -> None:
        super().__init__(link, patience, clock)
        self._source: Final = source
        self._repeat_s = patience.repeat_s
        self._repeat_at_s = 0.0
        self._hold_until_s = 0.0

    def turn(self, until_s: float) -> None:
        """
        Send, wait, take in.

        Raises:
            DaemonLost, BadReply; and what the daemon says to the source as a whole, such as
            Stopping: the changes stay in the line.
        """
        # What came since the last turn counts, however long ago that was.
        if self._take_in_all():
            return
        source, now_s = self._source, self._clock()
        if self._look(now_s):
            source.send_again()
        elif source.line and not source.has_unsent and now_s >= self._repeat_at_s:
            self._repeat_s *= 2.0
            self._link.reopen()
            source.send_again()
        self._send(now_s)
        wakes_s = [self._repeat_at_s] if source.line and not source.has_unsent else []
        holds = now_s < self._hold_until_s
        if holds:
            wakes_s = [self._hold_until_s]
        wake_s = self._wake_s(until_s, wakes_s)
        wait([(self._link, source.has_unsent and not holds)], wake_s, self._clock)
        self._take_in_all()

    def _send(self, now_s: float) -> None:
        if now_s < self._hold_until_s:
            return
        for parts in self._source.unsent():
            is_sent = self._link.send(parts)
            self._note_sent(now_s, is_sent=is_sent)
            if not is_sent:
                return
            self._repeat_at_s = now_s + self._repeat_s

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
            case messages.ErrorMessage() as message:
                source.send_again()
                raise from_code(message.code, message.text, message.facts, message.retry_after_s)

    def _is_ours(self, source: str, epoch: str) -> bool:
        # What an earlier life of the daemon said is about other numbers.
        return source == self._source.name and epoch == self._source.epoch
