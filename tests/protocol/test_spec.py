"""SPEC.md and the code say the same."""

import ast
import re
from pathlib import Path

import msgpack
import pytest
from pydantic import BaseModel
from tests.protocol.fake_daemon import outcome

from byway import errors, frames, limits, messages
from byway.answer import ROUTE_TABLE
from byway.frames import Header
from byway.packed import DTYPES

SPEC = (Path(__file__).resolve().parents[2] / "protocol" / "SPEC.md").read_text()
SECTIONS = {
    match["kind"]: match["text"]
    for match in re.finditer(
        r"^### `(?P<kind>\w+)`\n(?P<text>.*?)(?=^### |^## |\Z)", SPEC, re.MULTILINE | re.DOTALL
    )
}
models = pytest.mark.parametrize("model", messages.every_message(), ids=lambda model: model.kind)


def blocks(text: str, info: str) -> list[str]:
    """Fenced blocks with this info string."""
    return re.findall(rf"^```{re.escape(info)}\n(.*?)^```$", text, re.MULTILINE | re.DOTALL)


def test_every_message_has_its_section_and_no_other_has() -> None:
    assert set(SECTIONS) == {model.kind for model in messages.every_message()}


@models
def test_the_example_is_a_legal_message(model: type[messages.Message]) -> None:
    (example,) = blocks(SECTIONS[model.kind], "text")
    fields = ast.literal_eval(example)
    # As it travels: through msgpack, and by the strict rules for what clients send.
    told = frames.build(model, msgpack.unpackb(msgpack.packb(fields)))
    assert told.model_dump(exclude_none=True).keys() >= fields.keys()


#: Told elsewhere in the section of the message, or because the other of the two is in the example.
ELSEWHERE = {("cancel", "unit"), ("finish", "replan")}


@models
def test_the_example_has_every_field(model: type[messages.Message]) -> None:
    (example,) = blocks(SECTIONS[model.kind], "text")
    for name in model.model_fields:
        assert f'"{name}"' in example or (model.kind, name) in ELSEWHERE, name


@models
def test_every_field_has_a_comment_or_speaks_for_itself(model: type[messages.Message]) -> None:
    """A line of an example without comment is one whose name was explained before."""
    (example,) = blocks(SECTIONS[model.kind], "text")
    assert "#" in example or not model.model_fields or len(model.model_fields) <= 1


def test_the_outcome_is_told() -> None:
    (example,) = blocks(SPEC, "text outcome")
    fields = ast.literal_eval(example)
    told = frames.build(messages.OutcomeIs, fields)
    assert set(fields) == set(messages.OutcomeIs.model_fields)
    assert told.blocked_by[0].depth_m == 0.3
    for name in ROUTE_TABLE.names or ():
        assert f"`{name}`" in SPEC


def test_outcomes_in_examples_can_be_read() -> None:
    for kind in ("answer", "better"):
        (example,) = blocks(SECTIONS[kind], "text")
        frames.decode_outcome(ast.literal_eval(example)["outcome"], b"")


@pytest.mark.parametrize(
    ("kind", "part"),
    [
        ("site_is", messages.CellsIs),
        ("site_is", messages.LayerIs),
        ("site_is", messages.TrackIs),
        ("site_is", messages.GuardedIs),
        ("guard_is", messages.BlockedIs),
        ("alert", messages.BlockedIs),
    ],
)
def test_parts_of_messages_are_told(kind: str, part: type[BaseModel]) -> None:
    (example,) = blocks(SECTIONS[kind], "text")
    assert all(f'"{name}"' in example for name in part.model_fields)


def test_parts_of_the_outcome_are_told() -> None:
    (example,) = blocks(SPEC, "text outcome")
    for part in (messages.BlockageIs, messages.LegIs, messages.RemedyIs, messages.MovableIs):
        assert all(f'"{name}"' in example for name in part.model_fields)


def test_parts_of_the_health_record_are_told() -> None:
    (example,) = blocks(SECTIONS["health_is"], "text")
    fields = {**messages.LayerHealth.model_fields, **messages.Histogram.model_fields}
    assert all(f'"{name}"' in example for name in fields)


def test_every_header_field_is_told() -> None:
    table = SPEC[SPEC.index("Header fields:") : SPEC.index("Encoding: msgpack")]
    told = set(re.findall(r"^\| `(\w+)` \|", table, re.MULTILINE))
    header = Header("k", "i", "s", 1, "e", "t")
    assert told == set(msgpack.unpackb(frames.encode_header(header)))


def test_every_error_code_is_told_and_no_other() -> None:
    section = SPEC[SPEC.index("## 8. Errors") : SPEC.index("## 9. ")]
    told = set(re.findall(r"^\| `(\w+)` \|", section, re.MULTILINE))
    assert told == set(errors.CODES)
    for local in (errors.DaemonLost, errors.TimedOut, errors.BadReply):
        assert f"`{local.default_code}`" in section


def test_every_limit_is_told_with_its_value() -> None:
    section = SPEC[SPEC.index("## 12. Limits") : SPEC.index("## 13. ")]
    rows = re.findall(r"^\| `(\w+)`( \*)? \| (\S+) \|", section, re.MULTILINE)
    known = {
        name: value
        for name, value in vars(limits).items()
        if isinstance(value, int | float) and not name.startswith("_")
    }
    assert {name: value for name, _, value in rows} == {
        name: f"{value:g}" if isinstance(value, float) else str(value)
        for name, value in known.items()
    }
    assert {name for name, star, _ in rows if star} == set(limits.told())


def test_every_number_format_is_told() -> None:
    section = SPEC[SPEC.index("## 4. ") : SPEC.index("## 5. ")]
    assert all(name in section for name in DTYPES)
    assert limits.name_pattern == r"^[A-Za-z0-9][A-Za-z0-9_.:/#-]{0,63}$"


def test_the_message_in_hex_is_what_the_code_makes() -> None:
    parts = [bytes.fromhex(blocks(SPEC, f"hex {name}")[0]) for name in ("header", "body", "packed")]
    came = frames.decode(parts, frames.UPDATES)
    assert came.header == Header("put", source="5f2a9c10", number=1)
    assert isinstance(came.message, messages.Put)
    assert [
        bytes(frame) for frame in frames.encode(came.header, came.message, came.packed)
    ] == parts
    from byway.obstacles import unpack_shapes

    found = unpack_shapes(came.message, came.packed)
    assert found.polygons["t1"].tolist() == [[0.0, 0.0], [2.0, 0.0], [0.0, 1.0]]
    assert found.discs == {"d1": (5.0, 5.0, 0.5)}


def test_the_caution_stands_at_the_head() -> None:
    assert "**Byway is not a safety function.**" in SPEC[:2000]


def test_a_whole_route_is_read_as_the_document_says() -> None:
    body, packed = outcome(5.0)
    told = frames.decode_outcome(body, packed)
    assert list(told.columns) == list(ROUTE_TABLE.names or ())
