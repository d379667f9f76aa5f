"""What a caller sees of an event."""

from dataclasses import dataclass
from typing import Final, TypeAlias

from byway import messages
from byway.answer import Better, Rerouted, better_of, rerouted_of
from byway.ear import Heard
from byway.errors import BadReply

#: What may be in an event.
Content: TypeAlias = (
    Better
    | Rerouted
    | messages.HealthIs
    | messages.Alert
    | messages.Cleared
    | messages.GuardLost
    | messages.RerouteFailed
    | messages.LayerState
)

#: Beginnings of all topics.
TOPICS: Final = ("better", "guard", "health", "layers")


@dataclass(frozen=True, slots=True, eq=False)
class Event:
    """
    What `Client.listen` gives.

    Attributes:
        topic: "health"; "better.", "guard." and the unit; "layers." and the layer.
        epoch: Of the daemon.
        number: In the stream of the topic.
        missed: Events of the topic that were lost before this one.
        content: A better route; a new one for a unit whose guarded route is blocked; a health
            record; or one of `Alert`, `Cleared`, `GuardLost`, `RerouteFailed`, `LayerState`.
    """

    topic: str
    epoch: str
    number: int
    missed: int
    content: Content


def event_of(heard: Heard) -> Event:
    """Return what an event says. Raises BadReply."""
    header, message = heard.received.header, heard.received.message
    content: Content
    match message:
        case messages.BetterMessage():
            content = better_of(heard.received)
        case messages.Rerouted():
            content = rerouted_of(heard.received)
        case (
            messages.HealthIs()
            | messages.Alert()
            | messages.Cleared()
            | messages.GuardLost()
            | messages.RerouteFailed()
            | messages.LayerState()
        ):
            content = message
        case _:
            raise BadReply(f"a {header.kind} is no event")
    return Event(heard.topic, header.epoch, header.number, heard.missed, content)
