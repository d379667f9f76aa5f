"""The values that fields of messages have, and what all messages have in common."""

from typing import Annotated, Any, ClassVar, TypeAlias

from pydantic import BaseModel, ConfigDict, Field, StringConstraints

from byway import limits

Name: TypeAlias = Annotated[str, StringConstraints(strict=True, pattern=limits.name_pattern)]
Text: TypeAlias = Annotated[str, StringConstraints(strict=True, max_length=limits.text_chars_max)]
Flag: TypeAlias = Annotated[bool, Field(strict=True)]
Count: TypeAlias = Annotated[int, Field(strict=True, ge=0, le=limits.number_max)]
Number: TypeAlias = Annotated[int, Field(strict=True, ge=1, le=limits.number_max)]
Real: TypeAlias = Annotated[float, Field(strict=True, allow_inf_nan=False)]
Metres: TypeAlias = Annotated[
    float,
    Field(
        strict=True, allow_inf_nan=False, ge=-limits.coordinate_m_max, le=limits.coordinate_m_max
    ),
]
Distance: TypeAlias = Annotated[
    float, Field(strict=True, allow_inf_nan=False, ge=0.0, le=limits.coordinate_m_max)
]
Seconds: TypeAlias = Annotated[float, Field(strict=True, allow_inf_nan=False, ge=0.0)]
Heading: TypeAlias = Annotated[
    float,
    Field(strict=True, allow_inf_nan=False, ge=-limits.heading_rad_max, le=limits.heading_rad_max),
]
Budget: TypeAlias = Annotated[
    float, Field(strict=True, allow_inf_nan=False, gt=0.0, le=limits.budget_s_max)
]
Expiry: TypeAlias = Annotated[
    float, Field(strict=True, allow_inf_nan=False, gt=0.0, le=limits.expiry_s_max)
]
Age: TypeAlias = Annotated[
    float, Field(strict=True, allow_inf_nan=False, ge=0.0, le=limits.age_s_max)
]
Range: TypeAlias = Annotated[
    float, Field(strict=True, allow_inf_nan=False, gt=0.0, le=limits.range_m_max)
]
Ratio: TypeAlias = Annotated[float, Field(strict=True, allow_inf_nan=False, ge=0.0, lt=1.0)]
Point: TypeAlias = tuple[Metres, Metres]
Pose: TypeAlias = tuple[Metres, Metres, Heading]
Box: TypeAlias = tuple[Metres, Metres, Metres, Metres]


Blob: TypeAlias = Annotated[bytes, Field(strict=True, max_length=limits.reply_bytes_max)]
#: A value of `facts`, `statistics` and `settings`.
Fact: TypeAlias = Any


class Message(BaseModel):
    """The body of one message; `kind` is how its header names it."""

    model_config = ConfigDict(frozen=True, extra="ignore", defer_build=True)
    kind: ClassVar[str] = ""


class Request(Message):
    """What a client sends. Unknown fields are refused."""

    model_config = ConfigDict(frozen=True, extra="forbid", defer_build=True)


class Change(Request):
    """What a source sends to the updates socket; its header has `source` and `number`."""

    layer: Name


class Reply(Message):
    """What a daemon sends. Unknown fields are passed over."""


class BlockedIs(BaseModel):
    """Where a guarded route is blocked, and by what."""

    model_config = ConfigDict(frozen=True, defer_build=True)
    distance_m: Real
    time_s: Real
    at_m: Real
    x_m: Real
    y_m: Real
    heading_rad: Real
    kind: Text
    layer: Text = ""
    id: Text = ""
    depth_m: Real
