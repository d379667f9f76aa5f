"""
Tables that are published revision after revision, at the cost of what changed in them.

A reader wants a table in one piece, and a revision mostly changes a few rows of it. So the
owner keeps the table in its own memory, page by page noted with the edition in which it last
changed. A new edition goes into a block that an older edition lay in and nobody reads any more;
only the pages that changed since that edition are copied. A table that did not change at all
keeps its block.
"""

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from byway_planning.kernel import kernel
from byway_planning.site.memory import Bytes, Memory

PAGE_BYTES = 4096
#: Blocks of old editions kept to be brought up to date. Readers mostly lag by one revision.
SPARES_MAX = 2


@kernel("ru1[::1]", "i8[::1]", "i8", "i8", "u1[::1]")
def copy_pages_kernel(
    rows: Bytes, changed_in: npt.NDArray[np.int64], number: int, page: int, block: Bytes
) -> None:
    """Copy the pages that changed after an edition into the block that holds it."""
    for p in range(-(-len(rows) // page)):
        if changed_in[p] > number:
            for i in range(p * page, min((p + 1) * page, len(rows))):
                block[i] = rows[i]


@dataclass
class Edition:
    """A block that holds, or held, a table."""

    offset: int
    size: int
    number: int = 0  # pages that did not change after this edition are right; 0: none is


class Table:
    """Rows that grow at their end; see the module text."""

    def __init__(self, dtype: npt.DTypeLike, columns: int = 0) -> None:
        self._rows: npt.NDArray[np.generic] = np.zeros((16, columns) if columns else 16, dtype)
        self.count = 0
        #: By page: the edition that is to hold its last change.
        self._changed_in = np.zeros(1, np.int64)
        self._number = 1  # of the next edition
        self._is_changed = True
        self._now: Edition | None = None
        self._next: Edition | None = None
        self._spares: list[Edition] = []

    @property
    def view(self) -> npt.NDArray[np.generic]:
        """The rows, read-only."""
        rows = self._rows[: self.count]
        rows.flags.writeable = False
        return rows

    def append(self, rows: npt.ArrayLike) -> int:
        """Add rows; return the index of the first."""
        block = np.asarray(rows, self._rows.dtype).reshape(-1, *self._rows.shape[1:])
        first = self.count
        if first + len(block) > len(self._rows):
            bigger = np.zeros((2 * (first + len(block)), *self._rows.shape[1:]), self._rows.dtype)
            bigger[:first] = self._rows[:first]
            self._rows = bigger
            pages = np.zeros(-(-bigger.nbytes // PAGE_BYTES), np.int64)
            pages[: len(self._changed_in)] = self._changed_in
            self._changed_in = pages
        self.count += len(block)
        self.write(first, block)
        return first

    def write(self, first: int, rows: npt.NDArray[np.generic]) -> None:
        """Overwrite rows from `first` on."""
        self._rows[first : first + len(rows)] = rows
        self._note(first, len(rows))

    def write_window(
        self, width: int, row: int, column: int, values: npt.NDArray[np.generic]
    ) -> None:
        """Overwrite a rectangle of a table that is read as lines of `width` rows."""
        height, across = values.shape
        lines = self._rows[: self.count].reshape(-1, width)
        lines[row : row + height, column : column + across] = values
        self._note(row * width + column, (height - 1) * width + across)

    def __setitem__(self, row: int, value: npt.ArrayLike) -> None:
        self._rows[row] = value
        self._note(row, 1)

    def __getitem__(self, row: int) -> int:
        return int(self._rows[row])

    def empty(self) -> None:
        """Forget all rows."""
        self.count = 0
        self._is_changed = True

    def _note(self, first: int, count: int) -> None:
        row_bytes = self._rows.strides[0]
        last = ((first + count) * row_bytes - 1) // PAGE_BYTES
        self._changed_in[first * row_bytes // PAGE_BYTES : last + 1] = self._number
        self._is_changed = True

    # -- publishing: first `prepare`, then one of `commit` and `withdraw` -----------------------

    def prepare(self, memory: Memory) -> int:
        """
        Write the next edition; return the offset of its block.

        Raises:
            MemoryFull: If there is no room for it.
        """
        if not self._is_changed and self._now is not None:
            return self._now.offset
        rows = self.view
        edition = self._spares.pop() if self._spares else None
        if edition is not None and edition.size < rows.nbytes:
            memory.give_back(edition.offset)
            edition = None
        if edition is None:
            size = rows.nbytes + rows.nbytes // 4  # room to grow in, if there is so much
            if not memory.has_room_for(size):
                size = rows.nbytes
            edition = Edition(memory.take(size), size)
        self._next = edition
        flat = rows.reshape(-1).view(np.uint8)
        block = memory.buffer[edition.offset : edition.offset + len(flat)]
        copy_pages_kernel(flat, self._changed_in, edition.number, PAGE_BYTES, block)
        return edition.offset

    @property
    def wanted_bytes(self) -> int:
        """What the next edition but one takes; nothing if a block for it is at hand."""
        fits = any(spare.size >= self.view.nbytes for spare in self._spares)
        return 0 if fits else self.view.nbytes

    def commit(self) -> Edition | None:
        """Make the prepared edition the table's own; return the one it replaces, if any."""
        if self._next is None:
            return None
        old, self._now, self._next = self._now, self._next, None
        self._now.number = self._number
        self._number += 1
        self._is_changed = False
        return old

    def withdraw(self, memory: Memory) -> None:
        """Take a prepared edition back; one that was made for it leaves no trace."""
        if self._next is None:
            return
        if self._next.number:
            self._spares.append(self._next)
        else:
            memory.give_back(self._next.offset)
        self._next = None

    def give_back(self, edition: Edition, memory: Memory) -> None:
        """Take in an edition that nobody reads any more."""
        if len(self._spares) < SPARES_MAX:
            self._spares.append(edition)
        else:
            memory.give_back(edition.offset)

    def adopt(self, offset: int, size: int) -> None:
        """Go on from an edition that a predecessor wrote and others may be reading."""
        self._now = Edition(offset, size)
