"""The benchmark itself: its small mode, its digest, and that it sees what is wrong."""

import json
import math
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from matplotlib.image import imread
from rich.console import Console
from typer.testing import CliRunner

import bywayd.bench as bench
from byway_planning import METHODS, Outcome, warm
from bywayd.bench import planning
from bywayd.bench.families_tight import FAMILIES, draw
from bywayd.bench.figures import Figures, Findings, quantile, ratio, spread
from bywayd.bench.plots import plot_growth, plot_methods
from bywayd.commands import app

#: Kernels may have to be compiled first.
pytestmark = pytest.mark.timeout(400)


def printed(found: Figures) -> str:
    out = Console(width=100)
    with out.capture() as captured:
        for table in bench.tables(found):
            out.print(table)
    return captured.get()


@pytest.fixture(scope="module")
def small() -> Figures:
    """One small run of everything, a daemon of its own included."""
    return bench.measure(small=True)


def test_a_small_run_measures_everything_and_finds_nothing_wrong(small: Figures) -> None:
    assert small["faults"] == []
    assert set(small["planning"]) == set(FAMILIES)
    for name, told in small["planning"].items():
        assert told["cases"] == 3
        assert told["rejected"] == 0
        assert (told["cost_cases"] == 1) == (name != "sealed")
    assert 0.0 < small["micro"]["pose_us"] < 100.0
    assert 0.1 < small["micro"]["poses_free"] < 0.9
    assert 0.1 < small["micro"]["motions_free"] < 0.9
    assert small["site"]["patch_to_transform"] > 0.0
    site = small["site"]
    assert site["updates_per_s"] > 1.0
    assert site["alerts_missed"] == 0
    assert site["alert_ms"]["p50"] is not None
    assert [row["guards"] for row in site["growth"]["guards"]] == [2, 4]
    serving = small["serving"]
    assert serving["replans_per_s"] > 1.0
    assert serving["hello_to_echo_ipc"] > 1.0
    assert 100 < serving["replan_rows"] < 400
    assert serving["load"][0]["asked"] > 0
    assert serving["kills"] == 1


def test_growth_is_drawn(small: Figures, tmp_path: Path) -> None:
    plot_growth(small["site"]["growth"], tmp_path / "growth.png")
    assert imread(tmp_path / "growth.png").shape[1] > 1000


def test_methods_side_by_side(tmp_path: Path) -> None:
    """Every method on one case of two families; the best of them costs 1 by what is meant."""
    found = bench.measure(small=True, parts=["methods"], families=["open", "sealed"])["methods"]
    assert found["families"] == ["open"]  # nobody finds a way to a sealed goal
    assert set(found["methods"]) == set(METHODS)
    last = [told["cost_to_best"][-1] for told in found["methods"].values()]
    assert min(cost for cost in last if cost is not None) == 1.0
    plot_methods(found, tmp_path / "methods.png")
    assert imread(tmp_path / "methods.png").shape[1] > 500
    assert "rrt_star" in printed({"methods": found, "machine": _MACHINE} | _EMPTY)


_MACHINE: Figures = {"cpu": "none", "cores": 1, "load": 0.0}
_EMPTY: Figures = {"salt": 1, "mode": "small", "took_s": 1.0, "anomalies": [], "faults": []}


def test_figures_are_json_and_tables_show_them(small: Figures) -> None:
    assert json.loads(json.dumps(small, allow_nan=False))["salt"] == 1
    text = printed(small)
    for word in (
        *FAMILIES,
        "First route",
        "Reeds-Shepp",
        "hello over ipc",
        "guarded routes",
        small["digest"],
    ):
        assert word in text


def test_the_digest_depends_on_the_salt_and_not_on_what_ran_before() -> None:
    warm()
    once = planning.digest_of(["kerb", "maze"], 1)
    planning.digest_of(["trap"], 5)
    assert once == planning.digest_of(["kerb", "maze"], 1)
    assert once != planning.digest_of(["kerb", "maze"], 2)


def test_parts_and_families_can_be_chosen_and_digests_stay_the_same(small: Figures) -> None:
    found = bench.measure(small=True, parts=["planning"], families=["u_turn", "bay"], seeds=1)
    assert list(found["planning"]) == ["bay", "u_turn"]
    assert {"micro", "site", "serving"}.isdisjoint(found)
    for name, told in found["planning"].items():
        assert told["cases"] == 1
        assert told["digest"] == small["planning"][name]["digest"]


@pytest.mark.parametrize(
    ("wrong", "named"),
    [
        ({"parts": ["plannning"]}, "plannning"),
        ({"families": ["moon"]}, "moon"),
        ({"seeds": 0}, "0"),
    ],
)
def test_names_that_there_are_not_are_refused(wrong: dict[str, Any], named: str) -> None:
    with pytest.raises(ValueError, match=named):
        bench.measure(small=True, **wrong)


# -- what is wrong is seen -----------------------------------------------------------------------


