"""The one door: golden bytes, cut bytes, garbage, strictness, and what errors tell."""

import math
import time
from typing import Any

import msgpack
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.protocol.golden import GOLDEN, SPELLED_OUT

from byway import errors, frames, limits, messages, obstacles
from byway.answer import ROUTE_TABLE
from byway.frames import Door, Header, Received
from byway.packed import pack

DOORS = {
    **{model.kind: frames.REQUESTS for model in messages.REQUESTS},
    **{model.kind: frames.UPDATES for model in messages.CHANGES},
    **{
        model.kind: frames.REPLIES
        for model in (*messages.REQUEST_REPLIES, *messages.CHANGE_REPLIES)
    },
    "better": frames.EVENTS,
    "listening": frames.EVENTS,
}
golden = pytest.mark.parametrize("name", sorted(GOLDEN))


def frames_of(name: str) -> list[bytes]:
    return [bytes.fromhex(frame) for frame in GOLDEN[name][3]]


# -- golden, cut and longer bytes ----------------------------------------------------------------


@pytest.mark.parametrize("name", sorted(SPELLED_OUT))
def test_what_is_as_by_default_may_be_told(name: str) -> None:
    """Older clients tell every field; what they say is the same."""
    header, message, packed, _ = GOLDEN[name]
    body = bytes.fromhex(SPELLED_OUT[name])
    came = frames.decode(frames.encode_raw(header, body, packed), frames.REQUESTS)
    assert came.message == message


@golden
def test_messages_have_their_bytes(name: str) -> None:
    header, message, packed, _ = GOLDEN[name]
    assert [bytes(frame) for frame in frames.encode(header, message, packed)] == frames_of(name)


@golden
def test_bytes_have_their_message(name: str) -> None:
    header, message, packed, _ = GOLDEN[name]
    parts = frames_of(name)
    assert frames.decode(parts, DOORS[name]) == Received(header, message, parts[1], packed)


@golden
def test_a_cut_or_longer_frame_is_refused(name: str) -> None:
    """No prefix of a legal frame is itself legal, and nothing may follow one."""
    parts = frames_of(name)
    # Columns of an answer are checked where they are read.
    checked = [i for i in range(len(parts)) if not (i == 2 and name == "answer")]
    for index in checked:
        frame = parts[index]
        for wrong in (*(frame[:length] for length in range(len(frame))), frame + b"\x00"):
            changed = [*parts[:index], wrong, *parts[index + 1 :]]
            with pytest.raises(errors.BadMessage):
                frames.decode(changed, DOORS[name])


@golden
def test_one_byte_changed_is_read_or_refused_and_nothing_else(name: str) -> None:
    parts = frames_of(name)
    rng = np.random.default_rng(1)
    for _ in range(100):
        changed = [bytearray(frame) for frame in parts]
        frame = changed[int(rng.integers(2))]
        frame[int(rng.integers(len(frame)))] = int(rng.integers(256))
        _decode_whatever([bytes(each) for each in changed])


def _decode_whatever(parts: list[bytes]) -> None:
    for door in (frames.REQUESTS, frames.UPDATES, frames.REPLIES, frames.EVENTS):
        try:
            received = frames.decode(parts, door)
        except errors.SenderFault as fault:
            frames.encode(Header("error", "x"), frames.error_message(fault))
            continue
        _unpack_whatever(received)


def _unpack_whatever(received: Received) -> None:
    try:
        match received.message:
            case messages.Put() | messages.ReplaceLayer() as message:
                obstacles.unpack_shapes(message, received.packed)
            case messages.AnswerMessage() | messages.BetterMessage() as message:
                frames.decode_outcome(message.outcome, received.packed)
    except errors.SenderFault:
        pass


json_like = st.recursive(
    st.none()
    | st.booleans()
    | st.integers(-(2**63), 2**64 - 1)
    | st.floats()
    | st.text(max_size=5)
    | st.binary(max_size=5),
    lambda inner: (
        st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=8), inner, max_size=4)
    ),
    max_leaves=12,
)
known_keys = st.sampled_from(
    sorted({name for model in messages.every_message() for name in model.model_fields})
)
bodies = st.dictionaries(known_keys, json_like, max_size=6)
kinds = st.sampled_from(sorted(DOORS))


