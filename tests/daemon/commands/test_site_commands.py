"""`byway put` and `byway site`: what they ask of the client, print and draw."""

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from matplotlib.image import imread
from typer.testing import CliRunner, Result

import byway
import bywayd.commands as commands
from byway.messages import BlockedIs
from byway.site_view import Cells, GuardedView, LayerView, SiteView, TrackView

HALL = np.array([(5.0, 5.0), (25.0, 5.0), (25.0, 20.0), (5.0, 20.0)])
YARD = np.array([(8.0, 8.0), (20.0, 8.0), (20.0, 16.0), (8.0, 16.0)])
CELLS = np.zeros((10, 10), np.uint8)
CELLS[4, 4] = 1
VIEW = SiteView(
    revision=17,
    epoch="e1",
    origin_m=(0.0, 0.0),
    limits_m=(0.0, 0.0, 60.0, 40.0),
    layers={
        "fixed": LayerView(
            False, False, {"hall": HALL}, {"silo": (40.0, 30.0, 2.0)}, (),
            holes={"hall": (YARD,)}, durable=True,
        ),
        "lidar": LayerView(True, False, {}, {}, (Cells((30.0, 10.0), 0.1, CELLS),), decay_s=4.0),
        "outlines": LayerView(False, True, {"tug": HALL[:3] + 30.0}, {}, ()),
    },
    tracks=(
        TrackView(
            "movers", "fork-1", (45.0, 12.0, 0.3), (1.0, 0.4), 0.1, 0.2, 0.3, 0.1,
            np.array([(-1.0, -0.6), (1.2, -0.6), (1.2, 0.6), (-1.0, 0.6)]),
            (np.array([(44.0, 11.0), (50.0, 12.0), (50.0, 15.0), (44.0, 14.0)]),),
        ),
    ),
    guards=(
        GuardedView(
            "tug-3", 4.0, "blocked",
            np.column_stack([np.linspace(30, 55, 40), np.full(40, 25.0), np.zeros(40)]),
            BlockedIs(
                distance_m=7.5, time_s=3.0, at_m=11.5, x_m=41.5, y_m=25.0, heading_rad=0.0,
                kind="disc", layer="fixed", id="silo", depth_m=0.2,
            ),
        ),
        GuardedView("mule", 0.0, "clear", np.zeros((2, 3)), None),
    ),
)  # fmt: skip


class FakeClient:
    """Notes what it was told."""

    told: list[tuple[str, Any]]

    def __init__(self, endpoint: str, **_: Any) -> None:
        FakeClient.told = []

    def __enter__(self) -> "FakeClient":
        return self

    def __exit__(self, *_: object) -> None:
        pass

    def site(self, **asked: Any) -> SiteView:
        FakeClient.told.append(("site", asked))
        return VIEW

    def claim(self, layer: str, **more: Any) -> int:
        FakeClient.told.append(("claim", {"layer": layer, **more}))
        return 3

    def put(
        self, layer: str, polygons: Any, discs: Any, expires_in_s: float | None, **more: Any
    ) -> int:
        shapes = {"polygons": polygons, "discs": discs, "expires_in_s": expires_in_s}
        FakeClient.told.append(("put", {"layer": layer, **shapes, **more}))
        return 4

    def replace_layer(self, layer: str, polygons: Any, discs: Any, **more: Any) -> int:
        told = {"layer": layer, "polygons": polygons, "discs": discs, **more}
        FakeClient.told.append(("replace_layer", told))
        return 5


