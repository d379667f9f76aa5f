"""A source without sockets: numbers, repeats, gaps, and new lives of the daemon."""

import math
from typing import Any

import numpy as np
import pytest

from byway import frames, limits, messages, obstacles, scans, tracks
from byway.frames import Received
from byway.packed import pack
from byway.source import Sent, Source


def put(layer: str, discs: dict[str, Any], **fields: Any) -> tuple[messages.Put, bytes]:
    packed_fields, packed = obstacles.pack_shapes(obstacles.shapes(None, discs))
    return messages.Put(layer=layer, **packed_fields, **fields), packed


def add(source: Source, layer: str, *ids: str, now_s: float = 0.0) -> Sent:
    return source.add(*put(layer, dict.fromkeys(ids, (0, 0, 1))), now_s)


def sent_by(source: Source) -> list[Received]:
    return [frames.decode(parts, frames.UPDATES) for parts in source.unsent(0.0)]


def numbers(source: Source) -> list[int]:
    return [came.header.number for came in sent_by(source)]


def acknowledge(source: Source, number: int, revision: int = 1, now_s: float = 0.0) -> None:
    told = messages.Acknowledged(source=source.name, number=number, revision=revision)
    source.acknowledged(told, now_s)


def resend(source: Source, have: int, epoch: str = "e1") -> None:
    source.resend(messages.Resend(source=source.name, reason="gap", have=have), epoch, 0.0)


@pytest.fixture
def source() -> Source:
    source = Source("s")
    source.begin_again("e1", 0, 0.0)
    return source


def test_numbers_rise_and_are_sent_once(source: Source) -> None:
    add(source, "a", "x")
    add(source, "a", "y")
    came = sent_by(source)
    assert [each.header.number for each in came] == [1, 2]
    assert [each.header.source for each in came] == ["s", "s"]
    assert [each.header.epoch for each in came] == ["e1", "e1"]
    assert numbers(source) == []
    source.send_again()
    assert numbers(source) == [1, 2]


def test_one_acknowledgement_decides_all_before_it(source: Source) -> None:
    made = [add(source, "a", name) for name in "xyz"]
    list(source.unsent(0.0))
    acknowledge(source, 2, revision=7)
    assert [sent.is_decided for sent in made] == [True, True, False]
    assert made[1].revision == 7
    assert set(source.layers["a"].shapes.discs) == {"x", "y"}
    assert numbers(source) == []
    source.send_again()
    assert numbers(source) == [3]


def test_an_acknowledgement_may_come_twice_or_for_what_was_not_sent(source: Source) -> None:
    add(source, "a", "x")
    add(source, "a", "y")
    acknowledge(source, 1)
    acknowledge(source, 1)
    assert numbers(source) == [2]


def test_what_is_refused_is_not_remembered(source: Source) -> None:
    sent = add(source, "a", "x")
    told = messages.Refused(source="s", number=1, code="bad_geometry", text="no")
    source.refused(told)
    source.refused(told)
    acknowledge(source, 1)
    assert sent.error is not None
    assert sent.error.code == "bad_geometry"
    assert source.layers == {}
    assert source.losses == []


def test_a_layer_of_somebody_else_is_forgotten(source: Source) -> None:
    add(source, "a", "x")
    acknowledge(source, 1)
    assert source.knows("a")
    add(source, "a", "y")
    assert source.knows("a")
    source.refused(messages.Refused(source="s", number=2, code="not_owner", text="no"))
    assert not source.knows("a")


def test_a_change_that_waits_makes_its_layer_known(source: Source) -> None:
    assert not source.knows("a")
    add(source, "a", "x")
    assert source.knows("a")
    assert not source.knows("b")


def test_the_window_bounds_what_is_sent(source: Source) -> None:
    for number in range(limits.unacknowledged_max + 2):
        add(source, "a", f"x{number}")
    assert numbers(source) == list(range(1, limits.unacknowledged_max + 1))
    assert not source.has_unsent
    acknowledge(source, 1)
    assert source.has_unsent
    assert numbers(source) == [limits.unacknowledged_max + 1]


def test_a_gap_is_filled_from_where_it_is(source: Source) -> None:
    for name in "xyz":
        add(source, "a", name)
    list(source.unsent(0.0))
    resend(source, have=1)
    assert numbers(source) == [2, 3]
    resend(source, have=3)
    assert numbers(source) == []


def test_a_daemon_that_has_everything_is_sent_nothing(source: Source) -> None:
    add(source, "a", "x")
    acknowledge(source, 1)
    resend(source, have=1)
    assert numbers(source) == []


