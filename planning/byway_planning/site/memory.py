"""
The memory that snapshots live in: one flat buffer, handed out in blocks.

The buffer has a fixed, generous size, and its pages come into being when they are first written.
In a daemon it is a shared mapping whose pages are claimed extent by extent, so that none is
missing; one process writes, the others only read. In a script it is private.

A block is cut from the smallest free stretch that holds it; a block given back joins the free
stretches beside it. Sizes are rounded to eight an octave, so that a block mostly fits where one
of about its size was, and years of updates leave no dust. Who may free a block, and when, is
not decided here but by the owner of the snapshots.
"""

from bisect import bisect_left, insort
from collections.abc import Callable
from mmap import MAP_ANONYMOUS, MAP_PRIVATE, mmap

import numpy as np
import numpy.typing as npt

Bytes = npt.NDArray[np.uint8]

ALIGN_BYTES = 64
#: The last part of a memory, an eighth at most, is kept for changes that give back what they
#: take. Without it a full site could not even be made smaller, since every change is written
#: beside what it replaces.
RESERVE_BYTES = 1 << 25
#: Addresses set aside for private memory: twice what the largest site has in blocks (TILES_MAX
#: tiles of 20 kB). They cost nothing until they are written to.
PRIVATE_BYTES = 1 << 34


class MemoryFull(MemoryError):
    """The site does not fit into the memory it was given; nothing was changed."""


def rounded_bytes(size: int) -> int:
    """Return the size of the block that holds `size` bytes."""
    size = max(size, 1)
    step = max(ALIGN_BYTES, 1 << max(0, size.bit_length() - 4))
    return -(-size // step) * step


class Memory:
    """Blocks in one buffer; see the module text."""

    def __init__(self, buffer: bytearray | mmap, grow: Callable[[int], None]) -> None:
        # -- owned by the one writer ----------------------------------------------------
        self._bytes: Bytes = np.frombuffer(buffer, np.uint8)
        self._grow = grow
        #: From here on nothing is handed out; no free stretch ends here.
        self._top = ALIGN_BYTES  # offset 0 means "no block"
        #: Blocks in use, offset to size.
        self._sizes: dict[int, int] = {}
        self._used_bytes = 0
        #: Free stretches below the top, no two of them adjacent: start to size, end to start,
        #: and (size, start) in order.
        self._free: dict[int, int] = {}
        self._free_ends: dict[int, int] = {}
        self._free_by_size: list[tuple[int, int]] = []

    @classmethod
    def private(cls) -> "Memory":
        """Memory of this process alone; takes up what is written to it."""
        size = PRIVATE_BYTES
        while True:
            try:
                return cls(mmap(-1, size, flags=MAP_PRIVATE | MAP_ANONYMOUS), lambda end: None)
            except OSError:  # more than this machine would ever give
                if size < 1 << 26:
                    raise
                size //= 2

    @classmethod
    def over(cls, buffer: bytearray | mmap, grow: Callable[[int], None]) -> "Memory":
        """
        Memory in a mapping of fixed size.

        Args:
            buffer: Anything with the buffer interface, writable, e.g. an mmap.
            grow: Called with the number of bytes from the start that must be usable;
                raises OSError when they are not to be had.
        """
        return cls(buffer, grow)

    @property
    def buffer(self) -> Bytes:
        return self._bytes

    @property
    def used_bytes(self) -> int:
        """Bytes in blocks."""
        return self._used_bytes

    @property
    def is_short(self) -> bool:
        """Whether nothing is left but the reserve."""
        size = len(self._bytes)
        return self._used_bytes > size - min(size // 8, RESERVE_BYTES)

    def has_room_for(self, size: int) -> bool:
        """Whether a block of this size could be taken, if the memory can grow to its end."""
        largest = self._free_by_size[-1][0] if self._free_by_size else 0
        return rounded_bytes(size) <= max(largest, len(self._bytes) - self._top)

    def size_of(self, offset: int) -> int:
        """Return the bytes of a block."""
        return self._sizes[offset]

    @property
    def top_bytes(self) -> int:
        """Bytes from the start that blocks and free stretches together take up."""
        return self._top

    def take(self, size: int) -> int:
        """
        Return the offset of a block of at least `size` bytes; its content is undefined.

        Raises:
            MemoryFull: If there is no room for it; nothing is taken then.
        """
        size = rounded_bytes(size)
        at = bisect_left(self._free_by_size, (size, 0))
        if at < len(self._free_by_size):
            stretch, offset = self._free_by_size[at]
            self._forget_free(offset, stretch)
            if stretch > size:
                self._note_free(offset + size, stretch - size)
        else:
            offset = self._top
            self._reserve(offset + size)
            self._top = offset + size
        self._sizes[offset] = size
        self._used_bytes += size
        return offset

    def give_back(self, offset: int) -> None:
        """Free a block."""
        size = self._sizes.pop(offset)
        self._used_bytes -= size
        before = self._free_ends.get(offset)
        if before is not None:
            self._forget_free(before, offset - before)
            offset, size = before, size + offset - before
        after = self._free.get(offset + size)
        if after is not None:
            self._forget_free(offset + size, after)
            size += after
        if offset + size == self._top:
            self._top = offset
        else:
            self._note_free(offset, size)

    def adopt(self, blocks: dict[int, int]) -> None:
        """Take over blocks (offset to bytes asked for) that a predecessor handed out."""
        self._sizes = {offset: rounded_bytes(size) for offset, size in sorted(blocks.items())}
        self._used_bytes = sum(self._sizes.values())
        self._free, self._free_ends, self._free_by_size = {}, {}, []
        self._top = ALIGN_BYTES
        for offset, size in self._sizes.items():
            if offset > self._top:
                self._note_free(self._top, offset - self._top)
            self._top = offset + size

    def _note_free(self, start: int, size: int) -> None:
        self._free[start] = size
        self._free_ends[start + size] = start
        insort(self._free_by_size, (size, start))

    def _forget_free(self, start: int, size: int) -> None:
        del self._free[start], self._free_ends[start + size]
        del self._free_by_size[bisect_left(self._free_by_size, (size, start))]

    def _reserve(self, end: int) -> None:
        if end > len(self._bytes):
            raise MemoryFull(
                f"the site needs more than the {len(self._bytes) >> 20} MiB it was given"
            )
        try:
            self._grow(end)
        except OSError as fault:
            raise MemoryFull(f"no memory for {end >> 20} MiB of site: {fault}") from fault

    def write(self, offset: int, values: npt.NDArray[np.generic]) -> None:
        """Copy an array into a block."""
        flat = np.ascontiguousarray(values).reshape(-1).view(np.uint8)
        self._bytes[offset : offset + len(flat)] = flat

    def store(self, values: npt.NDArray[np.generic]) -> int:
        """Take a block, copy an array into it and return its offset."""
        offset = self.take(values.nbytes)
        self.write(offset, values)
        return offset
