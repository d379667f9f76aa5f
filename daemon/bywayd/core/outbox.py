"""
What a turn of the front wants done, in order, and how messages to the outside are made out.

Everything that leaves the core goes through here: headers are made in one place, streams on the
events socket are numbered in one place, and every final answer is counted where it leaves.
"""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Mapping
from typing import Literal

from byway import limits
from byway.frames import Header
from byway.messages import ErrorMessage, Message
from byway.packed import Bytes
from bywayd.core.effects import Effect, Log, Publish, Reply
from bywayd.core.events import Peer


class Outbox:
    """Owned by the front; its parts put effects in, `take` empties it."""

    __slots__ = ("_effects", "_streams", "_streams_max", "epoch")

    def __init__(self, epoch: str, streams_max: int) -> None:
        self.epoch = epoch
        self._effects: list[Effect] = []
        #: The last number of each topic; the topic used last comes last. Bounded.
        self._streams: OrderedDict[str, int] = OrderedDict()
        self._streams_max = streams_max

    def add(self, effect: Effect) -> None:
        """Put an effect at the end."""
        self._effects.append(effect)

    def reply(
        self,
        peer: Peer,
        to: Header | None,
        message: Message,
        packed: Bytes = b"",
    ) -> None:
        """Answer a peer; `to` is the header of what it sent, if that is answered as such."""
        if to is None:
            header = Header(message.kind, epoch=self.epoch)
        else:
            header = Header(message.kind, to.id, epoch=self.epoch, traceparent=to.traceparent)
        self._effects.append(Reply(peer, header, message, packed))

    def error(
        self,
        peer: Peer,
        to: Header | None,
        code: str,
        text: str,
        facts: Mapping[str, object] | None = None,
        *,
        retry_after_s: float | None = None,
    ) -> None:
        """Answer a peer with an error."""
        self.reply(peer, to, error_of(code, text, facts, retry_after_s))

    def publish(self, topic: str, message: Message, packed: Bytes = b"", *, id: str = "") -> None:
        """Tell whoever listens to a topic."""
        number = self._streams.pop(topic, 0) + 1
        self._streams[topic] = number
        if len(self._streams) > self._streams_max:
            # Whoever still listens sees the numbers begin again, which is no gap.
            self._streams.popitem(last=False)
        header = Header(message.kind, id, number=number, epoch=self.epoch)
        self._effects.append(Publish(topic, header, message, packed))

    def log(
        self, level: Literal["debug", "info", "warning", "error"], event: str, **facts: object
    ) -> None:
        """Write a line."""
        self._effects.append(Log(level, event, facts))

    def take(self) -> list[Effect]:
        """Return what was put in since the last time, in order."""
        effects, self._effects = self._effects, []
        return effects

    @property
    def stream_count(self) -> int:
        """How many topics are numbered."""
        return len(self._streams)


def error_of(
    code: str,
    text: str,
    facts: Mapping[str, object] | None = None,
    retry_after_s: float | None = None,
) -> ErrorMessage:
    """Return the message for an error; a text that is too long for the wire is cut."""
    return ErrorMessage(
        code=code,
        text=text[: limits.text_chars_max],
        facts=dict(facts or {}),
        retry_after_s=retry_after_s,
    )
