"""
A source: whoever changes the site, its numbers, and what it must be able to send again.

Plain state, no socket and no clock of its own. Changes get numbers in the order in which they are
made, and stay in the line until the daemon has decided them. What was decided goes into the
record of its layer, so that a daemon that was started again can be given the whole of it: the
obstacles, those that expire with the time that they have left, and the last patches.
"""

from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Final

from byway import frames, limits, messages
from byway.errors import BywayError, NewEpoch, from_code
from byway.held import HeldLayer
from byway.packed import Bytes

#: The refusal that makes a layer somebody else's business.
_LOST_WITH: Final = "not_owner"


@dataclass(slots=True, eq=False)
class Sent:
    """
    One change on its way.

    Attributes:
        message, packed: As made; they do not change when they are numbered anew.
        number: The present one.
        restores: It repeats what the daemon once had; no caller waits for it.
        is_decided: There is a verdict: `error`, or visible at `revision`.
    """

    message: messages.AnyChange
    packed: Bytes
    made_s: float
    number: int
    restores: bool = False
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
    #: Why a layer could not be given to a new epoch as it was, until somebody has been told.
    losses: list[BywayError] = field(default_factory=list)
    _last_number: int = 0
    #: How many of the line were sent on the present connection.
    _sent_count: int = 0

    # -- out ------------------------------------------------------------------------------------

    def add(self, message: messages.AnyChange, packed: Bytes, now_s: float) -> Sent:
        """Put a change at the end of the line."""
        self._last_number += 1
        sent = Sent(message, packed, now_s, self._last_number)
        self.line.append(sent)
        return sent

    def unsent(self) -> Iterator[list[Bytes]]:
        """
        Give the frames of what may be sent now, one after the other.

        Each counts as sent when the next one is asked for. What the daemon has not decided is
        bounded by the window.
        """
        while self._sent_count < min(len(self.line), limits.unacknowledged_max):
            sent = self.line[self._sent_count]
            yield self._frames(sent)
            self._sent_count += 1

    def _frames(self, sent: Sent) -> list[Bytes]:
        header = frames.Header(
            sent.message.kind,
            id=str(sent.number),
            source=self.name,
            number=sent.number,
            epoch=self.epoch,
        )
        return frames.encode(header, sent.message, sent.packed)

    def send_again(self) -> None:
        """Nobody knows what has arrived: send all that is undecided once more."""
        self._sent_count = 0

    @property
    def has_unsent(self) -> bool:
        """Whether something may be sent now."""
        return self._sent_count < min(len(self.line), limits.unacknowledged_max)

    # -- in -------------------------------------------------------------------------------------

    def acknowledged(self, message: messages.Acknowledged, now_s: float) -> None:
        """Take in that all up to a number are decided."""
        while self.line and self.line[0].number <= message.number:
            sent = self.line.popleft()
            self._sent_count = max(0, self._sent_count - 1)
            if sent.is_decided:
                continue
            sent.is_decided = True
            sent.revision = message.revision
            if sent.restores:
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
                if sent.restores:
                    self.losses.append(sent.error)

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
        waiting = [sent for sent in self.line if not sent.is_decided and not sent.restores]
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
            self.add(message, packed, made_s).restores = True
        if layer.is_incomplete:
            layer.is_incomplete = False
            self.losses.append(
                NewEpoch(
                    f"layer {name} had more patches than the client keeps; the daemon has been "
                    "sent the last ones, replace the layer or patch it again",
                    {"layer": name, "epoch": self.epoch},
                )
            )

    # -- within ---------------------------------------------------------------------------------

    def _layer(self, name: str) -> HeldLayer:
        return self.layers.setdefault(name, HeldLayer())

    def knows(self, layer: str) -> bool:
        """Whether the layer was claimed, or is being claimed at the end of the line."""
        return layer in self.layers or any(
            sent.message.layer == layer and not sent.is_decided for sent in self.line
        )