def test_a_route_to_a_sealed_goal_is_a_fault() -> None:
    warm()
    findings = Findings()
    case = replace(draw("open", 1, 0), sealed=True)
    _, snapshot = case.ground.build()
    planning._first_s(case, snapshot, planning.SMALL, planning._Notes(), findings)
    assert findings.faults == [f"{case.name}: a route where there is none"]


def test_a_route_that_hits_something_is_a_fault() -> None:
    """The route is planned in the empty yard and checked in one with a box across it."""
    warm()
    findings, notes = Findings(), planning._Notes()
    case = draw("open", 1, 0)
    empty = replace(case, ground=replace(case.ground, polygons={}))
    _, snapshot = empty.ground.build()
    outcome = planning._planned(empty, snapshot, planning.CpuBudget(0.1), 1, findings, notes)
    assert findings.faults == []
    assert outcome.route is not None
    row = outcome.route.table[len(outcome.route.table) // 2]
    square = np.array([(-1, -1), (1, -1), (1, 1), (-1, 1)]) + np.array([row["x_m"], row["y_m"]])
    walled = replace(case, ground=replace(case.ground, polygons={"box": square}))
    _, snapshot = walled.ground.build()
    planning._checked(walled, snapshot, outcome, findings, notes)
    (fault,) = findings.faults
    assert "overlaps polygon 0" in fault


@pytest.mark.parametrize(
    ("costs", "bound", "said"),
    [((10.0, 10.5), 9.0, "cost 10.5"), ((10.0, 9.5), 9.7, "below the bound")],
)
def test_costs_that_cannot_be_are_faults(
    monkeypatch: pytest.MonkeyPatch, costs: tuple[float, float], bound: float, said: str
) -> None:
    left = list(costs)

    def told(*_: object, **__: object) -> Outcome:
        return Outcome("route", 1, 1, cost=left.pop(0), bound=bound)

    monkeypatch.setattr(planning, "plan", told)
    findings, case = Findings(), draw("open", 1, 0)
    _, snapshot = case.ground.build()
    planning._costs(case, snapshot, planning.SMALL, planning._Notes(), findings)
    (fault,) = findings.faults
    assert said in fault


@pytest.mark.parametrize(
    ("kind", "said"),
    [("no_route", "there is a way"), ("goal_blocked", "there is room")],
)
def test_a_no_where_there_is_a_route_is_a_fault(
    monkeypatch: pytest.MonkeyPatch, kind: Any, said: str
) -> None:
    monkeypatch.setattr(planning, "plan", lambda *_, **__: Outcome(kind, 1, 1))
    findings, case = Findings(), draw("open", 1, 0)
    _, snapshot = case.ground.build()
    planning._first_s(case, snapshot, planning.SMALL, planning._Notes(), findings)
    assert findings.faults == [f"{case.name}: {kind}, but {said}"]


@pytest.mark.parametrize(("faults", "status"), [([], 0), (["kerb 1: it went wrong"], 1)])
def test_the_command_ends_with_a_no_when_something_is_wrong(
    monkeypatch: pytest.MonkeyPatch, small: Figures, faults: list[str], status: int
) -> None:
    monkeypatch.setattr(bench, "measure", lambda **_: small | {"faults": faults})
    found = CliRunner().invoke(app, ["bench", "--small"])
    assert found.exit_code == status
    assert ("it went wrong" in found.stdout) == bool(faults)
    told = CliRunner().invoke(app, ["bench", "--small", "--json"])
    assert told.exit_code == status
    assert json.loads(told.stdout)["faults"] == faults


def test_the_command_refuses_unknown_families() -> None:
    found = CliRunner().invoke(app, ["bench", "--family", "moon"])
    assert found.exit_code == 2
    assert "moon" in found.stderr


# -- figures -------------------------------------------------------------------------------------


def test_quantiles_are_values_that_occurred() -> None:
    values = [5.0, 1.0, 4.0, 2.0, 3.0]
    assert [quantile(values, share) for share in (0.0, 0.2, 0.5, 0.9, 1.0)] == [1, 1, 3, 5, 5]
    assert quantile([], 0.5) is None
    assert quantile([1.0, math.inf], 0.5) == 1.0
    assert quantile([1.0, math.inf], 0.99) is None
    assert spread([0.001, 0.002], 1e3) == {"p50": 1.0, "p90": 2.0, "p99": 2.0}
    assert ratio(1.0, None) is ratio(None, 1.0) is ratio(1.0, 0.0) is None


def test_what_misses_its_target_is_marked(small: Figures) -> None:
    slow = json.loads(json.dumps(small))
    slow["planning"]["open"]["first_known_ms"]["p50"] = 123.0
    slow["planning"]["bay"]["first_known_ms"]["p50"] = 0.01
    slow["micro"]["pose_us"] = 55.0
    lines = printed(slow).splitlines()
    assert any("123.00* (0.5)" in line for line in lines)
    assert any("0.01 (0.4)" in line for line in lines)
    assert any("55*" in line for line in lines)
