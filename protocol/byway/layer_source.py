"""A layer that a blocking client looks after: `Client.source`."""

from __future__ import annotations

import threading
from collections.abc import Iterable, Sequence
from types import TracebackType
from typing import Any, Final, Unpack

import numpy.typing as npt

from byway import changing, obstacles, scans, tracks
from byway.changing import LayerSettings, Made
from byway.contact import Contact
from byway.link import Drive
from byway.stream import Stream

#: Seconds between two looks of the tender; a shorter lease wants it oftener.
_LOOKS_EVERY_S: Final = 0.25
#: The same while something is undecided.
_BUSY_S: Final = 0.02


class LayerSource:
    """
    What `Client.source` returns. It belongs to the client and its thread.

    All calls that change the layer take `wait`. With True they return when the change is visible,
    with the revision that has it. With False they return as soon as it is sent, with the newest
    revision that is known, and wait only if the window is full; what is refused is raised by a
    later call, which then has not sent anything.

    A daemon that was started again is given the layer again. A layer that was lost to another
    source stays lost (NotOwner) until `claim`.
    """

    def __init__(self, stream: Stream, drive: Drive) -> None:
        self._stream: Final = stream
        self._run = drive

    def __enter__(self) -> LayerSource:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def close(self) -> None:
        """Look after the layer no longer; it stays as it is."""
        self._stream.close()

    @property
    def layer(self) -> str:
        """Its name."""
        return self._stream.layer

    @property
    def revision(self) -> int:
        """The newest revision of the site that is known to have changes of this client."""
        return self._stream.revision

    @property
    def undecided(self) -> int:
        """How many changes of the layer the daemon has not decided."""
        return self._stream.undecided

    def settle(self) -> int:
        """Wait until all changes are visible; return the revision. Raises what was refused."""
        return self._run(self._stream.settle())

    def tend(self, for_s: float = 0.0) -> None:
        """
        Look after the layer for so long, where no thread does: see `Client.source`.

        Raises:
            BywayError: What was refused; NotOwner: the layer was lost.
        """
        self._run(self._stream.tend(for_s))

    def claim(self, **settings: Unpack[LayerSettings]) -> int:
        """Claim the layer again, with other settings or after it was lost; as `Client.claim`."""
        return self._run(self._stream.claim(settings))

    def put(
        self,
        polygons: obstacles.Polygons | None = None,
        discs: obstacles.Discs | None = None,
        expires_in_s: float | None = None,
        *,
        boxes: obstacles.Boxes | None = None,
        wait: bool = True,
    ) -> int:
        """As `Client.put`."""
        return self._send(changing.put(self.layer, polygons, discs, boxes, expires_in_s), wait)

    def replace(
        self,
        polygons: obstacles.Polygons | None = None,
        discs: obstacles.Discs | None = None,
        *,
        boxes: obstacles.Boxes | None = None,
        expires_in_s: float | None = None,
        wait: bool = True,
    ) -> int:
        """As `Client.replace_layer`, with the settings of the last claim."""
        settings = self._stream.settings
        made = changing.replace_layer(self.layer, polygons, discs, boxes, expires_in_s, settings)
        return self._send(made, wait)

    def drop(self, ids: Iterable[str], *, wait: bool = True) -> int:
        """As `Client.drop`."""
        return self._send(changing.drop(self.layer, ids), wait)

    def patch(
        self,
        corner_m: Sequence[float],
        cell_m: float,
        cells: npt.NDArray[Any],
        heading_rad: float = 0.0,
        *,
        wait: bool = True,
    ) -> int:
        """As `Client.patch`."""
        return self._send(changing.patch(self.layer, corner_m, cell_m, cells, heading_rad), wait)

    def scan(
        self,
        origin: Sequence[float],
        bearings_rad: scans.Numbers,
        ranges_m: scans.Numbers,
        range_m_max: float,
        range_m_min: float = 0.0,
        age_s: float = 0.0,
        *,
        wait: bool = True,
    ) -> int:
        """As `Client.scan`."""
        made = changing.scan(
            self.layer, origin, bearings_rad, ranges_m, range_m_max, range_m_min, age_s
        )
        return self._send(made, wait)

    def track(
        self,
        found: tracks.Tracks,
        age_s: float = 0.0,
        expires_in_s: float | None = None,
        *,
        wait: bool = True,
    ) -> int:
        """As `Client.track`."""
        return self._send(changing.track(self.layer, found, age_s, expires_in_s), wait)

    def _send(self, made: Sequence[Made], wait: bool) -> int:
        return self._run(self._stream.send(made, waits=wait))


class Tender:
    """
    A thread that lets the sockets of a client work between its calls.

    Args:
        contact: Of the client.
        working: Held by whoever lets the sockets work.
    """

    def __init__(self, contact: Contact, working: threading.RLock) -> None:
        self._contact: Final = contact
        self._working: Final = working
        self._ends: Final = threading.Event()
        self._thread: threading.Thread | None = None

    def begin(self) -> None:
        """Begin, unless it has."""
        if self._thread is None:
            self._thread = threading.Thread(target=self._tend, name="byway-tender", daemon=True)
            self._thread.start()

    def end(self) -> None:
        """End, and return when it has."""
        self._ends.set()
        if self._thread is not None:
            self._thread.join()
            self._thread = None

    def _tend(self) -> None:
        every_s = _BUSY_S
        while not self._ends.wait(every_s):
            # A call that is under way looks after everything itself.
            if self._working.acquire(blocking=False):
                try:
                    self._contact.work()
                    source = self._contact.source
                    every_s = (
                        _BUSY_S if source.line else min(_LOOKS_EVERY_S, source.looks_every_s())
                    )
                finally:
                    self._working.release()
