"""The whole as a user meets it: the commands, a real daemon, the README, the demo."""

import json
import os
import re
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import byway

ROOT = Path(__file__).resolve().parents[2]
#: Kernels may have to be compiled first.
READY_S_MAX = 200.0


def byway_command(*arguments: str, endpoint: str = "") -> subprocess.CompletedProcess[str]:
    environment = {**os.environ, **({"BYWAY_ENDPOINT": endpoint} if endpoint else {})}
    return subprocess.run(
        [sys.executable, "-m", "bywayd", *arguments],
        env=environment, capture_output=True, text=True, check=False, timeout=READY_S_MAX,
    )  # fmt: skip


@pytest.fixture(scope="module")
def daemon(
    tmp_path_factory: pytest.TempPathFactory,
) -> Iterator[str]:
    folder = tmp_path_factory.mktemp("d")
    file = folder / "site.toml"
    sockets = "\n".join(
        f'{n} = ["ipc://{folder}/run/{n}"]' for n in ("requests", "updates", "events")
    )
    file.write_text(f"[sockets]\n{sockets}\n")
    with (folder / "log").open("wb") as log:
        process = subprocess.Popen(
            [sys.executable, "-m", "bywayd", "serve", str(file)], stdout=log, stderr=log
        )
    endpoint = f"ipc://{folder}/run/requests"
    try:
        _wait_until_ready(endpoint, process, folder / "log")
        yield endpoint
    finally:
        process.send_signal(signal.SIGTERM)
        status = process.wait(10)
    assert status == 0, (folder / "log").read_text()


def _wait_until_ready(endpoint: str, process: subprocess.Popen[bytes], log: Path) -> None:
    end_s = time.monotonic() + READY_S_MAX
    while time.monotonic() < end_s and process.poll() is None:
        try:
            with byway.Client(endpoint) as client:
                if client.hello().state == "ready":
                    return
        except byway.BywayError:
            pass
        time.sleep(0.05)
    raise AssertionError(log.read_text())


def readme_blocks() -> list[str]:
    return re.findall(r"```python\n(.*?)```", (ROOT / "README.md").read_text(), re.DOTALL)


@pytest.mark.timeout(300)
def test_the_readme_does_what_it_says(daemon: str) -> None:
    with_daemon, without, _ = readme_blocks()
    names: dict[str, Any] = {}
    exec(with_daemon.replace("tcp://127.0.0.1:7461", daemon), names)
    answer = names["answer"]
    assert answer.kind == "route"
    assert answer.total_s < 0.5
    exec(without, names)
    outcome = names["outcome"]
    assert outcome.kind == "route"
    for table in (answer.route.table, outcome.route.table):
        assert table.dtype.names == (
            *("t_s", "x_m", "y_m", "heading_rad", "curvature_per_m", "speed_mps", "gear"),
        )
        first, last = table[0], table[-1]
        assert (first["x_m"], first["y_m"]) == pytest.approx((2.0, 2.0), abs=1e-3)
        assert (last["x_m"], last["y_m"]) == pytest.approx((40.0, 22.0), abs=1e-3)
        assert last["gear"] == 0
        assert np.hypot(np.diff(table["x_m"]), np.diff(table["y_m"])).max() <= 0.3 + 1e-9


@pytest.mark.timeout(300)
def test_the_readme_keeps_a_site_true_and_guards_a_route(daemon: str) -> None:
    *_, live = readme_blocks()
    bearings = np.linspace(-1.5, 1.5, 181)
    names: dict[str, Any] = {"byway": byway, "bearings": bearings, "ranges": np.full(181, np.inf)}
    # A layer that goes stale must not refuse the replans of other tests.
    for said, instead in (
        ("tcp://127.0.0.1:7461", daemon),
        ('"refuse"', '"report"'),
        ("timeout_s=60.0", "timeout_s=1.5"),
    ):
        assert said in live
        live = live.replace(said, instead)
    exec(live, names)
    assert names["answer"].kind == "route"
    with byway.Client(daemon) as client:
        site = client.site(guards=True)
        assert site.layers["lidar.north"].decay_s == 5.0
        # The walker may have been in its way, and the daemon have found another route.
        assert [guard.unit for guard in site.guards] == ["tug-3"]
        client.release("tug-3")


