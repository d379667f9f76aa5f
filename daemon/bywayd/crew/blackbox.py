"""
What a surveyor was doing when it died, for the one that follows.

A change that kills or hangs the surveyor would do so again and again: its batch is given to
every successor, and nothing else of the site would ever change. So the surveyor notes in the
last page of the shared memory which change it is at. Whoever follows counts the deaths at that
place, and from the second on the change is refused instead of tried. One death proves nothing:
the process may have been killed from outside.
"""

import mmap
import struct
from typing import Final

#: The place worked at (0: none), the place of the last death, and deaths there in a row.
_fields: Final = struct.Struct("<qqq")

size_bytes: Final = mmap.PAGESIZE

deaths_until_refused: Final = 2


class BlackBox:
    """The page of the shared memory that outlives the surveyor."""

    def __init__(self, mapped: mmap.mmap) -> None:
        self._mapped = mapped
        at, blamed, deaths = _fields.unpack_from(mapped)
        if at:
            deaths = deaths + 1 if at == blamed else 1
            blamed = at
        self._blamed, self._deaths = blamed, deaths
        self.note(None)

    def note(self, place: int | None) -> None:
        """Say which change of the batch, counted from 0, is being worked at; None for none."""
        at = 0 if place is None else place + 1
        _fields.pack_into(self._mapped, 0, at, self._blamed, self._deaths)

    def batch_done(self) -> None:
        """The batch is visible: whatever happened in it is past."""
        self._blamed = self._deaths = 0
        self.note(None)

    @property
    def deadly_place(self) -> int | None:
        """The place at which too many have died, if there is one."""
        return self._blamed - 1 if self._deaths >= deaths_until_refused else None
