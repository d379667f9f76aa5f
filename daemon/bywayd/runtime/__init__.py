"""What the core decides, carried out: sockets, processes, files, threads and clocks."""

from bywayd.runtime.service import serve

__all__ = ["serve"]
