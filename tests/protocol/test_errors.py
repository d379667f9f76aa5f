"""Errors by code, and bounds that fit together."""

import pytest

import byway
from byway import errors, limits


def test_every_code_has_one_class() -> None:
    assert len(errors.CODES) == 21
    for code, kind in errors.CODES.items():
        error = errors.from_code(code, "text", {"a": 1}, 0.5)
        assert type(error) is kind
        assert (error.code, error.text, error.facts, error.retry_after_s) == (
            code,
            "text",
            {"a": 1},
            0.5,
        )
        assert str(error) == f"{code}: text"


def test_a_code_that_is_new_is_handed_on() -> None:
    error = errors.from_code("melted", "too hot")
    assert type(error) is byway.BywayError
    assert error.code == "melted"
    assert error.facts == {}


def test_codes_found_out_by_the_client_never_travel() -> None:
    local = [byway.DaemonLost, byway.TimedOut, byway.BadReply]
    assert not {kind.default_code for kind in local} & set(errors.CODES)
    assert all(issubclass(kind, byway.LinkFault) for kind in local)


def test_every_error_is_exported() -> None:
    for kind in (*errors.CODES.values(), *errors.LinkFault.__subclasses__()):
        assert getattr(byway, kind.__name__) is kind


@pytest.mark.parametrize(
    "rule",
    [
        # A list of the longest ids fits into the body of a drop.
        limits.drop_ids_max * (limits.name_chars_max + 2) + 200 <= limits.body_bytes_max,
        limits.drop_ids_max <= limits.list_entries_max,
        # A header with the longest of everything fits.
        4 * (limits.name_chars_max + 2) + limits.name_chars_max + 100 <= limits.header_bytes_max,
        # Obstacles of a change, each with the longest id and as a triangle, fit twice over.
        limits.obstacles_max * (limits.name_chars_max + 1 + 8 + 48) * 2 <= limits.packed_bytes_max,
        # A little too much still gets an error instead of a closed connection.
        limits.body_bytes_max < limits.requests_frame_bytes_max,
        limits.packed_bytes_max < limits.updates_frame_bytes_max,
        limits.body_bytes_max < limits.updates_frame_bytes_max,
        set(limits.told()) <= set(vars(limits)),
    ],
)
def test_the_bounds_fit_together(rule: bool) -> None:
    assert rule
