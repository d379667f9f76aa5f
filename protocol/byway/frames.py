"""
The one door between frames and messages.

`decode` checks from the cheapest to the dearest: number of frames, their sizes, the header
(msgpack, version, kind, its few fields), the body (msgpack, schema), and that the columns fit
the packed frame. It touches no column. Nothing but a BywayError escapes, whatever comes in,
and an error of the body carries the header, so that the receiver can say whose request it was.
"""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final, TypeVar

import msgpack
from pydantic import BaseModel, ValidationError

from byway import limits, messages, obstacles, scans, tracks
from byway.errors import (
    BadMessage,
    BadValue,
    BywayError,
    SenderFault,
    TooLarge,
    UnknownKind,
    UnsupportedVersion,
)
from byway.header import Header as Header  # part of what the door hands out
from byway.packed import Bytes, check_columns, route_columns

Model = TypeVar("Model", bound=BaseModel)


@dataclass(frozen=True, slots=True)
class Received:
    """
    A message as it came through the door.

    Attributes:
        header: As decoded.
        message: The body as a model.
        body: The body as it came, to be handed on or compared.
        packed: The packed frame as it came; empty if there was none.
    """

    header: Header
    message: messages.Message
    body: bytes
    packed: Bytes


@dataclass(frozen=True, slots=True)
class Door:
    """One direction of one socket: which messages pass, and how large they may be."""

    name: str
    kinds: Mapping[str, type[messages.Message]]
    body_bytes_max: int
    packed_bytes_max: int
    strict: bool  # unknown header fields are refused


def _door(
    name: str,
    models: Iterable[type[messages.Message]],
    body_bytes_max: int,
    packed_bytes_max: int,
    *,
    strict: bool,
) -> Door:
    kinds = {model.kind: model for model in models}
    return Door(name, kinds, body_bytes_max, packed_bytes_max, strict)


#: To the daemon.
REQUESTS: Final = _door(
    "requests",
    messages.REQUESTS,
    limits.body_bytes_max,
    limits.guard_packed_bytes_max,
    strict=True,
)
UPDATES: Final = _door(
    "updates", messages.CHANGES, limits.body_bytes_max, limits.packed_bytes_max, strict=True
)
#: To a client.
REPLIES: Final = _door(
    "replies",
    (*messages.REQUEST_REPLIES, *messages.CHANGE_REPLIES),
    limits.reply_bytes_max,
    limits.reply_bytes_max,
    strict=False,
)
EVENTS: Final = _door(
    "events", messages.EVENTS, limits.reply_bytes_max, limits.reply_bytes_max, strict=False
)


def encode(header: Header, message: messages.Message, packed: Bytes = b"") -> list[Bytes]:
    """
    Return the frames of a message.

    Fields that are None are left out: absent and null mean the same.
    """
    return encode_raw(header, encode_body(message), packed)


def encode_raw(header: Header, body: Bytes, packed: Bytes = b"") -> list[Bytes]:
    """Return the frames of a message whose body is encoded already."""
    frames: list[Bytes] = [encode_header(header), body]
    if len(packed):
        frames.append(packed)
    return frames


def encode_header(header: Header) -> bytes:
    """Return the first frame."""
    fields: dict[str, str | int] = {"v": header.version, "kind": header.kind}
    if header.id:
        fields["id"] = header.id
    if header.source:
        fields["source"] = header.source
    if header.number:
        fields["number"] = header.number
    if header.epoch:
        fields["epoch"] = header.epoch
    if header.traceparent:
        fields["traceparent"] = header.traceparent
    return _packb(fields)


def encode_body(message: BaseModel) -> bytes:
    """
    Return the second frame of a message, or an outcome.

    What a client sends has no field that is as it is by default: a daemon that is older than the
    field would refuse the message for it.
    """
    is_request = isinstance(message, messages.Request)
    return _packb(message.model_dump(exclude_none=True, exclude_defaults=is_request))


def _packb(value: object) -> bytes:
    packed: bytes = msgpack.packb(value, use_bin_type=True)
    return packed


