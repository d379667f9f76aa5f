"""Commands that talk to a daemon: what they ask of the client, print, and end with."""

import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from typer.testing import CliRunner, Result

import byway
import bywayd.commands as commands
from byway.messages import HealthIs, Histogram, LayerHealth

FOUND: dict[str, Any] = {
    "cost_unit": "m",
    "bound": 9.5,
    "gap": 0.05,
    "blocked_by": (),
    "seed": 7,
    "left_out": ("unit.tug-1",),
    "statistics": {"method": "auto"},
    "revision": 12,
    "epoch": "e1",
    "unit": "tug-1",
    "replan": "r1",
}


def route() -> byway.Route:
    table = np.zeros(5, byway.ROUTE_TABLE)
    table["x_m"] = [0.0, 2.0, 4.0, 3.0, 2.0]
    table["gear"] = [1, 1, -1, -1, 0]
    legs = (byway.Leg(0, 2, 1, 4.0), byway.Leg(2, 4, -1, 2.0))
    return byway.Route(table, legs, 6.0, 8.0)


BETTER = byway.Better(**FOUND, kind="route", route=route(), cost=11.0, elapsed_s=0.002, number=1)
ANSWER = byway.Answer(
    **FOUND, kind="route", route=route(), cost=10.0,
    first_s=0.002, waited_s=0.0001, total_s=0.05, attempts=1,
)  # fmt: skip
BLOCKED = byway.Answer(
    **{**FOUND, "blocked_by": (byway.Blockage("fixed", "kiln", 0.25),)},
    kind="goal_blocked", route=None, cost=float("inf"),
    first_s=None, waited_s=0.0001, total_s=0.003, attempts=1,
)  # fmt: skip
HEALTH = HealthIs(
    state="ready", revision=3, uptime_s=60.0, waiting=0, planning=1,
    workers={"idle": 1},
    layers={
        "fixed": LayerHealth(source="s", age_s=2.0, obstacles=4, durable=True),
        "movers": LayerHealth(source="m", age_s=9.0, tracks=3, stale=True, expected_period_s=1.0),
    },
    counts={"replans_total": 9}, memory_bytes={"front": 4_000_000},
    histograms={"answer_s": Histogram(bounds_s=[0.01, 0.1], counts=[1, 2, 1], sum_s=0.5)},
)  # fmt: skip


class FakeClient:
    """Answers as a client would; notes what it was asked."""

    answer: byway.Answer | Exception = ANSWER
    asked: dict[str, Any]

    def __init__(self, endpoint: str, keys: Path | None = None) -> None:
        FakeClient.asked = {"endpoint": endpoint, "keys": keys}

    def __enter__(self) -> "FakeClient":
        return self

    def __exit__(self, *_: object) -> None:
        pass

    def replan(self, vehicle: str, *, on_better: Any, **told: Any) -> byway.Answer:
        FakeClient.asked |= {"vehicle": vehicle, **told}
        if isinstance(self.answer, Exception):
            raise self.answer
        on_better(BETTER)
        return self.answer

    def health(self) -> HealthIs:
        return HEALTH

    def vehicles(self) -> list[byway.Vehicle]:
        return [byway.Vehicle("tug", "disc", {"radius_m": 0.5})]

    def site(self) -> byway.SiteView:
        ring = np.array([(5.0, 5.0), (9.0, 5.0), (9.0, 9.0), (5.0, 9.0)])
        cells = (byway.Cells((-3.0, -3.0), 0.5, np.ones((4, 4), np.uint8)),)
        fixed = byway.LayerView(False, False, {"kiln": ring}, {"post": (1.0, 6.0, 0.3)}, cells)
        return byway.SiteView(12, "e1", (0.0, 0.0), None, {"fixed": fixed})

    def listen(self, topics: Any, timeout_s: float | None) -> Iterator[byway.Event]:
        FakeClient.asked |= {"topics": topics, "timeout_s": timeout_s}
        yield byway.Event("better.tug-1", "e1", 1, 0, BETTER)
        yield byway.Event("health", "e1", 5, 2, HEALTH)


