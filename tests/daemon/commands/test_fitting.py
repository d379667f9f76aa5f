"""`byway ask --site`: planning on a drawing, without a daemon."""

import json
import math
from pathlib import Path
from typing import Any

import pytest
import shapely
from typer.testing import CliRunner, Result

import bywayd.commands as commands

#: Kernels may have to be compiled first.
pytestmark = pytest.mark.timeout(400)

HALL = [[20, 20], [50, 20], [50, 50], [20, 50], [20, 20]]
YARD = [[25, 25], [45, 25], [45, 45], [25, 45], [25, 25]]
TUG = [(-0.6, -0.7), (2.2, -0.7), (2.2, 0.7), (-0.6, 0.7)]


@pytest.fixture
def drawing(tmp_path: Path) -> Path:
    return drawn(tmp_path, 0.0, 0.0)


def drawn(tmp_path: Path, ox: float, oy: float) -> Path:
    def moved(ring: list[list[int]]) -> list[list[float]]:
        return [[x + ox, y + oy] for x, y in ring]

    file = tmp_path / "yard.geojson"
    hall = {"type": "Polygon", "coordinates": [moved(HALL), moved(YARD)]}
    post = {"type": "Point", "coordinates": [52.6 + ox, 35 + oy]}
    features = [
        {"type": "Feature", "id": "hall", "properties": {}, "geometry": hall},
        {"type": "Feature", "id": "post", "properties": {"radius_m": 0.2}, "geometry": post},
    ]
    file.write_text(json.dumps({"type": "FeatureCollection", "features": features}))
    return file


def ask(drawing: Path, *more: str, vehicle: str = "tug") -> Result:
    words = ["ask", vehicle, "--site", str(drawing), "--budget", "0.3", "--seed", "1", *more]
    return CliRunner().invoke(commands.app, words)


def told(found: Result) -> dict[str, Any]:
    answer: dict[str, Any] = json.loads(found.stdout)
    return answer


def test_a_route_with_its_tightest_place(drawing: Path, tmp_path: Path) -> None:
    picture = tmp_path / "fit.png"
    ends = ("--start", "51.5,10,90deg", "--goal", "51.5,60,90deg")
    found = ask(drawing, *ends, "--json", "--picture", str(picture))
    assert found.exit_code == 0, found.output
    answer = told(found)
    assert answer["kind"] == "route"
    tightest = answer["tightest"]
    # By shapely, at the pose that is named: nothing is nearer, and it is the obstacle named.
    x, y, heading = tightest["pose"]
    body = shapely.affinity.rotate(shapely.Polygon(TUG), heading, (0, 0), use_radians=True)
    body = shapely.affinity.translate(body, x, y)
    world = {
        "hall": shapely.Polygon(HALL, [YARD]),
        "post": shapely.Point(52.6, 35).buffer(0.2, 64),
    }
    apart = {name: shape.distance(body) for name, shape in world.items()}
    assert min(apart, key=lambda name: apart[name]) == tightest["what"]
    assert apart[tightest["what"]] == pytest.approx(tightest["clearance_m"], abs=1e-3)
    assert tightest["clearance_m"] >= 0.1 - 1e-6
    rows = zip(*(answer["route"][n] for n in ("x_m", "y_m", "heading_rad")), strict=True)
    for px, py, angle in rows:
        placed = shapely.affinity.rotate(shapely.Polygon(TUG), angle, (0, 0), use_radians=True)
        placed = shapely.affinity.translate(placed, px, py)
        assert min(s.distance(placed) for s in world.values()) > tightest["clearance_m"] - 1e-3
    assert picture.stat().st_size > 10_000


def test_for_people(drawing: Path) -> None:
    found = ask(drawing, "--start", "51.5,10,90deg", "--goal", "51.5,60,90deg")
    assert "tightest place" in found.stdout
    assert "route" in found.stdout


def test_no_route_says_what_would_have_to_move(drawing: Path, tmp_path: Path) -> None:
    picture = tmp_path / "fit.svg"
    found = ask(drawing, "--start", "5,5,0", "--goal", "35,35,0", "--picture", str(picture))
    assert found.exit_code == 1
    assert "Without hall of layer site" in found.stdout
    assert "would have to move" in picture.read_text() or picture.stat().st_size > 10_000


def test_survey_coordinates_need_no_more_than_an_origin(tmp_path: Path) -> None:
    ox, oy = 500_000.0, 5_000_000.0
    settings = tmp_path / "site.toml"
    settings.write_text(f"[site]\norigin_m = [{ox}, {oy}]\n")
    ends = ("--start", f"{51.5 + ox},{10 + oy},90deg", "--goal", f"{51.5 + ox},{60 + oy},90deg")
    found = ask(drawn(tmp_path, ox, oy), *ends, "--settings", str(settings), "--json")
    assert found.exit_code == 0, found.output
    pose = told(found)["tightest"]["pose"]
    assert math.hypot(pose[0] - 51.5 - ox, pose[1] - 35.0 - oy) < 30.0


@pytest.mark.parametrize(
    ("more", "vehicle", "status", "said"),
    [
        (("--start", "5,5,0", "--goal", "9,9,0"), "sledge", 4, "no vehicle is called sledge"),
        (("--start", "5,5,0", "--goal", "9,9,0", "--method", "luck"), "tug", 4, "no method"),
    ],
)
def test_senseless_questions(
    drawing: Path, more: Any, vehicle: str, status: int, said: str
) -> None:
    found = ask(drawing, *more, vehicle=vehicle)
    assert found.exit_code == status
    assert said in found.stderr


def test_files_that_are_none(tmp_path: Path) -> None:
    ends = ("--start", "5,5,0", "--goal", "9,9,0")
    assert ask(tmp_path / "nothing.geojson", *ends).exit_code == 1
    crossing = {"type": "Polygon", "coordinates": [[[0, 0], [4, 4], [4, 0], [0, 4], [0, 0]]]}
    file = tmp_path / "crossing.geojson"
    file.write_text(json.dumps(crossing))
    found = ask(file, *ends)
    assert found.exit_code == 4
    assert "g0: edge" in found.stderr
    wrong = tmp_path / "wrong.toml"
    wrong.write_text("[site]\ncell = 3\n")
    assert ask(file, *ends, "--settings", str(wrong)).exit_code == 1
