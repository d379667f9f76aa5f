"""
The memory that snapshots live in: one flat buffer, handed out in blocks.

In a script the buffer is private and grows by copying (snapshots keep the buffer they were
made in). In a daemon it is a shared mapping of fixed size whose pages are claimed extent by
extent; one process writes, the others only read.

Blocks are multiples of 64 bytes, rounded up to eight sizes an octave, so that a freed block
fits the next of about its size and at most an eighth is lost. Who may free a block, and
when, is not decided here but by the owner of the snapshots.
"""

from collections.abc import Callable
from mmap import mmap

import numpy as np
import numpy.typing as npt

Bytes = npt.NDArray[np.uint8]

ALIGN_BYTES = 64


class MemoryFull(MemoryError):
    """The site does not fit into the memory it was given; nothing was changed."""


def rounded_bytes(size: int) -> int:
    """Return the size of the block that holds `size` bytes."""
    size = max(size, 1)
    step = max(ALIGN_BYTES, 1 << max(0, size.bit_length() - 4))
    return -(-size // step) * step


class Memory:
    """Blocks in one buffer; see the module text."""

    def __init__(self, buffer: Bytes, grow: Callable[[int], None] | None) -> None:
        # -- owned by the one writer ----------------------------------------------------
        self._bytes = buffer
        self._grow = grow  # None: private memory, grown by copying
        self._top = ALIGN_BYTES  # offset 0 means "no block"
        self._free: dict[int, list[int]] = {}
        self._sizes: dict[int, int] = {}

    @classmethod
    def private(cls, size: int = 1 << 20) -> "Memory":
        """Memory of this process alone."""
        return cls(np.zeros(size, np.uint8), None)

    @classmethod
    def over(cls, buffer: bytearray | mmap, grow: Callable[[int], None]) -> "Memory":
        """
        Memory in a mapping of fixed size.

        Args:
            buffer: Anything with the buffer interface, writable, e.g. an mmap.
            grow: Called with the number of bytes from the start that must be usable;
                raises OSError when they are not to be had.
        """
        return cls(np.frombuffer(buffer, np.uint8), grow)

    @property
    def buffer(self) -> Bytes:
        return self._bytes

    @property
    def used_bytes(self) -> int:
        return sum(self._sizes.values())

    def take(self, size: int) -> int:
        """Return the offset of a block of at least `size` bytes; its content is undefined."""
        size = rounded_bytes(size)
        free = self._free.get(size)
        if free:
            offset = free.pop()
        else:
            offset = self._top
            self._reserve(offset + size)
            self._top = offset + size
        self._sizes[offset] = size
        return offset

    def give_back(self, offset: int) -> None:
        """Free a block."""
        size = self._sizes.pop(offset)
        self._free.setdefault(size, []).append(offset)

    def adopt(self, blocks: dict[int, int]) -> None:
        """Take over blocks (offset to bytes asked for) that a predecessor handed out."""
        self._sizes = {offset: rounded_bytes(size) for offset, size in blocks.items()}
        # Holes between them are given up until the next restart: their sizes are unknown.
        ends = [offset + size for offset, size in self._sizes.items()]
        self._top = max([ALIGN_BYTES, *ends])

    def _reserve(self, end: int) -> None:
        if self._grow is None:
            if end > len(self._bytes):
                bigger = np.zeros(max(end, 2 * len(self._bytes)), np.uint8)
                bigger[: len(self._bytes)] = self._bytes
                self._bytes = bigger
            return
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