def decode(frames: Sequence[Bytes], door: Door) -> Received:
    """
    Turn frames into a message.

    Args:
        frames: Without routing id and topic.
        door: `REQUESTS`, `UPDATES`, `REPLIES` or `EVENTS`.

    Raises:
        SenderFault: With the code that belongs to it, and the attribute `header` where the
            header was good. Nothing else escapes.
    """
    if not 2 <= len(frames) <= limits.frames_max:
        raise BadMessage(
            f"a message has 2 frames, or 3 with packed columns, not {len(frames)}",
            {"frames": len(frames)},
        )
    packed = frames[2] if len(frames) == limits.frames_max else b""
    _check_size("header", frames[0], limits.header_bytes_max)
    _check_size("body", frames[1], door.body_bytes_max)
    _check_size("packed columns", packed, door.packed_bytes_max)
    header = _header(_unpack(frames[0], "header"), door)
    try:
        model = door.kinds.get(header.kind)
        if model is None:
            raise UnknownKind(
                f"no message of kind {header.kind!r} goes to {door.name}", {"kind": header.kind}
            )
        message = build(model, _unpack(frames[1], "body", wide=not door.strict))
        _check_sense(message, packed)
    except SenderFault as fault:
        fault.header = header
        raise
    return Received(header, message, bytes(frames[1]), packed)


def decode_outcome(outcome: Bytes, packed: Bytes) -> messages.OutcomeIs:
    """Turn the `outcome` of an answer into its model. Raises SenderFault."""
    found = build(messages.OutcomeIs, _unpack(outcome, "outcome", wide=True))
    check_columns(found.columns, packed)
    return found


def build(model: type[Model], fields: Mapping[str, Any]) -> Model:
    """
    Return the model of some fields.

    Raises:
        BadMessage: If fields are missing, unknown or of the wrong type.
        BadValue: If a field has a value that is out of bounds.
    """
    try:
        return model.model_validate(fields)
    except ValidationError as exc:
        raise _fault_of(exc) from None


#: What pydantic calls a value of the right type that is out of bounds.
_VALUE_PROBLEMS: Final = frozenset(
    {
        *("greater_than", "greater_than_equal", "less_than", "less_than_equal", "finite_number"),
        *("string_pattern_mismatch", "string_too_long", "too_long", "too_short", "bytes_too_long"),
        "value_error",
    }
)


def _fault_of(exc: ValidationError) -> SenderFault:
    first = exc.errors(include_url=False, include_context=False)[0]
    field = ".".join(str(part)[:80] for part in first["loc"]) or "body"
    value = first["input"] if isinstance(first["input"], str | int | float) else None
    facts = {"field": field, "problem": first["type"]}
    shown = "" if value is None else f" (got {str(value)[:80]!r})"
    if isinstance(value, int | float) and not isinstance(value, bool):
        # Text, for NaN and numbers of more than 64 bits travel badly.
        facts["value"] = str(value)
    text = f"{field}: {first['msg']}{shown}"
    return (BadValue if first["type"] in _VALUE_PROBLEMS else BadMessage)(text, facts)


def _check_size(what: str, frame: Bytes, bytes_max: int) -> None:
    if len(frame) > bytes_max:
        raise TooLarge(
            f"the {what} has {len(frame)} bytes, the most is {bytes_max}",
            {"bytes": len(frame), "bytes_max": bytes_max},
        )


def _unpack(frame: Bytes, what: str, *, wide: bool = False) -> dict[str, Any]:
    """
    Return the map in a frame.

    A narrow frame has few entries (it came from a client); a wide one as many as it likes.
    """
    size = len(frame)
    try:
        value = msgpack.unpackb(
            frame,
            raw=False,
            strict_map_key=True,
            max_map_len=size if wide else limits.map_entries_max,
            max_array_len=size if wide else limits.list_entries_max,
            max_str_len=size,
            max_bin_len=size,
            max_ext_len=0,
        )
    except Exception as exc:  # msgpack documents no single base class
        raise BadMessage(f"the {what} is not msgpack: {type(exc).__name__}") from None
    if not isinstance(value, dict):
        raise BadMessage(f"the {what} must be a map, not {type(value).__name__}")
    return value