@pytest.fixture(autouse=True)
def _fake(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(byway, "Client", FakeClient)


def run(*words: str) -> Result:
    return CliRunner().invoke(commands.app, list(words))


# -- site -------------------------------------------------------------------------------------


def test_site_prints_layers_and_guarded_routes() -> None:
    found = run("site", "--layer", "fixed", "--box", "0,0,50,50")
    assert found.exit_code == 0, found.output
    asked = FakeClient.told[0][1]
    assert (asked["layers"], asked["box_m"]) == (["fixed"], (0.0, 0.0, 50.0, 50.0))
    lines = {line.split()[0]: line for line in found.stdout.splitlines() if line.strip()}
    assert lines["fixed"].split()[1:5] == ["1", "1", "0", "0"]
    assert "durable" in lines["fixed"]
    assert "unknown blocks" in lines["lidar"]
    assert lines["lidar"].split()[3] == "1"
    assert "outlines only" in lines["outlines"]
    assert "blocked in 7.5 m by silo" in lines["tug-3"]
    assert "clear" in lines["mule"]


def test_site_prints_json_for_programs() -> None:
    told = json.loads(run("site", "--json").stdout)
    assert told["revision"] == 17
    assert told["layers"]["fixed"]["holes"]["hall"][0] == YARD.tolist()
    assert told["layers"]["lidar"]["cells_occupied"] == 1
    assert told["tracks"][0]["id"] == "fork-1"
    assert told["guards"][0]["blocked"]["id"] == "silo"


@pytest.mark.parametrize("box", ["1,2,3", "a,b,c,d", "5,0,1,9"])
def test_ground_that_is_none_is_an_error_of_usage(box: str) -> None:
    assert run("site", "--box", box).exit_code == 2


def test_site_draws_what_there_is(tmp_path: Path) -> None:
    """The colour of what moves is on the paper, and the hole shows the paper itself."""
    file = tmp_path / "site.png"
    assert run("site", "--picture", str(file)).exit_code == 0
    pixels = np.round(imread(file)[:, :, :3] * 255).astype(int)
    alarm = np.array([0xD2, 0x69, 0x1E])
    assert (abs(pixels - alarm).max(axis=2) < 30).sum() > 200
    empty = tmp_path / "empty.svg"
    from bywayd.commands.site import draw

    draw(SiteView(1, "e", (0.0, 0.0), None, {}), empty)
    assert empty.stat().st_size > 1000


# -- put --------------------------------------------------------------------------------------


@pytest.fixture
def file(tmp_path: Path) -> Path:
    path = tmp_path / "yard.geojson"
    ring = [[*each] for each in (*HALL, HALL[0])]
    hole = [[*each] for each in (*YARD, YARD[0])]
    point = {"type": "Point", "coordinates": [1, 2]}
    features = [
        {"type": "Feature", "id": "hall", "properties": {},
         "geometry": {"type": "Polygon", "coordinates": [ring, hole]}},
        {"type": "Feature", "id": "silo", "properties": {"radius_m": 2}, "geometry": point},
    ]  # fmt: skip
    path.write_text(json.dumps({"type": "FeatureCollection", "features": features}))
    return path


def test_put_claims_and_puts(file: Path) -> None:
    found = run("put", str(file), "--durable", "--expires", "60")
    assert found.exit_code == 0, found.output
    (claim, settings), (put, told) = FakeClient.told
    assert (claim, put) == ("claim", "put")
    assert settings == {"layer": "fixed", "durable": True, "outlines_only": None}
    assert told["expires_in_s"] == 60.0
    assert told["discs"] == {"silo": (1.0, 2.0, 2.0)}
    assert len(told["polygons"]["hall"]["holes"]) == 1
    assert "1 polygons, 1 discs and 0 boxes are visible at revision 4" in found.stdout


def test_put_replaces_a_layer_and_speaks_json(file: Path) -> None:
    found = run("put", str(file), "--layer", "walls", "--replace", "--live", "--json")
    assert json.loads(found.stdout) == {
        "layer": "walls", "polygons": 1, "discs": 1, "boxes": 0, "revision": 5,
    }  # fmt: skip
    ((what, told),) = FakeClient.told
    assert what == "replace_layer"
    assert told["durable"] is False


def test_a_large_drawing_goes_in_several_changes(
    file: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("bywayd.geojson.Shapes.pieces.__defaults__", (1, 100))
    found = run("put", str(file), "--replace")
    assert found.exit_code == 0, found.output
    (first, told), (second, more) = FakeClient.told
    assert (first, second) == ("replace_layer", "put")
    assert (len(told["polygons"]), told["discs"]) == (1, {})
    assert (more["polygons"], more["discs"]) == ({}, {"silo": (1.0, 2.0, 2.0)})


def test_what_cannot_be_read_is_said_and_nothing_is_sent(tmp_path: Path) -> None:
    found = run("put", str(tmp_path / "nothing"))
    assert found.exit_code == 2
    assert "No such file" in found.stderr
    wrong = tmp_path / "wrong.geojson"
    wrong.write_text('{"type": "Moon"}')
    found = run("put", str(wrong))
    assert found.exit_code == 1
    assert "coordinates" in found.stderr or "not taken" in found.stderr