def test_a_daemon_that_has_forgotten_the_source_gets_its_layers(source: Source) -> None:
    """Same epoch: another source may have put things there before, so nothing is replaced."""
    add(source, "a", "x")
    acknowledge(source, 1)
    waiting = add(source, "a", "y")
    list(source.unsent(0.0))
    resend(source, have=0)
    came = sent_by(source)
    assert [each.header.kind for each in came] == ["claim", "put", "put"]
    assert [each.header.number for each in came] == [1, 2, 3]
    assert waiting.number == 3


def test_a_new_epoch_gets_layers_first_then_what_waits(source: Source) -> None:
    fields, packed = obstacles.pack_shapes(obstacles.shapes(None, {"x": (0, 0, 1)}))
    source.add(messages.ReplaceLayer(layer="a", **fields), packed, 0.0)
    acknowledge(source, 1)
    waiting = add(source, "a", "y")
    resend(source, have=0, epoch="e2")
    came = sent_by(source)
    assert [(each.header.kind, each.header.number) for each in came] == [
        ("replace_layer", 1),
        ("put", 2),
    ]
    assert {each.header.epoch for each in came} == {"e2"}
    acknowledge(source, 2)
    assert waiting.is_decided
    assert set(source.layers["a"].shapes.discs) == {"x", "y"}


def test_two_new_epochs_in_a_row_lose_nothing(source: Source) -> None:
    """What was half restored is restored whole, not what had been acknowledged of it."""
    fields, packed = obstacles.pack_shapes(obstacles.shapes(None, {"x": (0, 0, 1)}))
    source.add(messages.ReplaceLayer(layer="a", **fields), packed, 0.0)
    source.add(*put("a", {"y": (0, 0, 1)}, expires_in_s=100.0), 0.0)
    acknowledge(source, 2)
    source.begin_again("e2", 0, 10.0)
    assert numbers(source) == [1, 2]
    acknowledge(source, 1)
    source.begin_again("e3", 0, 20.0)
    kinds = [(each.header.kind, each.header.epoch) for each in sent_by(source)]
    assert kinds == [("replace_layer", "e3"), ("put", "e3")]
    assert source.line[1].message.expires_in_s == 80.0  # type: ignore[attr-defined]
    acknowledge(source, 2)
    assert set(source.layers["a"].shapes.discs) == {"x", "y"}


def test_a_refused_restoration_is_a_loss(source: Source) -> None:
    add(source, "a", "x")
    acknowledge(source, 1)
    source.begin_again("e2", 0, 0.0)
    source.refused(messages.Refused(source="s", number=1, code="not_owner", text="taken"))
    assert [loss.code for _, loss in source.losses] == ["not_owner"]
    assert source.layers == {}


def test_the_first_epoch_restores_nothing() -> None:
    source = Source("s")
    add(source, "a", "x")
    source.begin_again("e1", 0, 0.0)
    assert [came.header.kind for came in sent_by(source)] == ["put"]


