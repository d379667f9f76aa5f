"""The events that a client hears, without those that it has heard already."""

from collections import OrderedDict
from dataclasses import dataclass
from typing import Final

from byway import frames, messages
from byway.errors import SenderFault
from byway.link import Link

#: Topics whose last number is remembered. A repeat of one that was forgotten counts as new.
_TOPICS_MAX: Final = 10_000


@dataclass(frozen=True, slots=True)
class Heard:
    """
    One event as it came.

    Attributes:
        topic: Under which it was published.
        received: Header, message, columns.
        missed: How many events of the topic were lost since the last one.
    """

    topic: str
    received: frames.Received
    missed: int


class Ear:
    """A SUB socket, and what is known of its streams."""

    def __init__(self, link: Link) -> None:
        self.link: Final = link
        #: Topics of which the daemon has said that the subscription reached it.
        self.confirmed: set[str] = set()
        #: How many messages have come.
        self.came = 0
        self._last: OrderedDict[str, tuple[str, int]] = OrderedDict()

    def look(self) -> None:
        """Take note of the connection, and begin a fresh one if it is lost."""
        self.link.look()
        if self.link.is_lost:
            self.confirmed.clear()
            self.link.reopen()

    def next(self) -> Heard | None:
        """Return the next event that was not heard before, if one has come."""
        while (parts := self.link.receive()) is not None:
            self.came += 1
            topic = parts[0].decode("ascii", "replace")
            try:
                received = frames.decode(parts[1:], frames.EVENTS)
            except SenderFault:
                continue  # of a newer daemon, perhaps; events may be lost anyway
            if isinstance(received.message, messages.Listening):
                self.confirmed.add(topic)
                continue
            missed = self._missed(topic, received.header)
            if missed is not None:
                return Heard(topic, received, missed)
        return None

    def _missed(self, topic: str, header: frames.Header) -> int | None:
        """Return how many numbers are missing before this one; None for a repeat."""
        epoch, last = self._last.get(topic, (header.epoch, header.number - 1))
        if epoch != header.epoch or header.number == 1:
            # Another life of the daemon, or a stream that it had forgotten.
            if (epoch, last) == (header.epoch, 1):
                return None
            last = header.number - 1
        if header.number <= last:
            return None
        self._last[topic] = (header.epoch, header.number)
        self._last.move_to_end(topic)
        if len(self._last) > _TOPICS_MAX:
            self._last.popitem(last=False)
        return header.number - last - 1