@pytest.fixture(autouse=True)
def _fake(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(byway, "Client", FakeClient)
    monkeypatch.setattr(FakeClient, "answer", ANSWER)
    monkeypatch.delenv("BYWAY_ENDPOINT", raising=False)


def run(*arguments: str) -> Result:
    return CliRunner().invoke(commands.app, arguments)


ASK = ("ask", "tug", "--start", "-2.5,-1,0", "--goal", "40,22,90deg")


def test_ask_says_where_how_and_how_long() -> None:
    found = run(*ASK, "--budget", "0.05", "--unit", "tug-1", "--leave-out", "unit.tug-1")
    assert found.exit_code == 0
    assert FakeClient.asked["endpoint"] == "tcp://127.0.0.1:7461"
    assert FakeClient.asked["start"] == (-2.5, -1.0, 0.0)
    assert FakeClient.asked["goal"] == pytest.approx((40.0, 22.0, np.pi / 2))
    assert FakeClient.asked["budget_s"] == 0.05
    assert FakeClient.asked["leave_out"] == ["unit.tug-1"]


def test_ask_prints_the_route_for_people() -> None:
    text = run(*ASK).stdout
    assert "route of 6.00 m in 8.0 s, 1 changes of direction" in text
    assert "cost 10.000 m, bound 9.500 m, gap 5.0 %" in text
    assert "forward      4.00 m" in text
    assert "reverse      2.00 m" in text
    assert "first route after 2.00 ms, answer after 50.00 ms, 1 better ones heard" in text
    assert "x_m" not in text
    assert "x_m" in run(*ASK, "--rows").stdout


def test_ask_prints_json_for_programs() -> None:
    told = json.loads(run(*ASK, "--json").stdout)
    assert told["kind"] == "route"
    assert told["route"]["x_m"] == [0.0, 2.0, 4.0, 3.0, 2.0]
    assert told["route"]["gear"] == [1, 1, -1, -1, 0]
    assert told["better"] == [{"elapsed_s": 0.002, "cost": 11.0}]


def test_ask_without_a_route_says_why_and_ends_with_no(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(FakeClient, "answer", BLOCKED)
    found = run(*ASK)
    assert found.exit_code == 1
    assert "goal_blocked: The vehicle cannot stand at the goal." in found.stdout
    assert "kiln of layer fixed, 0.250 m deep" in found.stdout


@pytest.mark.parametrize("pose", ["1,2", "a,b,c", "1,2,3,4", "1,2,90grad", ""])
def test_a_pose_that_is_none_is_an_error_of_usage(pose: str) -> None:
    found = run("ask", "tug", "--start", pose, "--goal", "1,2,3")
    assert found.exit_code == 2
    assert "x,y,heading" in found.stderr.replace("\n", " ")


def test_ask_draws_a_picture(tmp_path: Path) -> None:
    file = tmp_path / "route.png"
    assert run(*ASK, "--picture", str(file)).exit_code == 0
    assert file.read_bytes().startswith(b"\x89PNG")


@pytest.mark.parametrize(
    ("fault", "status"),
    [
        (byway.UnknownVehicle("no vehicle tog"), 4),
        (byway.Overloaded("too much"), 3),
        (byway.DaemonLost("nobody there"), 3),
        (byway.Internal("broke"), 5),
    ],
)
def test_errors_become_a_sentence_and_a_status(
    fault: byway.BywayError,
    status: int,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.setattr(FakeClient, "answer", fault)
    monkeypatch.setattr("sys.argv", ["byway", *ASK])
    with pytest.raises(SystemExit) as ended:
        commands.main()
    assert ended.value.code == status
    assert capsys.readouterr().err == f"byway: {fault.code}: {fault.text}\n"


def test_listen_prints_a_line_an_event() -> None:
    lines = run("listen", "--topic", "better", "--seconds", "2").stdout.splitlines()
    assert FakeClient.asked["topics"] == ["better"]
    assert FakeClient.asked["timeout_s"] == 2.0
    assert "better.tug-1" in lines[0]
    assert "cost    11.000 m" in lines[0]
    assert "ready, revision 3, 1 planning" in lines[1]
    assert "(2 missed)" in lines[1]


def test_listen_prints_json_lines() -> None:
    better, health = map(json.loads, run("listen", "--json").stdout.splitlines())
    assert (better["topic"], better["cost"], better["length_m"]) == ("better.tug-1", 11.0, 6.0)
    assert health["health"]["revision"] == 3


def test_health_for_people_programs_and_scrapers() -> None:
    text = run("health").stdout
    assert "ready, up 60 s, revision 3" in text
    assert "125.00" in text  # the mean of four answers in half a second
    lines = {line.split()[0]: line.split()[1:] for line in text.splitlines() if line.strip()}
    assert lines["fixed"] == ["4", "0", "2.0", "s", "durable"]
    assert lines["movers"] == ["0", "3", "9.0", "m", "stale"]
    assert json.loads(run("health", "--json").stdout)["counts"] == {"replans_total": 9}
    assert "byway_replans_total 9.0" in run("health", "--openmetrics").stdout


def test_a_daemon_that_is_not_ready_is_a_no(monkeypatch: pytest.MonkeyPatch) -> None:
    warming = HEALTH.model_copy(update={"state": "warming"})
    monkeypatch.setattr(FakeClient, "health", lambda _: warming)
    assert run("health", "--json").exit_code == 1
    assert run("health").exit_code == 1


def test_the_endpoint_comes_from_the_environment(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("BYWAY_ENDPOINT", "ipc:///run/x")
    run("health", "--json")
    assert FakeClient.asked["endpoint"] == "ipc:///run/x"