@settings(max_examples=100, deadline=None)
@given(st.lists(st.binary(max_size=60), max_size=4))
def test_garbage_is_refused_and_nothing_else_happens(parts: list[bytes]) -> None:
    """Whatever arrives, decode() returns a message or raises SenderFault."""
    _decode_whatever(parts)


@settings(max_examples=100, deadline=None)
@given(kinds, bodies, st.binary(max_size=16))
def test_good_headers_with_any_body_are_read_or_refused(
    kind: str, body: dict[str, Any], packed: bytes
) -> None:
    header = frames.encode_header(Header(kind, id="a", source="s", number=1))
    _decode_whatever([header, msgpack.packb(body), packed])


def test_a_body_full_of_nothing_is_refused_quickly() -> None:
    """The worst that fits: as many empty maps as there is room for."""
    header = frames.encode_header(Header("replan", id="a"))
    many = limits.list_entries_max
    inner = b"\xdc" + many.to_bytes(2, "big") + b"\x80" * many
    outer = b"\x81\xa1x\xdc" + (60).to_bytes(2, "big") + inner * 60
    assert len(outer) < limits.body_bytes_max
    began_s = time.perf_counter()
    with pytest.raises(errors.BadMessage):
        frames.decode([header, outer], frames.REQUESTS)
    assert time.perf_counter() - began_s < 0.25


@pytest.mark.parametrize(
    "body",
    [
        b"\x91" * 5000 + b"\xc0",  # nested deeper than anybody means
        b"\xdd\xff\xff\xff\xff",  # a list of four billion
        b"\xdf\xff\xff\xff\xff",
        b"\x81\xa1x\xd4\x01\x00",  # an extension type
        b"\x81\x01\x02",  # a key that is no text
        b"\x81\xa1\xff\x02",  # a text that is not UTF-8
        b"\x81\xa1x\xdc" + (limits.list_entries_max + 1).to_bytes(2, "big") + b"\x00" * 1001,
        b"\x90",
        b"\x01",
        b"",
    ],
)
def test_bodies_that_are_no_map_of_the_protocol_are_refused(body: bytes) -> None:
    header = frames.encode_header(Header("replan", id="a"))
    with pytest.raises(errors.BadMessage) as caught:
        frames.decode([header, body], frames.REQUESTS)
    assert caught.value.header == Header("replan", id="a")


# -- headers -------------------------------------------------------------------------------------

HELLO = msgpack.packb({"versions": [1], "client": "c"})
DROP = msgpack.packb({"layer": "a", "ids": []})


@pytest.mark.parametrize("count", [0, 1, 4])
def test_other_numbers_of_frames_are_refused(count: int) -> None:
    with pytest.raises(errors.BadMessage, match=f"not {count}"):
        frames.decode([b"\x80"] * count, frames.REQUESTS)


@pytest.mark.parametrize(
    ("header", "error"),
    [
        ({"kind": "hello", "id": "a"}, errors.BadMessage),
        ({"v": True, "kind": "hello", "id": "a"}, errors.BadMessage),
        ({"v": 2, "kind": "hello", "id": "a"}, errors.UnsupportedVersion),
        ({"v": 1, "id": "a"}, errors.BadMessage),
        ({"v": 1, "kind": "", "id": "a"}, errors.BadMessage),
        ({"v": 1, "kind": 7, "id": "a"}, errors.BadMessage),
        ({"v": 1, "kind": "welcome", "id": "a"}, errors.UnknownKind),
        ({"v": 1, "kind": "put", "id": "a"}, errors.UnknownKind),
        ({"v": 1, "kind": "hello"}, errors.BadMessage),
        ({"v": 1, "kind": "hello", "id": 7}, errors.BadMessage),
        ({"v": 1, "kind": "hello", "id": "a" * 65}, errors.BadMessage),
        ({"v": 1, "kind": "hello", "id": "a\n"}, errors.BadMessage),
        ({"v": 1, "kind": "hello", "id": "a", "epoch": b"e"}, errors.BadMessage),
        ({"v": 1, "kind": "hello", "id": "a", "number": -1}, errors.BadMessage),
        ({"v": 1, "kind": "hello", "id": "a", "number": 2**63}, errors.BadMessage),
        ({"v": 1, "kind": "hello", "id": "a", "number": True}, errors.BadMessage),
        ({"v": 1, "kind": "hello", "id": "a", "nubmer": 1}, errors.BadMessage),
        ([], errors.BadMessage),
    ],
)
def test_headers_that_are_wrong_are_refused(
    header: object, error: type[errors.SenderFault]
) -> None:
    with pytest.raises(error):
        frames.decode([msgpack.packb(header), HELLO], frames.REQUESTS)


