"""
What surveyor and workers need to be able to do, and where they learn it.

`bywayd.crew.trade` has these functions for real; it is the only door from the daemon to
`byway_planning`. The template imports it by name, once, before anything is forked; tests name
a module of their own there, one that hangs or crashes when it is told to.
"""

from __future__ import annotations

import importlib
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from mmap import mmap
from typing import Any, Final, Protocol, cast

#: The module that knows the real trade.
default_skills: Final = "bywayd.crew.trade"

#: Called before each kernel with (done, total, name).
Progress = Callable[[int, int, str], None]

#: What a worker found, ready to travel: `kind`, `cost`, `body`, `packed` and `path`, the fields
#: of `bywayd.core.events.Outcome` by name.
Found = dict[str, Any]


@dataclass(frozen=True)
class Published:
    """A snapshot by its number, and how others attach to it (whole numbers by name)."""

    revision: int
    handle: dict[str, Any]


class Refused(Exception):
    """A change, or a job, that cannot be done as it was asked; nothing has changed."""

    def __init__(self, code: str, text: str, facts: Mapping[str, Any] | None = None) -> None:
        super().__init__(text)
        self.code = code
        self.text = text
        self.facts = dict(facts or {})


class SiteKeeping(Protocol):
    """The one mutable site, in the surveyor."""

    def apply(self, change: Mapping[str, Any]) -> Iterator[None]:
        """
        Make one change, with a pause wherever a long one may be interrupted by a question.

        Raises:
            Refused: If it cannot be made; then nothing of it is.
            MemoryError: If there is no room for it.
        """

    def carry(self, at_s: float) -> None:
        """
        Carry forward what moves, and forget what was seen too long ago.

        Args:
            at_s: Now, a reading of CLOCK_MONOTONIC.
        """

    def next_carry_s(self, at_s: float) -> float | None:
        """Return when, after now, there will be something to carry; None for never."""

    def publish(self) -> Published:
        """
        Make what has changed visible; the same revision again when nothing has.

        Raises:
            MemoryError: If there is no room for it.
        """

    def release_before(self, revision: int) -> None:
        """Give back the memory of snapshots older than this."""

    def obstacles(self) -> dict[str, int]:
        """Return how many obstacles each layer has."""

    def tracks(self) -> dict[str, int]:
        """Return how many of them move."""

    def watch(self, order: Mapping[str, Any]) -> None:
        """
        Look after a route from now on: the fields of `WatchRoute`.

        Raises:
            Refused: If it is no route, with the reason.
        """

    def move(self, guard: int, progress_m: float) -> None:
        """A vehicle is somewhere else on its route."""

    def unwatch(self, guard: int) -> None:
        """Look after a route no more."""

    def look(self) -> Iterator[tuple[int, dict[str, Any] | None]]:
        """
        Look at all watched routes on the snapshot that was published last.

        Yields:
            The number of a guard and where its route is blocked, if it is; after each route, so
            that who waits for a sign of life gets one.
        """

    def describe(self, question: Mapping[str, Any], at_s: float) -> tuple[dict[str, Any], bytes]:
        """Return the site as the fields and the packed columns of the protocol's message."""


class Skills(Protocol):
    """A module with these functions."""

    def warm(self, progress: Progress) -> None:
        """Compile or load all that will be called, so that what is forked is ready at once."""

    def new_site(
        self, settings: Mapping[str, Any], memory: mmap, grow: Callable[[int], None]
    ) -> SiteKeeping:
        """Return an empty site in this memory, with the layers of the settings declared."""

    def recover_site(
        self,
        settings: Mapping[str, Any],
        memory: mmap,
        grow: Callable[[int], None],
        handle: Mapping[str, Any],
        in_use: list[Mapping[str, Any]],
    ) -> SiteKeeping:
        """Return the site of a snapshot that a surveyor published before it died."""

    def attach(self, memory: mmap, handle: Mapping[str, Any]) -> object:
        """Return a snapshot for reading."""

    def vehicle(self, definition: Mapping[str, Any]) -> object:
        """Return the vehicle of a definition from the settings."""

    def plan(
        self,
        snapshot: object,
        vehicle: object,
        job: Mapping[str, Any],
        time_left_s: Callable[[], float],
        on_better: Callable[[Found], None],
    ) -> Found:
        """
        Plan until the time is over or nothing can be gained.

        Raises:
            Refused: If the request makes no sense, with the reason.
        """

    def check(
        self, snapshot: object, vehicle: object, job: Mapping[str, Any], outcome: Mapping[str, Any]
    ) -> str:
        """Return what is wrong with a route on this snapshot; empty if it stands."""


def load_skills(module: str) -> Skills:
    """Import a module of skills by its name."""
    return cast(Skills, importlib.import_module(module))
