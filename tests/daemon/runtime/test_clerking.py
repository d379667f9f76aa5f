"""What is to be kept goes to the clerk and comes back as it was."""

from __future__ import annotations

import pytest
from tests.daemon.crew.keeping_changes import patch, put

from byway import limits, messages
from bywayd.core import kept
from bywayd.core.effects import Change, LayerFlags
from bywayd.core.instants import Duration, Instant
from bywayd.runtime.clerking import keepsake_message
from bywayd.runtime.translate import Nonsense, event_of

FLAGS = LayerFlags(unknown_blocks=True, durable=True)
TERMS = {"expected_period_s": 2.5, "when_stale": "refuse"}


def a_put() -> messages.Put:
    fields = {name: value for name, value in put(a=(1, 2, 3))["message"].items() if name != "layer"}
    return messages.Put(layer="stacks", **fields)


def test_a_keepsake_has_all_that_the_layer_is_and_when_it_ends() -> None:
    change = Change("put", "stacks", FLAGS, a_put(), memoryview(b"columns"))
    told = keepsake_message(
        kept.Keepsake(change, Instant(7), TERMS), lambda instant: instant.ns + 1000
    )
    assert told["expires_ns"] == 1007
    assert told["packed"] == b"columns"
    assert told["settings"]["durable"]
    assert told["settings"]["when_stale"] == "refuse"
    assert messages.Put(**told["message"]) == a_put()


def test_what_has_no_body_and_no_end_says_so() -> None:
    change = Change("drop", "stacks", FLAGS, ids=("a", "b"))
    told = keepsake_message(kept.Keepsake(change), lambda instant: instant.ns)
    assert (told["message"], told["expires_ns"], told["ids"]) == (None, None, ("a", "b"))


def back(**more: object) -> dict[str, object]:
    settings = {"unknown_blocks": True, "outlines_only": False, "durable": True, **TERMS}
    told = {"what": "claim", "layer": "stacks", "settings": settings, "message": None}
    return {**told, "packed": b"", "ids": [], "expires_in_s": None, **more}


def recalled(*found: dict[str, object]) -> kept.Recalled:
    said = {"say": "recalled", "task": 3, "changes": list(found), "place": [1, 9]}
    event = event_of("clerk", 4, said)
    assert isinstance(event, kept.Recalled)
    return event


def test_what_is_recalled_is_what_was_kept() -> None:
    body = {name: value for name, value in put(a=(1, 2, 3))["message"].items() if name != "layer"}
    cells = patch(0, 0, 2, 2)
    event = recalled(
        back(),
        back(what="put", message=body, packed=b"columns", ids=["a"], expires_in_s=2.5),
        back(what="patch", message=cells["message"], packed=cells["packed"]),
    )
    assert (event.clerk, event.task, event.place) == (4, 3, [1, 9])
    claim, one, ground = event.found
    assert claim == kept.Recollection(Change("claim", "stacks", FLAGS), TERMS)
    assert one.change == Change("put", "stacks", FLAGS, a_put(), b"columns")
    assert (one.ids, one.expires_in) == (("a",), Duration.of_s(2.5))
    assert ground.change.what == "patch"
    assert isinstance(ground.change.message, messages.Patch)


def test_a_wall_clock_that_was_set_back_does_not_make_things_last_for_ever() -> None:
    body = a_put().model_dump(exclude={"layer"})
    (found,) = recalled(back(what="put", message=body, ids=["a"], expires_in_s=1e12)).found
    assert found.expires_in == Duration.of_s(limits.expiry_s_max)


@pytest.mark.parametrize(
    ("said", "event"),
    [
        ({"say": "alive"}, kept.ClerkAlive(4)),
        ({"say": "hindered", "text": "no room"}, kept.ClerkHindered(4, "no room")),
        ({"say": "unfit", "text": "damaged"}, kept.ClerkUnfit(4, "damaged")),
        ({"say": "ready", "size_bytes": 9, "patches": 2}, kept.ClerkReady(4, kept.Stock(9, 2))),
        (
            {"say": "kept", "task": 5, "size_bytes": 9, "patches": 2},
            kept.ChangesKept(4, 5, kept.Stock(9, 2)),
        ),
    ],
)
def test_what_the_clerk_says_is_an_event(said: dict, event: kept.ClerkEvent) -> None:
    assert event_of("clerk", 4, said) == event


@pytest.mark.parametrize(
    "said",
    [
        {"say": "snapshot"},
        {"say": "kept"},
        {"say": "recalled", "task": 1, "changes": [back(what="scan")], "place": None},
        {"say": "recalled", "task": 1, "changes": [back(what="put", message={})], "place": None},
        {"say": "recalled", "task": 1, "changes": [{}], "place": None},
    ],
)
def test_what_no_healthy_clerk_would_say_is_nonsense(said: dict) -> None:
    with pytest.raises(Nonsense):
        event_of("clerk", 4, said)
