"""What a run came to: figures, verdict, table."""

import io
import math
from dataclasses import asdict, replace

import pytest
from rich.console import Console
from tests.daemon.yard.planning_desk import run_world

from bywayd.yard.referee import Near
from bywayd.yard.report import Asked, Heard, Report, make_report, table_of

NEAR = asdict(Near(0.31, "tug-3", "kiln-2", 4.3))
GOOD = Report(
    seconds=60.0, deliveries=5, replans=80, answers={"route": 78, "not_found": 1},
    better_routes=200, first_ms=(2.0, 9.0), answer_ms=(110.0, 199.0), of_budget=(0.95, 0.99),
    deadline_misses=0, taken_over=12, alerts={"packs": 3, "vehicles": 2}, cleared=1, rerouted=4,
    rerouted_taken=3, not_rerouted=1, told_to_alert_ms=(11.0, 14.5), scan_to_alert_ms=(6.0, 9.0),
    scans=250, pallets=2, nearest=NEAR, nearest_units=asdict(Near()), collisions=[],
    packs=9, revision=400, errors={}, faults=[], late_steps_s=0.01,
    units={"tug-3": {"deliveries": 5}},
)  # fmt: skip


def test_a_good_run_has_nothing_wrong() -> None:
    assert GOOD.went_wrong() == []


@pytest.mark.parametrize(
    ("change", "told"),
    [
        ({"collisions": [NEAR]}, "1 collisions"),
        ({"deliveries": 1}, "1 deliveries, expected at least 2"),
        ({"errors": {"error:internal": 2}}, "2 replans ended with internal"),
        ({"errors": {"error:bad_value": 1}}, "1 replans ended with bad_value"),
        ({"faults": ["telling the daemon failed"]}, "telling the daemon failed"),
    ],
)
def test_what_went_wrong_is_told(change: dict[str, object], told: str) -> None:
    assert replace(GOOD, **change).went_wrong() == [told]  # type: ignore[arg-type]


@pytest.mark.parametrize("code", ["overloaded", "superseded", "cancelled"])
def test_a_daemon_that_says_not_now_is_no_fault(code: str) -> None:
    assert replace(GOOD, errors={f"error:{code}": 3}).went_wrong() == []


def test_a_short_run_owes_no_delivery() -> None:
    assert replace(GOOD, seconds=8.0, deliveries=0).went_wrong() == []


def test_the_table_shows_every_figure() -> None:
    console = Console(width=160, record=True, file=io.StringIO())
    console.print(table_of(replace(GOOD, errors={"error:overloaded": 3}, collisions=[NEAR])))
    text = console.export_text()
    for figure in ("tug-3 5", "not_found 1, route 78", "p50 2.0 ms", "p99 9.0 ms", "0.31 m",
                   "tug-3, kiln-2 at 4.3 s", "none near", "overloaded 3", "packs 3, vehicles 2",
                   "3 taken over, 1 times none was found", "p50 11.0 ms", "at most 14.5 ms",
                   "2 of them told by nobody, only seen in 250 scans"):  # fmt: skip
        assert figure in text


def test_a_report_is_made_of_a_world_and_what_was_asked() -> None:
    world, _ = run_world(seconds=2.0, seed=1)
    asked = [
        Asked("route", 0.1, 0.11, 0.001, 0.09, better=3),
        Asked("route", 0.1, 0.11, 0.003, 0.101, better=1),
        Asked("error:overloaded", 0.1, 0.01),
    ]
    heard = Heard(
        [("packs", "polygon"), ("unit.tug-3", "polygon"), ("unit.loader-2", "polygon"),
         ("", "limits")],
        [0.012, 0.010, 0.030], [], scans=20,
    )  # fmt: skip
    report = make_report(world, asked, revision=7, faults=["x"], late_steps_s=0.5, heard=heard)
    assert report.alerts == {"vehicles": 2, "packs": 1, "limits": 1}
    assert report.told_to_alert_ms == pytest.approx((12.0, 30.0))
    assert math.isnan(report.scan_to_alert_ms[0])
    assert report.scans == 20
    assert report.replans == 3
    assert report.answers == {"route": 2}
    assert report.errors == {"error:overloaded": 1}
    assert report.deadline_misses == 1
    assert report.better_routes == 4
    assert report.first_ms[0] == pytest.approx(2.0)
    assert report.of_budget[0] == pytest.approx(0.955)
    assert set(report.units) == set(world.units)
    assert report.units["tug-3"]["driven_m"] > 0.0
    assert report.collisions == []
    assert math.isfinite(report.nearest_units["distance_m"]) or not report.nearest_units["unit"]
