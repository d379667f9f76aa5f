"""Changes of the site, and the replies to them."""

from typing import Annotated, Literal, TypeAlias

from pydantic import Field

from byway import limits
from byway.message_base import (
    Age,
    Change,
    Count,
    Distance,
    Expiry,
    Fact,
    Flag,
    Heading,
    Name,
    Number,
    Point,
    Pose,
    Range,
    Reply,
    Seconds,
    Text,
)
from byway.packed import Columns

#: What becomes of replans and of those who watch when a layer has not changed for too long.
WhenStale: TypeAlias = Literal["ignore", "report", "refuse"]


class Claim(Change):
    """Own a layer from now on; make it if there is none."""

    kind = "claim"
    lease_s: Expiry | None = None
    unknown_blocks: Flag | None = None
    outlines_only: Flag | None = None
    durable: Flag | None = None
    expected_period_s: Expiry | None = None
    when_stale: WhenStale | None = None
    decay_s: Expiry | None = None


class Put(Change):
    """Add obstacles, or move those whose ids are there already."""

    kind = "put"
    polygons: Count = 0
    discs: Count = 0
    boxes: Count = 0
    expires_in_s: Expiry | None = None
    columns: Columns


class ReplaceLayer(Change):
    """Claim a layer, forget all it holds, and put these obstacles: one change."""

    kind = "replace_layer"
    lease_s: Expiry | None = None
    unknown_blocks: Flag | None = None
    outlines_only: Flag | None = None
    durable: Flag | None = None
    expected_period_s: Expiry | None = None
    when_stale: WhenStale | None = None
    decay_s: Expiry | None = None
    polygons: Count = 0
    discs: Count = 0
    boxes: Count = 0
    expires_in_s: Expiry | None = None
    columns: Columns


class Drop(Change):
    """Take obstacles away; ids that are not there are passed over."""

    kind = "drop"
    ids: Annotated[list[Name], Field(max_length=limits.drop_ids_max)]


class Patch(Change):
    """Overwrite a rectangle of cells."""

    kind = "patch"
    corner_m: Point
    cell_m: Annotated[float, Field(strict=True, ge=limits.cell_m_min, le=limits.cell_m_max)]
    heading_rad: Heading = 0.0
    columns: Columns


class Scan(Change):
    """One sweep of a range sensor: frees the cells along its beams, fills those at their ends."""

    kind = "scan"
    origin: Pose
    range_m_max: Range
    range_m_min: Distance = 0.0
    age_s: Age = 0.0
    columns: Columns


class Track(Change):
    """Obstacles that move; those whose ids are there already are where this says."""

    kind = "track"
    polygons: Count = 0
    discs: Count = 0
    age_s: Age = 0.0
    expires_in_s: Expiry | None = None
    columns: Columns


#: Whatever a source may send.
AnyChange: TypeAlias = Claim | Put | ReplaceLayer | Drop | Patch | Scan | Track


class Acknowledged(Reply):
    """All changes of the source up to `number` are decided; those not refused are visible."""

    kind = "acknowledged"
    source: Text
    number: Number
    revision: Count


class Refused(Reply):
    """One change was refused and changed nothing."""

    kind = "refused"
    source: Text
    number: Number
    code: Text
    text: Text
    facts: dict[str, Fact] = {}
    retry_after_s: Seconds | None = None


class Resend(Reply):
    """The daemon has the changes of the source up to `have`, and needs what came after."""

    kind = "resend"
    source: Text
    reason: Text
    have: Count
    retry_after_s: Seconds | None = None
