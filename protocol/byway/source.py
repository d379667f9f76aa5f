"""
A source: whoever changes the site, its numbers, and what it must be able to send again.

Plain state, no socket and no clock of its own. Changes get numbers in the order in which they are
made, and stay in the line until the daemon has decided them. What was decided goes into the
record of its layer, so that a daemon that was started again can be given the whole of it: the
obstacles, those that expire with the time that they have left, the last patches, and what moves or
was scanned as long as that is fresh.

Layers that are *kept* have somebody who looks after them all the time: their lease is renewed, and
after every loss of the connection the daemon is asked whether it still knows them.
"""

import math
from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Final, Literal, TypeAlias

from byway import frames, limits, messages
from byway.errors import BywayError, NewEpoch, from_code
from byway.held import HeldLayer
from byway.packed import Bytes

#: The refusal that makes a layer somebody else's business.
_LOST_WITH: Final = "not_owner"
#: A lease is renewed when so much of it has passed.
_RENEWED_AFTER: Final = 1.0 / 3.0
#: A change that waits longer than this is told as what it is by then: older.
_AGES_AFTER_S: Final = 0.01

#: What has expired on the way is told all the same, for it takes the place of what is there.
_LEAST_EXPIRY_S: Final = 0.001

#: Made by a caller; what a new life of the daemon is given again; a sign of life.
Purpose: TypeAlias = Literal["change", "restore", "keep"]


@dataclass(slots=True, eq=False)
class Sent:
    """
    One change on its way.

    Attributes:
        message, packed: As made; they do not change when they are numbered anew.
        number: The present one.
        purpose: Why it is sent.
        is_awaited: A caller waits for the verdict, and hears of a refusal.
        is_decided: There is a verdict: `error`, or visible at `revision`.
    """

    message: messages.AnyChange
    packed: Bytes
    made_s: float
    number: int
    purpose: Purpose = "change"
    is_awaited: bool = True
    is_decided: bool = False
    revision: int = 0
    error: BywayError | None = None