@pytest.mark.parametrize("missing", ["source", "number"])
def test_a_change_without_source_or_number_is_refused(missing: str) -> None:
    header = {"v": 1, "kind": "drop", "source": "s", "number": 1}
    assert frames.decode([msgpack.packb(header), DROP], frames.UPDATES).header.number == 1
    del header[missing]
    with pytest.raises(errors.BadMessage, match="source and number"):
        frames.decode([msgpack.packb(header), DROP], frames.UPDATES)


def test_a_client_passes_over_header_fields_that_it_does_not_know() -> None:
    header = msgpack.packb({"v": 1, "kind": "noted", "shard": 7})
    body = msgpack.packb({"replans": [], "reason": "new in 1.1"})
    assert frames.decode([header, body], frames.REPLIES).message == messages.Noted(replans=[])


@pytest.mark.parametrize(
    ("door", "which", "size"),
    [
        (frames.REQUESTS, 0, limits.header_bytes_max),
        (frames.REQUESTS, 1, limits.body_bytes_max),
        (frames.REQUESTS, 2, limits.guard_packed_bytes_max),
        (frames.UPDATES, 2, limits.packed_bytes_max),
    ],
)
def test_frames_that_are_too_large_are_refused_unread(door: Door, which: int, size: int) -> None:
    parts = [b"\x80", b"\x80", b""]
    parts[which] = bytes(size + 1)
    with pytest.raises(errors.TooLarge) as caught:
        frames.decode(parts, door)
    assert caught.value.facts == {"bytes": size + 1, "bytes_max": size}


# -- bodies --------------------------------------------------------------------------------------

REPLAN = {
    "vehicle": "tug",
    "unit": "u",
    "start": [0.0, 0.0, 0.0],
    "goal": [1.0, 1.0, 0.0],
    "budget_s": 0.1,
}


def decode_replan(**changes: Any) -> messages.Message:
    body = {**REPLAN, **changes}
    header = frames.encode_header(Header("replan", id="a"))
    return frames.decode([header, msgpack.packb(body)], frames.REQUESTS).message


@pytest.mark.parametrize(
    ("changes", "field", "problem"),
    [
        ({"budget_s": -1.0}, "budget_s", "greater_than"),
        ({"budget_s": 0.0}, "budget_s", "greater_than"),
        ({"budget_s": 61.0}, "budget_s", "less_than_equal"),
        ({"budget_s": math.nan}, "budget_s", "finite_number"),
        ({"start": [0.0, math.inf, 0.0]}, "start.1", "finite_number"),
        ({"start": [0.0, 0.0, 1e9]}, "start.2", "less_than_equal"),
        ({"goal": [1e8, 0.0, 0.0]}, "goal.0", "less_than_equal"),
        ({"vehicle": "two words"}, "vehicle", "string_pattern_mismatch"),
        ({"vehicle": ""}, "vehicle", "string_pattern_mismatch"),
        ({"seed": 2**63}, "seed", "less_than_equal"),
        ({"seed": -1}, "seed", "greater_than_equal"),
        ({"gap_wanted": 1.0}, "gap_wanted", "less_than"),
        ({"clearance_m": -0.1}, "clearance_m", "greater_than_equal"),
        ({"leave_out": ["a"] * 33}, "leave_out", "too_long"),
        ({"start": [0.0, 0.0, 0.0, 0.0]}, "start", "too_long"),
    ],
)
def test_values_that_cannot_be_meant_are_bad_values(
    changes: dict[str, Any], field: str, problem: str
) -> None:
    with pytest.raises(errors.BadValue) as caught:
        decode_replan(**changes)
    assert (caught.value.facts["field"], caught.value.facts["problem"]) == (field, problem)
    assert field in caught.value.text


