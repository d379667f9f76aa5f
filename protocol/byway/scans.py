"""One sweep of a range sensor as packed columns: `bearings_rad` and `ranges_m`."""

from collections.abc import Sequence
from typing import Any, Final, TypeAlias

import numpy as np
import numpy.typing as npt

from byway import limits, messages
from byway.errors import BadGeometry, BadMessage, BadValue
from byway.obstacles import check_count
from byway.packed import Bytes, Column, check_columns, pack, read

#: An array, or numbers one by one.
Numbers: TypeAlias = Sequence[float] | npt.NDArray[Any]

_FORMATS: Final = ("<f4", "<f8")


def pack_scan(bearings_rad: Numbers, ranges_m: Numbers) -> tuple[dict[str, Column], bytes]:
    """
    Return the columns of a scan and the packed frame; float32 stays float32.

    Args:
        bearings_rad: Of the beams, counter-clockwise from the heading of the sensor.
        ranges_m: Where each ended; infinity where it met nothing.

    Raises:
        BadGeometry: Not as many ranges as bearings, or numbers that no sensor can mean.
        TooLarge: More than `limits.beams_max`.
    """
    bearings, ranges = _beams("bearings_rad", bearings_rad), _beams("ranges_m", ranges_m)
    if len(bearings) != len(ranges):
        raise BadGeometry(
            f"{len(bearings)} bearings and {len(ranges)} ranges", {"field": "ranges_m"}
        )
    check_count(len(ranges), "beams", limits.beams_max)
    _check_beams(bearings, ranges)
    return pack({"bearings_rad": bearings, "ranges_m": ranges})


def _beams(field: str, values: Numbers) -> npt.NDArray[np.floating[Any]]:
    try:
        given = np.asarray(values)
        array = given if given.dtype in (np.float32, np.float64) else given.astype(np.float64)
    except (TypeError, ValueError):
        array = np.empty((0, 0))
    if array.ndim != 1:
        raise BadGeometry(f"{field} must be a list of numbers", {"field": field})
    return array


def check(message: messages.Scan, packed: Bytes) -> None:
    """Check bounds and sizes, without a look at the beams. Raises SenderFault."""
    if message.range_m_min >= message.range_m_max:
        raise BadValue(
            f"range_m_min {message.range_m_min:g} must be below range_m_max "
            f"{message.range_m_max:g}",
            {"field": "range_m_min"},
        )
    columns = message.columns
    beams = columns["ranges_m"].shape[0] if "ranges_m" in columns else 0
    check_count(beams, "beams", limits.beams_max)
    for name in ("bearings_rad", "ranges_m"):
        if name in columns and columns[name].dtype not in _FORMATS:
            raise BadMessage(
                f"column {name} is {columns[name].dtype} and must be {' or '.join(_FORMATS)}",
                {"field": f"columns.{name}"},
            )
    dtypes = {name: column.dtype for name, column in columns.items()}
    check_columns(
        columns,
        packed,
        {name: (dtypes.get(name, "<f4"), (beams,)) for name in ("bearings_rad", "ranges_m")},
    )


def unpack_scan(
    message: messages.Scan, packed: Bytes
) -> tuple[npt.NDArray[np.floating[Any]], npt.NDArray[np.floating[Any]]]:
    """
    Return bearings and ranges of a scan that came through the door, as views of its frame.

    Raises:
        BadGeometry: A bearing that is not finite, a range that is negative or no number.
    """
    bearings = read(message.columns["bearings_rad"], packed)
    ranges = read(message.columns["ranges_m"], packed)
    _check_beams(bearings, ranges)
    return bearings, ranges


def _check_beams(
    bearings: npt.NDArray[np.floating[Any]], ranges: npt.NDArray[np.floating[Any]]
) -> None:
    # NaN compares false with everything, so what is good is asked for.
    good = (np.abs(bearings) <= limits.heading_rad_max) & (ranges >= 0.0)
    if not good.all():
        beam = int(np.argmin(good))
        raise BadGeometry(
            f"beam {beam} has the bearing {bearings[beam]} and the range {ranges[beam]}; leave out "
            "beams that failed",
            {"beam": beam, "problem": "bad_scan"},
        )
