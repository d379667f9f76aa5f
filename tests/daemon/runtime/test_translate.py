"""What the crew says becomes the core's events, and only that."""

import pytest

from byway import messages
from byway.packed import Column
from bywayd.core import effects, events
from bywayd.core.instants import Instant
from bywayd.runtime.translate import (
    Nonsense,
    change_message,
    event_of,
    job_message,
    outcome_message,
    watch_message,
)

FOUND = {"kind": "route", "cost": 12.5, "body": b"b", "packed": b"p", "path": [1, 2]}
OUTCOME = events.Outcome("route", 12.5, b"b", b"p", [1, 2])
REFUSAL = {"index": 2, "code": "bad_geometry", "text": "t", "facts": {"id": "a"}}
BLOCK = {
    "at_m": 6.0,
    "t_s": 4.0,
    "x_m": 1.0,
    "y_m": 2.0,
    "heading_rad": 0.5,
    "depth_m": 0.1,
    "kind": "disc",
    "layer": "stacks",
    "id": "a",
}
SNAPSHOT = {"revision": 7, "handle": {"revision": 7}, "memory_bytes": 4096, "next_in_s": None}


@pytest.mark.parametrize(
    ("role", "message", "event"),
    [
        ("worker", {"say": "ready"}, events.WorkerReady(3)),
        ("worker", {"say": "alive"}, events.WorkerAlive(3)),
        (
            "worker",
            {"say": "better", "job": 5, "outcome": FOUND},
            events.WorkerBetter(3, 5, OUTCOME),
        ),
        ("worker", {"say": "done", "job": 5, "outcome": FOUND}, events.WorkerDone(3, 5, OUTCOME)),
        (
            "worker",
            {"say": "failed", "job": 5, "code": "bad_value", "text": "t", "facts": {"field": "x"}},
            events.WorkerFailed(3, 5, "bad_value", "t", {"field": "x"}),
        ),
        (
            "worker",
            {"say": "checked", "job": 5, "good": False, "text": "blocked"},
            events.WorkerChecked(3, 5, False, "blocked"),
        ),
        (
            "surveyor",
            {"say": "ready", **SNAPSHOT},
            events.SurveyorReady(3, 7, {"revision": 7}, 4096),
        ),
        ("surveyor", {"say": "alive"}, events.SurveyorAlive(3)),
        (
            "surveyor",
            {
                "say": "snapshot",
                "batch": 4,
                "refusals": [REFUSAL],
                "obstacles": {"stacks": 2},
                "tracks": {"stacks": 1},
                **SNAPSHOT,
                "next_in_s": 0.1,
            },
            events.SnapshotReady(
                3,
                4,
                7,
                {"revision": 7},
                (events.Refusal(2, "bad_geometry", "t", {"id": "a"}),),
                4096,
                {"stacks": 2},
                {"stacks": 1},
                0.1,
            ),
        ),
        (
            "surveyor",
            {
                "say": "site",
                "ticket": 9,
                "fields": {"revision": 7, "layers": [], "columns": {}},
                "packed": b"",
            },
            events.SiteDescribed(3, 9, messages.SiteIs(revision=7, layers=[], columns={}), b""),
        ),
        (
            "surveyor",
            {"say": "guard", "guard": 5, "blocked": BLOCK, "fault": "", **SNAPSHOT},
            events.GuardSeen(3, 5, 7, events.Block(**BLOCK)),
        ),
        (
            "surveyor",
            {"say": "guard", "guard": 5, "blocked": None, "fault": "odd", **SNAPSHOT},
            events.GuardSeen(3, 5, 7, None, "odd"),
        ),
    ],
)
def test_each_thing_the_crew_says_is_an_event(role, message, event):
    assert event_of(role, 3, message) == event


@pytest.mark.parametrize(
    ("role", "message"),
    [
        ("worker", {}),
        ("worker", {"say": "sing"}),
        ("worker", {"say": ["ready"]}),
        ("surveyor", {"say": "done", "job": 5, "outcome": FOUND}),
        ("worker", {"say": "done", "job": 5}),
        ("worker", {"say": "done", "job": None, "outcome": FOUND}),
        ("worker", {"say": "done", "job": 5, "outcome": {**FOUND, "kind": "miracle"}}),
        ("worker", {"say": "done", "job": 5, "outcome": {**FOUND, "body": "text"}}),
        ("worker", {"say": "failed", "job": 5, "code": "x", "text": "t", "facts": 3}),
        ("surveyor", {"say": "site", "ticket": 9, "fields": {"revision": -1}, "packed": b""}),
        (
            "surveyor",
            {
                "say": "snapshot",
                "batch": 4,
                "refusals": [{}],
                "obstacles": {},
                "tracks": {},
                **SNAPSHOT,
            },
        ),
        *(
            ("surveyor", {"say": "guard", "guard": 5, "blocked": bad, "fault": "", **SNAPSHOT})
            for bad in ({**BLOCK, "kind": "ghost"}, {**BLOCK, "at_m": float("nan")}, {}, 7)
        ),
    ],
)
def test_what_no_healthy_process_says_is_nonsense(role, message):
    with pytest.raises(Nonsense):
        event_of(role, 3, message)


def test_a_deadline_is_told_on_the_clock_of_the_host():
    job = effects.Job(
        job=1,
        vehicle={"model": "car"},
        start=(0.0, 0.0, 0.0),
        goal=(1.0, 0.0, 0.0),
        deadline=Instant(1500),
        seed=2,
        method="auto",
        left_out=("own",),
        clearance_m=None,
        start_speed_mps=0.0,
        start_curvature_per_m=0.0,
        gap_wanted=0.0,
        revision=7,
        handle={"revision": 7},
    )
    message = job_message(job, lambda instant: instant.ns - 1000)
    assert message["deadline_ns"] == 500
    assert {field for field in effects.Job.__slots__ if field != "deadline"} < message.keys()


def test_an_outcome_goes_back_to_a_worker_as_it_came():
    assert outcome_message(OUTCOME) == FOUND


def test_a_change_travels_with_its_message_and_its_columns():
    told = messages.Drop(layer="stacks", ids=["a"])
    change = effects.Change(
        *("drop", "stacks", effects.LayerFlags(outlines_only=True), told, b"", ("a",)),
        as_of=Instant(3_500_000_000),
    )
    assert change_message(change, lambda instant: instant.ns - 1_000_000_000) == {
        "what": "drop",
        "layer": "stacks",
        "settings": {"unknown_blocks": False, "outlines_only": True, "decay_s": None},
        "as_of_s": 2.5,
        "message": {"layer": "stacks", "ids": ["a"]},
        "packed": b"",
        "ids": ("a",),
    }


def test_a_route_to_watch_travels_with_its_columns():
    column = Column(dtype="<f8", shape=(2,), offset=0)
    watch = effects.WatchRoute(
        3, 5, "tug-3", "guard5", {"model": "car"}, {"t_s": column}, b"16 bytes", ("own",), 0.1, 2.0
    )
    message = watch_message(watch)
    assert message["columns"] == {"t_s": {"dtype": "<f8", "shape": (2,), "offset": 0}}
    assert {*effects.WatchRoute.__slots__} - {"surveyor"} == message.keys()
