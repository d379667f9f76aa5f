"""The part of the blocking client that changes the site."""

from abc import ABC, abstractmethod
from collections.abc import Iterable, Sequence
from typing import Any, Unpack

import numpy.typing as npt

from byway import changing, obstacles, scans, tracks
from byway.changing import LayerSettings
from byway.contact import Contact
from byway.link import Result, Steps


class ClientChanges(ABC):
    """Changes of the site, each of which waits until it is visible."""

    _contact: Contact

    @abstractmethod
    def _run(self, steps: Steps[Result]) -> Result:
        """Take all steps."""

    def _change(self, made: Sequence[changing.Made]) -> int:
        return self._run(self._contact.change(made))

    def claim(self, layer: str, **settings: Unpack[LayerSettings]) -> int:
        """
        Own a layer from now on, with what is in it; make it if there is none. Returns the revision.

        Args:
            layer: Its name.
            settings: lease_s, unknown_blocks, outlines_only, durable, expected_period_s,
                when_stale, decay_s: see `LayerSettings`. What a layer is (unknown_blocks,
                outlines_only, durable, decay_s) is told by its first claim.

        Raises:
            NotOwner: Another source has it under a lease.
            Conflict: It exists and is something else.
        """
        return self._change(changing.claim(layer, settings))

    def replace_layer(
        self,
        layer: str,
        polygons: obstacles.Polygons | None = None,
        discs: obstacles.Discs | None = None,
        *,
        boxes: obstacles.Boxes | None = None,
        expires_in_s: float | None = None,
        **settings: Unpack[LayerSettings],
    ) -> int:
        """
        Claim a layer, forget all it holds, and put these obstacles: one change.

        Args and errors: as `claim` and `put`. Returns the revision that has it.
        """
        return self._change(
            changing.replace_layer(layer, polygons, discs, boxes, expires_in_s, settings)
        )

    def put(
        self,
        layer: str,
        polygons: obstacles.Polygons | None = None,
        discs: obstacles.Discs | None = None,
        expires_in_s: float | None = None,
        *,
        boxes: obstacles.Boxes | None = None,
    ) -> int:
        """
        Add obstacles, or move those whose ids are there. Returns the revision that has them.

        Args:
            layer: Claimed first if this client does not have it yet.
            polygons: {id: [(x, y), ...]}, metres, three points or more, not crossing itself; or
                {id: {"outline": ..., "holes": [...]}} of such.
            discs: {id: (x, y, radius)}, metres.
            expires_in_s: They go after this time.
            boxes: {id: (x, y, heading_rad, length, width)} of the middle, length along heading.

        Raises:
            BadGeometry, OutsideLimits, TooLarge: Nothing was changed.
            NotOwner: The layer belongs to another source.
            LinkFault: The change stays in line and is sent again at the next call.
        """
        return self._change(changing.put(layer, polygons, discs, boxes, expires_in_s))

    def drop(self, layer: str, ids: Iterable[str]) -> int:
        """
        Take obstacles away, moving ones too; ids that are not there are passed over.

        More than `limits.drop_ids_max` go in several changes. Returns the revision.
        """
        return self._change(changing.drop(layer, ids))

    def patch(
        self,
        layer: str,
        corner_m: Sequence[float],
        cell_m: float,
        cells: npt.NDArray[Any],
        heading_rad: float = 0.0,
    ) -> int:
        """
        Overwrite a rectangle of cells. Returns the revision that has it.

        Args:
            layer: Claimed first if this client does not have it yet.
            corner_m: x, y of the lower left corner of cells[0, 0].
            cell_m: Side of a cell.
            cells: uint8 (rows, columns): 0 free, 1 occupied, 2 unknown; row 0 at the lowest y.
            heading_rad: Of the rows: the patch is turned about the corner.

        Raises:
            As `put`; BadValue: the cells are not uint8 in two dimensions.
        """
        return self._change(changing.patch(layer, corner_m, cell_m, cells, heading_rad))

    def scan(
        self,
        layer: str,
        origin: Sequence[float],
        bearings_rad: scans.Numbers,
        ranges_m: scans.Numbers,
        range_m_max: float,
        range_m_min: float = 0.0,
        age_s: float = 0.0,
    ) -> int:
        """
        Free the cells along the beams of a range sensor, fill those at their ends.

        Args:
            layer: Claimed first if this client does not have it yet.
            origin: x_m, y_m, heading_rad of the sensor.
            bearings_rad: (n,), counter-clockwise from that heading.
            ranges_m: (n,); not below `range_m_max` where a beam met nothing. float32 is sent as it
                is.
            range_m_max: Where such a beam ends.
            range_m_min: Shorter ranges say nothing.
            age_s: Since it was measured.

        Returns:
            The revision that has it.

        Raises:
            As `put`; BadGeometry: a range that is negative or no number.
        """
        return self._change(
            changing.scan(layer, origin, bearings_rad, ranges_m, range_m_max, range_m_min, age_s)
        )

    def track(
        self,
        layer: str,
        found: tracks.Tracks,
        age_s: float = 0.0,
        expires_in_s: float | None = None,
    ) -> int:
        """
        Tell where moving obstacles are, and how they move. Returns the revision that has them.

        Args:
            layer: Claimed first if this client does not have it yet.
            found: {id: `Track`}.
            age_s: Since they were seen.
            expires_in_s: They go after this time, unless they are told again; by default a
                setting of the daemon.

        Raises:
            As `put`.
        """
        return self._change(changing.track(layer, found, age_s, expires_in_s))