@dataclass(slots=True)
class Source:
    """
    Everything about one source.

    Attributes:
        name: Random, of this source alone.
        epoch: Of the daemon that the numbers are for.
    """

    name: str
    epoch: str = ""
    #: In the order of their numbers, none missing. All undecided.
    line: deque[Sent] = field(default_factory=deque)
    layers: dict[str, HeldLayer] = field(default_factory=dict)
    #: By layer: refusals that nobody waited for, until somebody has been told.
    losses: list[tuple[str, BywayError]] = field(default_factory=list)
    #: Layers that are kept.
    kept: set[str] = field(default_factory=set)
    #: The newest that is known to have changes of this source.
    revision: int = 0
    _last_number: int = 0
    _last_sent_s: float = -math.inf
    #: How many of the line were sent on the present connection.
    _sent_count: int = 0

    # -- out ------------------------------------------------------------------------------------

    def add(
        self,
        message: messages.AnyChange,
        packed: Bytes,
        now_s: float,
        *,
        purpose: Purpose = "change",
        is_awaited: bool = True,
    ) -> Sent:
        """Put a change at the end of the line."""
        self._last_number += 1
        awaited = is_awaited and purpose == "change"
        sent = Sent(message, packed, now_s, self._last_number, purpose, awaited)
        self.line.append(sent)
        return sent

    def unsent(self, now_s: float) -> Iterator[list[Bytes]]:
        """
        Give the frames of what may be sent now, one after the other.

        Each counts as sent when the next one is asked for. What the daemon has not decided is
        bounded by the window.
        """
        while self._sent_count < min(len(self.line), limits.unacknowledged_max):
            sent = self.line[self._sent_count]
            yield self._frames(sent, now_s)
            self._last_sent_s = now_s
            self._sent_count += 1

    def _frames(self, sent: Sent, now_s: float) -> list[Bytes]:
        message, packed = sent.message, sent.packed
        if now_s - sent.made_s > _AGES_AFTER_S:
            message, packed = _aged(message, packed, now_s - sent.made_s)
        header = frames.Header(
            message.kind,
            id=str(sent.number),
            source=self.name,
            number=sent.number,
            epoch=self.epoch,
        )
        return frames.encode(header, message, packed)

    def send_again(self) -> None:
        """Nobody knows what has arrived: send all that is undecided once more."""
        self._sent_count = 0

    @property
    def has_unsent(self) -> bool:
        """Whether something may be sent now."""
        return self._sent_count < min(len(self.line), limits.unacknowledged_max)

    # -- signs of life --------------------------------------------------------------------------

    def keep_at_s(self) -> float:
        """Return when a sign of life is due, so that no lease of a kept layer ends."""
        if self.line:
            return math.inf  # what is in the line is sent until it is decided
        return min(
            (self._last_sent_s + _RENEWED_AFTER * each for each in self._leases()), default=math.inf
        )

    def _leases(self) -> Iterator[float]:
        for name in self.kept:
            layer = self.layers.get(name)
            if layer is not None and layer.lease_s is not None:
                yield layer.lease_s

    def looks_every_s(self) -> float:
        """Return how often somebody must see whether a sign of life is due."""
        return max(0.01, 0.5 * _RENEWED_AFTER * min(self._leases(), default=math.inf))

    def keep(self, now_s: float, *, asks_who_is_there: bool = False) -> None:
        """
        Put a sign of life for each kept layer in the line, if the line is empty.

        Args:
            asks_who_is_there: For those without lease too, to hear whether the daemon knows them.
        """
        for name in sorted(self.kept) if not self.line else ():
            layer = self.layers.get(name)
            if layer is None or (layer.lease_s is None and not asks_who_is_there):
                continue
            message: messages.AnyChange = messages.Claim(layer=name, lease_s=layer.lease_s)
            if layer.lease_s is None or now_s - self._last_sent_s >= layer.lease_s:
                # Perhaps it is somebody else's by now: a claim would take it away from them.
                message = messages.Drop(layer=name, ids=[])
            self.add(message, b"", now_s, purpose="keep")

    # -- in -------------------------------------------------------------------------------------

    def acknowledged(self, message: messages.Acknowledged, now_s: float) -> None:
        """Take in that all up to a number are decided."""
        while self.line and self.line[0].number <= message.number:
            sent = self.line.popleft()
            self._sent_count = max(0, self._sent_count - 1)
            if sent.is_decided:
                continue
            sent.is_decided = True
            sent.revision = self.revision = message.revision
            if sent.purpose != "change":
                continue  # the record has it, and more
            self._layer(sent.message.layer).take(sent.message, sent.packed, sent.made_s, now_s)

    def refused(self, message: messages.Refused) -> None:
        """Take in that one change was refused; its number stays in the line until it is passed."""
        for sent in self.line:
            if sent.number == message.number and not sent.is_decided:
                sent.is_decided = True
                sent.error = from_code(
                    message.code, message.text, message.facts, message.retry_after_s
                )
                if message.code == _LOST_WITH:
                    self.layers.pop(sent.message.layer, None)
                if not sent.is_awaited:
                    self.losses.append((sent.message.layer, sent.error))

    def turned_away(self, id: str, error: BywayError) -> bool:
        """
        Take in that a change was not even counted, because of who sends it.

        Args:
            id: That of its header.

        Returns:
            Whether it was one that is undecided.
        """
        for sent in self.line:
            if str(sent.number) == id and not sent.is_decided:
                sent.is_decided = True
                sent.error = error
                if not sent.is_awaited:
                    self.losses.append((sent.message.layer, error))
                break
        else:
            return False
        while self.line and self.line[0].is_decided and self.line[0].error is not None:
            self.line.popleft()
            self._sent_count = max(0, self._sent_count - 1)
        return True

    def resend(self, message: messages.Resend, epoch: str, now_s: float) -> None:
        """Take in from which number on the daemon wants to hear everything."""
        if epoch != self.epoch:
            self.begin_again(epoch, message.have, now_s)
            return
        wanted = message.have + 1
        if self.line and self.line[0].number <= wanted <= self._last_number + 1:
            self._sent_count = wanted - self.line[0].number
        elif wanted != self._last_number + 1:
            # It asks for numbers that nobody has any more: it has forgotten this source.
            self.begin_again(epoch, message.have, now_s)

    def begin_again(self, epoch: str, have: int, now_s: float) -> None:
        """Number from have + 1: first all layers as they were, then what was not decided."""
        waiting = [sent for sent in self.line if not sent.is_decided and sent.purpose == "change"]
        is_known = bool(self.epoch)
        self.epoch = epoch
        self.line.clear()
        self._sent_count, self._last_number = 0, have
        for name, layer in self.layers.items() if is_known else ():
            self._restore(name, layer, now_s)
        for sent in waiting:
            self._last_number += 1
            sent.number = self._last_number
            self.line.append(sent)

    def _restore(self, name: str, layer: HeldLayer, now_s: float) -> None:
        for message, packed, made_s in layer.restoring(name, now_s):
            self.add(message, packed, made_s, purpose="restore")
        if layer.strokes.is_incomplete:
            layer.strokes.is_incomplete = False
            loss = NewEpoch(
                f"layer {name} had more patches than the client keeps; the daemon has been "
                "sent the last ones, replace the layer or patch it again",
                {"layer": name, "epoch": self.epoch},
            )
            self.losses.append((name, loss))

    # -- within ---------------------------------------------------------------------------------

    def _layer(self, name: str) -> HeldLayer:
        return self.layers.setdefault(name, HeldLayer())

    def knows(self, layer: str) -> bool:
        """Whether the layer was claimed, or is being claimed at the end of the line."""
        return layer in self.layers or any(
            sent.message.layer == layer and not sent.is_decided for sent in self.line
        )


def _aged(
    message: messages.AnyChange, packed: Bytes, waited_s: float
) -> tuple[messages.AnyChange, Bytes]:
    """Return a change as it is to be told after it has waited."""
    match message:
        case messages.Scan() if message.age_s + waited_s > limits.age_s_max:
            # Too old to be told; its number must be there all the same.
            return messages.Drop(layer=message.layer, ids=[]), b""
        case messages.Scan():
            return message.model_copy(update={"age_s": message.age_s + waited_s}), packed
        case messages.Track():
            age_s, expires_in_s = message.age_s + waited_s, message.expires_in_s
            if age_s > limits.age_s_max:
                age_s, expires_in_s = limits.age_s_max, _LEAST_EXPIRY_S
            elif expires_in_s is not None:
                expires_in_s = max(_LEAST_EXPIRY_S, expires_in_s - waited_s)
            told = {"age_s": age_s, "expires_in_s": expires_in_s}
            return message.model_copy(update=told), packed
        case messages.Put() | messages.ReplaceLayer() if message.expires_in_s is not None:
            left_s = max(_LEAST_EXPIRY_S, message.expires_in_s - waited_s)
            return message.model_copy(update={"expires_in_s": left_s}), packed
    return message, packed
