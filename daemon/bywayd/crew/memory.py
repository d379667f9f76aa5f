"""
The memory that surveyor and workers share: one anonymous file, mapped by each of them.

The file has a name for nobody and vanishes with the last process that holds it, whatever ends
them; no limit of /dev/shm applies. Its size is fixed at the start, so that a mapping never has
to move, but pages exist only where `grow` has asked for them: `posix_fallocate` says cleanly
that there is no more, where a write to a page that cannot be had would end the process.

The last page is the surveyor's black box, and no part of the site.
"""

import errno
import fcntl
import mmap
import os
from typing import Final

from bywayd.crew import blackbox

#: Memory is taken in pieces of this size; smaller ones would mean a system call per tile.
extent_bytes: Final = 4 * 1024 * 1024


class SiteMemory:
    """An anonymous memory file, by its descriptor."""

    def __init__(self, descriptor: int) -> None:
        self.descriptor = descriptor
        self.bytes_max = os.fstat(descriptor).st_size - blackbox.size_bytes
        # Extents are taken from the start without holes, so what exists is a prefix. A
        # surveyor that follows a dead one goes on from there.
        self._taken_bytes = self.taken_bytes

    @classmethod
    def create(cls, bytes_max: int) -> "SiteMemory":
        """
        Make a new file that can grow to `bytes_max`.

        Raises:
            ValueError: If `bytes_max` is not positive.
            OSError: If the system refuses.
        """
        if bytes_max <= 0:
            raise ValueError(f"the site memory needs a size > 0 bytes, got {bytes_max}")
        descriptor = os.memfd_create("byway-site", os.MFD_CLOEXEC | os.MFD_ALLOW_SEALING)
        pages = -(-bytes_max // mmap.PAGESIZE)
        os.ftruncate(descriptor, pages * mmap.PAGESIZE + blackbox.size_bytes)
        os.posix_fallocate(descriptor, pages * mmap.PAGESIZE, blackbox.size_bytes)
        # A file cut short under a mapping would kill its readers with SIGBUS.
        fcntl.fcntl(descriptor, fcntl.F_ADD_SEALS, fcntl.F_SEAL_SHRINK | fcntl.F_SEAL_GROW)
        return cls(descriptor)

    @property
    def taken_bytes(self) -> int:
        """How much of it exists."""
        return os.fstat(self.descriptor).st_blocks * 512 - blackbox.size_bytes

    def grow(self, bytes_needed: int) -> None:
        """
        See to it that the first `bytes_needed` bytes exist.

        Raises:
            OSError: ENOSPC if the file may not grow so far, or the system has no more.
        """
        if bytes_needed <= self._taken_bytes:
            return
        if bytes_needed > self.bytes_max:
            raise OSError(errno.ENOSPC, f"the site memory is limited to {self.bytes_max} bytes")
        goal_bytes = min(-(-bytes_needed // extent_bytes) * extent_bytes, self.bytes_max)
        os.posix_fallocate(self.descriptor, self._taken_bytes, goal_bytes - self._taken_bytes)
        self._taken_bytes = goal_bytes

    def map_writable(self) -> mmap.mmap:
        """Return the site for the surveyor; touch only what `grow` has promised."""
        return mmap.mmap(self.descriptor, self.bytes_max)

    def map_blackbox(self) -> mmap.mmap:
        """Return the black box for the surveyor."""
        return mmap.mmap(self.descriptor, blackbox.size_bytes, offset=self.bytes_max)

    def map_readable(self) -> mmap.mmap:
        """Return the site for a worker: a wild write ends the worker, not the site."""
        return mmap.mmap(self.descriptor, self.bytes_max, prot=mmap.PROT_READ)

    def close(self) -> None:
        os.close(self.descriptor)