@pytest.mark.timeout(300)
def test_a_drawing_of_a_yard_is_put_and_drawn(daemon: str, tmp_path: Path) -> None:
    yard = ROOT / "daemon" / "bywayd" / "yard" / "yard.geojson"
    # Far from what other tests have there.
    told = json.loads(yard.read_text())
    for feature in told["features"]:
        feature["geometry"]["coordinates"] = moved(feature["geometry"]["coordinates"], 120.0)
    file = tmp_path / "yard.geojson"
    file.write_text(json.dumps(told))
    for _ in range(2):  # again is the same
        found = byway_command(
            "put", str(file), "--layer", "drawn", "--replace", "--json", endpoint=daemon
        )
        assert found.returncode == 0, found.stderr
        counts = json.loads(found.stdout)
        assert (counts["polygons"], counts["discs"], counts["boxes"]) == (16, 5, 3)
    picture = tmp_path / "site.png"
    shown = byway_command("site", "--json", "--picture", str(picture), endpoint=daemon)
    assert shown.returncode == 0, shown.stderr
    layer = json.loads(shown.stdout)["layers"]["drawn"]
    assert len(layer["holes"]["drying-court"]) == 1
    assert layer["polygons"]["kiln-1"][0] == [125.0, 164.0]
    assert picture.read_bytes().startswith(b"\x89PNG")
    tie = {"type": "Polygon", "coordinates": [[[0, 0], [4, 4], [4, 0], [0, 4], [0, 0]]]}
    file.write_text(json.dumps({"type": "Feature", "id": "bow-tie", "geometry": tie}))
    refused = byway_command("put", str(file), "--layer", "drawn", endpoint=daemon)
    assert refused.returncode == 4
    assert "bow-tie" in refused.stderr


def moved(coordinates: Any, by_m: float) -> Any:
    if isinstance(coordinates[0], list):
        return [moved(each, by_m) for each in coordinates]
    return [value + by_m for value in coordinates]


@pytest.mark.timeout(300)
def test_ask_listen_and_health_talk_to_it(daemon: str, tmp_path: Path) -> None:
    picture = tmp_path / "route.png"
    ask = ["ask", "tug", "--start", "-20,-20,0", "--goal", "-5,-10,90deg", "--budget", "0.1"]
    found = byway_command(*ask, "--picture", str(picture), "--json", endpoint=daemon)
    assert found.returncode == 0, found.stderr
    told = json.loads(found.stdout)
    assert told["kind"] == "route"
    assert told["cost"] >= told["bound"] > 15.0
    assert picture.read_bytes().startswith(b"\x89PNG")

    health = json.loads(byway_command("health", "--json", endpoint=daemon).stdout)
    assert health["state"] == "ready"
    assert health["histograms"]["answer_s"]["sum_s"] > 0.0
    text = byway_command("health", "--openmetrics", endpoint=daemon).stdout
    assert "byway_answer_seconds_count" in text

    events = byway_command("listen", "--seconds", "1.6", "--json", endpoint=daemon)
    assert "health" in {json.loads(line)["topic"] for line in events.stdout.splitlines()}


@pytest.mark.timeout(300)
def test_an_unknown_vehicle_is_refused_in_plain_words(daemon: str) -> None:
    found = byway_command("ask", "tog", "--start", "0,0,0", "--goal", "9,9,0", endpoint=daemon)
    assert found.returncode == 4
    assert found.stderr.startswith("byway: unknown_vehicle: ")
    assert "Traceback" not in found.stderr


@pytest.mark.timeout(300)
def test_the_demo_runs_reports_and_draws(tmp_path: Path) -> None:
    picture = tmp_path / "yard.png"
    found = byway_command("demo", "--seconds", "8", "--json", "--picture", str(picture))
    told = json.loads(found.stdout.splitlines()[-1])
    assert found.returncode == 0, (told, found.stderr)
    assert told["collisions"] == []
    assert told["answers"]["route"] >= 3
    assert told["scans"] > 30
    assert told["faults"] == []
    assert all(unit["driven_m"] > 1.0 for unit in told["units"].values())
    assert picture.read_bytes().startswith(b"\x89PNG")
    assert "not a safety function" in " ".join(found.stderr.split())


@pytest.mark.timeout(300)
def test_a_demo_that_is_cut_short_still_reports(tmp_path: Path) -> None:
    arguments = ["demo", "--seconds", "100", "--picture", str(tmp_path / "yard.png")]
    command = [sys.executable, "-m", "bywayd", *arguments]
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as process:
        assert process.stdout is not None
        for line in process.stdout:
            if "of 100 s" in line:
                process.send_signal(signal.SIGINT)
                break
        rest = process.stdout.read()
        assert process.wait(30) == 0, rest
    assert "All was well." in rest
    assert (tmp_path / "yard.png").exists()