@pytest.mark.parametrize(
    ("changes", "field"),
    [
        ({"budget_s": "0.1"}, "budget_s"),
        ({"budget_s": True}, "budget_s"),
        ({"seed": 1.0}, "seed"),
        ({"seed": "1"}, "seed"),
        ({"vehicle": b"tug"}, "vehicle"),
        ({"start": [0.0, 0.0]}, "start.2"),
        ({"start": {"x": 0.0}}, "start"),
        ({"start_sped_mps": 1.0}, "start_sped_mps"),
        ({"leave_out": "fixed"}, "leave_out"),
    ],
)
def test_fields_of_another_type_or_name_are_bad_messages(
    changes: dict[str, Any], field: str
) -> None:
    with pytest.raises(errors.BadMessage) as caught:
        decode_replan(**changes)
    assert caught.value.facts["field"] == field


def test_a_missing_field_is_named() -> None:
    body = {name: value for name, value in REPLAN.items() if name != "goal"}
    header = frames.encode_header(Header("replan", id="a"))
    with pytest.raises(errors.BadMessage, match="goal: Field required"):
        frames.decode([header, msgpack.packb(body)], frames.REQUESTS)


def test_the_value_at_fault_is_told() -> None:
    with pytest.raises(errors.BadValue, match=r"got '-1\.0'") as caught:
        decode_replan(budget_s=-1.0)
    assert caught.value.facts["value"] == "-1.0"
    with pytest.raises(errors.BadValue, match="got 'two words'") as caught:
        decode_replan(vehicle="two words")
    assert "value" not in caught.value.facts


def test_whole_numbers_pass_where_a_number_is_wanted_and_nil_is_absent() -> None:
    message = decode_replan(start=[0, 0, 0], budget_s=1, seed=None)
    assert message == messages.Replan(**{**REPLAN, "budget_s": 1.0})


def test_a_long_unknown_name_does_not_fill_the_reply() -> None:
    with pytest.raises(errors.BadMessage) as caught:
        decode_replan(**{"x" * 10_000: 1})
    assert len(caught.value.facts["field"]) == 80
    told = frames.error_message(errors.BadMessage("y" * 5000))
    assert len(told.text) == limits.text_chars_max


@pytest.mark.parametrize("fields", [{}, {"unit": "u", "replan": "r"}])
@pytest.mark.parametrize("kind", ["cancel", "finish"])
def test_cancel_and_finish_name_one_thing(kind: str, fields: dict[str, str]) -> None:
    header = frames.encode_header(Header(kind, id="a"))
    with pytest.raises(errors.BadValue, match="either"):
        frames.decode([header, msgpack.packb(fields)], frames.REQUESTS)
    good = frames.decode([header, msgpack.packb({"unit": "u"})], frames.REQUESTS)
    assert good.message.model_dump() == {"unit": "u", "replan": None}


def test_packed_columns_where_none_belong_are_refused() -> None:
    header = frames.encode_header(Header("drop", source="s", number=1))
    with pytest.raises(errors.BadMessage, match="drop has no packed columns"):
        frames.decode([header, DROP, bytes(8)], frames.UPDATES)


def test_a_patch_has_cells_and_nothing_else() -> None:
    columns = {"cell": {"dtype": "u1", "shape": [1, 8], "offset": 0}}
    body = {"layer": "a", "corner_m": [0.0, 0.0], "cell_m": 0.1, "columns": columns}
    header = frames.encode_header(Header("patch", source="s", number=1))
    with pytest.raises(errors.BadMessage, match="must be cells"):
        frames.decode([header, msgpack.packb(body), bytes(8)], frames.UPDATES)


def test_views_of_a_larger_buffer_are_read_as_well() -> None:
    parts = [memoryview(frame) for frame in frames_of("patch")]
    came = frames.decode(parts, frames.UPDATES)
    assert came.message == GOLDEN["patch"][1]
    assert isinstance(came.body, bytes)


# -- outcomes ------------------------------------------------------------------------------------


def test_an_outcome_is_read_with_its_columns() -> None:
    told = messages.OutcomeIs(kind="not_found", gap=1.0, seed=1)
    assert frames.decode_outcome(frames.encode_body(told), b"") == told
    with pytest.raises(errors.BadMessage, match="8 bytes"):
        frames.decode_outcome(frames.encode_body(told), bytes(8))
    with pytest.raises(errors.BadMessage, match="outcome"):
        frames.decode_outcome(b"\xc1", b"")


