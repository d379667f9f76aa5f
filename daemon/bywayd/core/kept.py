"""
What passes between the front and the clerk: effects and events about durable layers.

The rules of `effects` and `events` hold. `clerk` is the number that `SpawnClerk` gave; a number
is never used twice, and `ClerkLost` is the last event with it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, TypeAlias

from bywayd.core.instants import Duration, Instant

if TYPE_CHECKING:
    from bywayd.core.effects import Change

#: Where a recall goes on. Opaque.
Place: TypeAlias = object


@dataclass(frozen=True, slots=True)
class Keepsake:
    """
    A change of a durable layer that has become visible and is to be kept.

    One of a layer whose settings say that it is not durable means: forget the layer.
    """

    change: Change
    #: When its obstacles expire.
    expires_at: Instant | None = None
    #: What is expected of the layer: comes back when it is recalled.
    terms: Mapping[str, object] = field(default_factory=dict)
    #: When the change arrived, for the record of how long it took.
    arrived: Instant | None = None
    size_bytes: int = 0


@dataclass(frozen=True, slots=True)
class Recollection:
    """
    A change that makes what was kept: a layer ("claim"), one obstacle ("put") or one patch.

    The settings are those of the layer when it was changed last.
    """

    change: Change
    #: As they were kept, by name: `expected_period_s` and `when_stale`.
    terms: Mapping[str, Any] = field(default_factory=dict)
    #: Of the one obstacle.
    ids: tuple[str, ...] = ()
    expires_in: Duration | None = None


@dataclass(frozen=True, slots=True)
class Stock:
    """How much is kept."""

    size_bytes: int = 0
    patches: int = 0


# -- effects -----------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class SpawnClerk:
    """Start a clerk that will go by this number. It says `ClerkReady`, or is reported lost."""

    clerk: int


@dataclass(frozen=True, slots=True)
class KillClerk:
    """Kill the process at once (SIGKILL). `ClerkLost` follows."""

    clerk: int
    why: str


@dataclass(frozen=True, slots=True)
class PingClerk:
    """Ask a clerk without work for a `ClerkAlive`."""

    clerk: int


@dataclass(frozen=True, slots=True)
class RecallChanges:
    """
    Ask for a piece of what is kept, from a place that `Recalled` gave; None for the beginning.

    Answered by `Recalled` with the same task. Nothing is kept while a recall is going on.
    """

    clerk: int
    task: int
    place: Place


@dataclass(frozen=True, slots=True)
class KeepChanges:
    """
    Keep these, all of them or none, in order. Answered by `ChangesKept` with the same task when
    they are on the disk.

    One is out at a time. All can be kept a second time without harm: a successor of a clerk that
    died is given again what was never answered.
    """

    clerk: int
    task: int
    keepsakes: tuple[Keepsake, ...]


# -- events ------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class ClerkReady:
    """A clerk has opened its file, and everything in it is well."""

    clerk: int
    stock: Stock


@dataclass(frozen=True, slots=True)
class ClerkAlive:
    """A sign of life, nothing else; said at least every 500 ms at work, and when pinged."""

    clerk: int


@dataclass(frozen=True, slots=True)
class ClerkHindered:
    """What is out cannot be written at the moment (no room, say); the clerk goes on trying."""

    clerk: int
    why: str


@dataclass(frozen=True, slots=True)
class ClerkUnfit:
    """The file cannot be used at all: a sentence for a person. The clerk ends."""

    clerk: int
    why: str


@dataclass(frozen=True, slots=True)
class Recalled:
    """The answer to one `RecallChanges`: layers first, then obstacles, then patches in order."""

    clerk: int
    task: int
    found: tuple[Recollection, ...]
    #: None when there is no more.
    place: Place


@dataclass(frozen=True, slots=True)
class ChangesKept:
    """The answer to one `KeepChanges`: they are on the disk."""

    clerk: int
    task: int
    stock: Stock


@dataclass(frozen=True, slots=True)
class ClerkLost:
    """The clerk is gone. The last event with this number."""

    clerk: int
    why: str


ClerkEffect: TypeAlias = SpawnClerk | KillClerk | PingClerk | RecallChanges | KeepChanges
ClerkEvent: TypeAlias = (
    ClerkReady | ClerkAlive | ClerkHindered | ClerkUnfit | Recalled | ChangesKept | ClerkLost
)
