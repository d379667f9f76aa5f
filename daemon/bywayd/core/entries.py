"""What stands in the ledger's line: changes on their way to the surveyor, and back."""

from __future__ import annotations

from dataclasses import dataclass

from bywayd.core.effects import Change
from bywayd.core.instants import Instant
from bywayd.core.layers import No


@dataclass(frozen=True, slots=True)
class Entry:
    """One change in the line: of a source, or of the ledger itself when something expires."""

    arrived: Instant
    #: None for the ledger's own.
    source: str | None
    number: int
    #: What the surveyor is to do; None when it is refused already.
    change: Change | None
    no: No | None = None
    #: Obstacles put by it, if its layer has expiries.
    ids: tuple[str, ...] = ()
    expires_at: Instant | None = None
    size_bytes: int = 0
    #: It comes from the clerk, at the start, and is kept already.
    is_recalled: bool = False


@dataclass(frozen=True, slots=True)
class Batch:
    """Entries that are decided together, in order."""

    entries: tuple[Entry, ...]

    @property
    def changes(self) -> tuple[Change, ...]:
        """What the surveyor is to do, in order."""
        return tuple(entry.change for entry in self.entries if entry.change is not None)