_HEADER_TEXTS: Final = ("id", "source", "epoch", "traceparent")
_HEADER_FIELDS: Final = frozenset({"v", "kind", "number", *_HEADER_TEXTS})


def _header(fields: dict[str, Any], door: Door) -> Header:
    # By hand: a model costs three times as much, and this is the one part that every message has.
    version = fields.get("v")
    if type(version) is not int:
        raise BadMessage("the header has no whole number v", {"field": "v"})
    if version != limits.spec_version:
        raise UnsupportedVersion(
            f"version {version}; this side speaks {limits.spec_version}",
            {"versions": [limits.spec_version]},
        )
    kind = fields.get("kind")
    if type(kind) is not str or not 0 < len(kind) <= limits.name_chars_max:
        raise BadMessage("the header has no kind", {"field": "kind"})
    number = fields.get("number", 0)
    if type(number) is not int or not 0 <= number <= limits.number_max:
        raise BadMessage("number in the header is not a whole number", {"field": "number"})
    texts = [fields.get(name, "") for name in _HEADER_TEXTS]
    for name, text in zip(_HEADER_TEXTS, texts, strict=True):
        if type(text) is not str or len(text) > limits.name_chars_max or not text.isprintable():
            raise BadMessage(f"{name} in the header is not a short text", {"field": name})
    header = Header(kind, texts[0], texts[1], number, texts[2], texts[3])
    if door.strict:
        if not fields.keys() <= _HEADER_FIELDS:
            unknown = ", ".join(sorted(fields.keys() - _HEADER_FIELDS))
            raise BadMessage(f"unknown in the header: {unknown[:200]}", {"field": unknown[:200]})
        _check_address(header, door)
    return header


def _check_address(header: Header, door: Door) -> None:
    if door.name == UPDATES.name:
        if not header.source or not header.number:
            raise BadMessage("a change needs source and number in its header")
    elif not header.id:
        raise BadMessage("a request needs an id in its header", {"field": "id"})


def _check_sense(message: messages.Message, packed: Bytes) -> None:
    """Check what one field alone does not say, from the description of the columns only."""
    match message:
        case messages.Put() | messages.ReplaceLayer():
            obstacles.check(message, packed)
        case messages.Patch():
            check_columns(message.columns, packed, {"cells": ("u1", (None, None))})
        case messages.Scan():
            scans.check(message, packed)
        case messages.Track():
            tracks.check(message, packed)
        case messages.Guard():
            _check_route(message, packed)
        case messages.Cancel() | messages.Finish():
            if (message.replan is None) == (message.unit is None):
                raise BadValue("name either the replan or the unit", {"field": "replan"})
        case messages.AnswerMessage() | messages.BetterMessage() | messages.Rerouted():
            pass  # their columns are checked where they are read
        case messages.SiteIs():
            pass
        case _:
            if len(packed):
                raise BadMessage(f"{message.kind} has no packed columns")


def _check_route(message: messages.Guard, packed: Bytes) -> None:
    rows = message.columns["t_s"].shape[0] if "t_s" in message.columns else 0
    if rows > limits.guard_rows_max:
        raise TooLarge(
            f"a route of {rows} rows, the most is {limits.guard_rows_max}",
            {"rows": rows, "rows_max": limits.guard_rows_max},
        )
    check_columns(message.columns, packed, route_columns(rows))
    if rows == 0:
        raise BadMessage("a route has one row or more", {"field": "columns.t_s"})


def error_message(error: BywayError) -> messages.ErrorMessage:
    """Return the `error` that tells a peer of an exception."""
    return messages.ErrorMessage(
        code=error.code,
        text=error.text[: limits.text_chars_max],
        facts=error.facts,
        retry_after_s=error.retry_after_s,
    )