def test_incomplete_patches_are_a_loss_once(
    source: Source, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("byway.strokes.patches_max", 1)
    columns, packed = pack({"cells": np.zeros((2, 2), np.uint8)})
    for x_m in (0.0, 5.0):
        patch = messages.Patch(layer="a", corner_m=(x_m, 0.0), cell_m=0.1, columns=columns)
        source.add(patch, packed, 0.0)
    acknowledge(source, 2)
    source.begin_again("e2", 0, 0.0)
    assert [loss.code for _, loss in source.losses] == ["new_epoch"]
    assert [came.header.kind for came in sent_by(source)] == ["claim", "patch"]
    source.losses.clear()
    source.begin_again("e3", 0, 0.0)
    assert source.losses == []


# -- what has waited ------------------------------------------------------------------------------


def scan_change(age_s: float) -> tuple[messages.Scan, bytes]:
    columns, packed = scans.pack_scan([0.0], [1.0])
    fields = {"origin": (0.0, 0.0, 0.0), "range_m_max": 5.0, "age_s": age_s}
    return messages.Scan(layer="a", columns=columns, **fields), packed


def track_change(age_s: float, **fields: Any) -> tuple[messages.Track, bytes]:
    found = {"fork": tracks.Track(pose=(0, 0, 0), radius_m=1.0)}
    made, packed = tracks.pack_tracks(found)
    return messages.Track(layer="a", age_s=age_s, **made, **fields), packed


def told_after(source: Source, waited_s: float) -> Any:
    (parts,) = source.unsent(waited_s)
    return frames.decode(parts, frames.UPDATES).message


def test_what_was_seen_is_older_when_it_has_waited(source: Source) -> None:
    """Ages count from the sending, and a change may wait for a daemon that is away."""
    source.add(*scan_change(0.5), 0.0)
    assert told_after(source, 3.0).age_s == 3.5
    source.add(*track_change(0.5, expires_in_s=10.0), 0.0)
    told = told_after(source, 3.0)
    assert (told.age_s, told.expires_in_s) == (3.5, 7.0)
    source.add(*track_change(0.5), 0.0)
    told = told_after(source, 3.0)
    assert (told.age_s, told.expires_in_s) == (3.5, None)


def test_what_is_sent_at_once_is_sent_as_it_was_made(source: Source) -> None:
    source.add(*track_change(0.5, expires_in_s=10.0), 0.0)
    told = told_after(source, 0.001)
    assert (told.age_s, told.expires_in_s) == (0.5, 10.0)


def test_obstacles_have_less_time_left_when_they_have_waited(source: Source) -> None:
    source.add(*put("a", {"x": (0, 0, 1)}, expires_in_s=10.0), 0.0)
    assert told_after(source, 4.0).expires_in_s == 6.0
    source.add(*put("a", {"x": (0, 0, 1)}), 0.0)
    assert told_after(source, 4.0).expires_in_s is None


def test_what_has_expired_on_the_way_still_takes_the_place_of_what_is_there(
    source: Source,
) -> None:
    source.add(*put("a", {"x": (0, 0, 1)}, expires_in_s=1.0), 0.0)
    assert told_after(source, 4.0).expires_in_s == 0.001
    source.add(*track_change(0.5, expires_in_s=1.0), 0.0)
    assert told_after(source, 4.0).expires_in_s == 0.001
    source.add(*track_change(30.0), 0.0)
    told = told_after(source, 40.0)
    assert (told.age_s, told.expires_in_s) == (limits.age_s_max, 0.001)


def test_a_scan_that_is_too_old_leaves_its_number_only(source: Source) -> None:
    source.add(*scan_change(30.0), 0.0)
    told = told_after(source, 40.0)
    assert told == messages.Drop(layer="a", ids=[])
    acknowledge(source, 1)
    assert not source.line


# -- layers that are kept -------------------------------------------------------------------------


def claimed(source: Source, layer: str, now_s: float = 0.0, **settings: Any) -> None:
    source.add(messages.Claim(layer=layer, **settings), b"", now_s)
    list(source.unsent(now_s))
    acknowledge(source, source.line[-1].number, now_s=now_s)


def kept(source: Source, now_s: float, **how: Any) -> list[messages.Message]:
    source.keep(now_s, **how)
    return [frames.decode(parts, frames.UPDATES).message for parts in source.unsent(now_s)]


def test_a_lease_is_renewed_in_time(source: Source) -> None:
    claimed(source, "a", lease_s=3.0)
    assert source.keep_at_s() == math.inf  # nobody keeps it
    source.kept.add("a")
    source.kept.add("unknown")
    assert source.keep_at_s() == 1.0
    assert source.looks_every_s() == 0.5
    assert kept(source, 1.0) == [messages.Claim(layer="a", lease_s=3.0)]
    assert source.keep_at_s() == math.inf  # it is under way
    assert kept(source, 2.0) == []
    acknowledge(source, 2)
    assert source.keep_at_s() == 2.0


def test_a_lease_that_may_have_ended_is_asked_for_and_not_taken(source: Source) -> None:
    """A claim would take the layer from whoever has it by now without a lease."""
    claimed(source, "a", lease_s=3.0)
    source.kept.add("a")
    assert kept(source, 5.0) == [messages.Drop(layer="a", ids=[])]


def test_layers_without_a_lease_are_asked_about_only_when_the_daemon_may_be_another(
    source: Source,
) -> None:
    claimed(source, "a")
    source.kept.add("a")
    assert source.keep_at_s() == math.inf
    assert kept(source, 5.0) == []
    assert kept(source, 5.0, asks_who_is_there=True) == [messages.Drop(layer="a", ids=[])]


def test_a_kept_layer_that_was_lost_is_a_loss(source: Source) -> None:
    claimed(source, "a", lease_s=3.0)
    source.kept.add("a")
    kept(source, 1.0)
    source.refused(messages.Refused(source="s", number=2, code="not_owner", text="taken"))
    acknowledge(source, 2)
    assert [(layer, loss.code) for layer, loss in source.losses] == [("a", "not_owner")]
    assert source.keep_at_s() == math.inf
    assert kept(source, 9.0, asks_who_is_there=True) == []


def test_signs_of_life_are_not_repeated_to_a_new_epoch(source: Source) -> None:
    """What restores the layer says more."""
    claimed(source, "a", lease_s=3.0)
    source.kept.add("a")
    kept(source, 1.0)
    source.begin_again("e2", 0, 1.5)
    assert [each.purpose for each in source.line] == ["restore"]


def test_a_refusal_that_nobody_waits_for_is_a_loss(source: Source) -> None:
    message, packed = put("a", {"x": (0, 0, 1)})
    source.add(message, packed, 0.0, is_awaited=False)
    source.refused(messages.Refused(source="s", number=1, code="bad_geometry", text="no"))
    assert [(layer, loss.code) for layer, loss in source.losses] == [("a", "bad_geometry")]