def test_all_validators_can_be_built_ahead() -> None:
    messages.build_all()
    assert all(model.__pydantic_complete__ for model in messages.every_message())


# -- what came with guards, scans and tracks ------------------------------------------------------


def guard_frames(rows: int, **changes: Any) -> list[Any]:
    """A request to guard a route of so many rows, but for the changes."""
    table = np.zeros(rows, ROUTE_TABLE)
    columns = {name: table[name] for name in ROUTE_TABLE.names or ()}
    described, packed = pack({**columns, **changes})
    message = messages.Guard(vehicle="tug", unit="u", columns=described)
    return frames.encode(Header("guard", "a-1"), message, packed)


def test_a_route_comes_through_the_door() -> None:
    came = frames.decode(guard_frames(limits.guard_rows_max), frames.REQUESTS)
    assert isinstance(came.message, messages.Guard)
    assert len(came.packed) == limits.guard_packed_bytes_max


@pytest.mark.parametrize(
    ("rows", "changes", "error"),
    [
        (0, {}, errors.BadMessage),
        (3, {"x_m": np.zeros(2)}, errors.BadMessage),
        (3, {"gear": np.zeros(3)}, errors.BadMessage),
        (3, {"other": np.zeros(3)}, errors.BadMessage),
    ],
)
def test_a_route_of_other_columns_is_refused(
    rows: int, changes: dict[str, Any], error: type[errors.SenderFault]
) -> None:
    with pytest.raises(error):
        frames.decode(guard_frames(rows, **changes), frames.REQUESTS)


def test_a_route_without_times_or_too_long_is_refused() -> None:
    header, _, packed = guard_frames(1)
    body = {"vehicle": "tug", "unit": "u", "columns": {}}
    with pytest.raises(errors.BadMessage, match="columns must be"):
        frames.decode([header, msgpack.packb(body), packed], frames.REQUESTS)
    rows = limits.guard_rows_max + 1
    body["columns"] = {"t_s": {"dtype": "<f8", "shape": [rows], "offset": 0}}
    with pytest.raises(errors.TooLarge, match="rows"):
        frames.decode([header, msgpack.packb(body), packed], frames.REQUESTS)


def test_scans_and_tracks_are_checked_at_the_door() -> None:
    body = {"layer": "a", "columns": {}}
    for kind, rest in (
        ("scan", {"origin": [0.0, 0.0, 0.0], "range_m_max": 5.0}),
        ("track", {}),
    ):
        header = frames.encode_header(Header(kind, source="s", number=1))
        with pytest.raises(errors.BadMessage, match="columns must be"):
            frames.decode([header, msgpack.packb({**body, **rest})], frames.UPDATES)


@pytest.mark.parametrize(
    ("kind", "rest"),
    [
        ("scan", {"origin": [0.0, 0.0, 0.0], "range_m_max": 5.0, "age_s": -0.1}),
        ("scan", {"origin": [0.0, 0.0, 0.0], "range_m_max": 5.0, "age_s": 61.0}),
        ("scan", {"origin": [0.0, float("nan"), 0.0], "range_m_max": 5.0}),
        ("scan", {"origin": [0.0, 0.0, 0.0], "range_m_max": 0.0}),
        ("scan", {"origin": [0.0, 0.0, 0.0], "range_m_max": 1001.0}),
        ("track", {"age_s": -0.1}),
        ("track", {"expires_in_s": 0.0}),
        ("patch", {"corner_m": [0.0, 0.0], "cell_m": 0.1, "heading_rad": float("inf")}),
        ("claim", {"expected_period_s": -1.0}),
        ("claim", {"decay_s": 0.0}),
    ],
)
def test_values_that_cannot_be_meant_are_refused(kind: str, rest: dict[str, Any]) -> None:
    header = frames.encode_header(Header(kind, source="s", number=1))
    columns = {} if kind == "claim" else {"columns": {}}
    with pytest.raises(errors.BadValue):
        frames.decode([header, msgpack.packb({"layer": "a", **columns, **rest})], frames.UPDATES)
