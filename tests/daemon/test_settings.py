"""Settings: what is taken from where, and that every mistake is told with its place."""

import os
import re
from pathlib import Path

import pytest

from bywayd import settings
from bywayd.settings import DEFAULT_FILE, BadSettings, load
from bywayd.toml_places import lines_of_keys

DISC = '[vehicles.cart]\nmodel = "disc"\nradius_m = 0.5\n'


@pytest.fixture(autouse=True)
def _no_overrides(monkeypatch: pytest.MonkeyPatch) -> None:
    for name in list(os.environ):
        if name.startswith(settings.ENVIRONMENT_PREFIX):
            monkeypatch.delenv(name)


def write(folder: Path, text: str) -> Path:
    file = folder / "site.toml"
    file.write_text(text)
    return file


def mistakes(folder: Path, text: str) -> list[str]:
    """Every mistake as `place: key: text`, the folder left out."""
    with pytest.raises(BadSettings) as caught:
        load(write(folder, text))
    assert str(caught.value) == "\n".join(str(mistake) for mistake in caught.value.mistakes)
    return [str(m).replace(f"{folder}/", "") for m in caught.value.mistakes]


def test_no_file_is_needed() -> None:
    told = load()
    assert {"tug", "flatbed", "loader"} <= set(told.vehicles)
    assert told.sockets.requests[0] == "tcp://127.0.0.1:7461"
    assert any(endpoint.startswith("ipc:///") for endpoint in told.sockets.requests)
    assert told.workers.count == max(1, len(os.sched_getaffinity(0)) - 1)
    assert told.site.cell_m == 0.1


def test_what_the_example_shows_in_comments_can_be_used(tmp_path: Path) -> None:
    lines = DEFAULT_FILE.read_text().splitlines()
    shown = [re.sub(r"^# (?=\[[a-z.]+\]|[a-z_]+ = )", "", line) for line in lines]
    assert len([line for line, was in zip(shown, lines, strict=True) if line != was]) > 15
    file = tmp_path / "site.toml"
    file.write_text("\n".join(shown))
    settings = load(file)
    assert settings.layers["lidar"].when_stale == "report"
    assert settings.layers["lidar"].decay_s == 5.0
    assert settings.site.limits_m == (0.0, 0.0, 80.0, 60.0)


def test_a_file_with_vehicles_has_all_of_them_and_keeps_the_rest(tmp_path: Path) -> None:
    told = load(write(tmp_path, DISC))
    assert list(told.vehicles) == ["cart"]
    assert told.sockets == load().sockets


def test_a_section_of_the_file_keeps_the_defaults_of_its_other_keys(tmp_path: Path) -> None:
    told = load(write(tmp_path, '[log]\nlevel = "debug"\n[workers]\ncount = 2\n'))
    assert (told.log.level, told.log.form) == ("debug", "auto")
    assert (told.workers.count, told.workers.nice) == (2, 10)


def test_the_environment_wins(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    file = write(tmp_path, "[site]\ncell_m = 0.05\nlimits_m = [0, 0, 10, 10]\n" + DISC)
    monkeypatch.setenv("BYWAY_SITE__LIMITS_M", "[0, 0, 80, 60]")
    monkeypatch.setenv("BYWAY_VEHICLES__CART__CLEARANCE_M", "0.25")
    told = load(file)
    assert told.site.limits_m == (0.0, 0.0, 80.0, 60.0)
    assert told.site.cell_m == 0.05
    assert told.vehicles["cart"].arguments() == {"radius_m": 0.5, "clearance_m": 0.25}


def test_variables_that_name_no_section_are_not_ours(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("BYWAY_CACHE_DIR", "/nowhere")
    assert load() is not None


def test_arguments_leave_out_what_was_not_told() -> None:
    told = load().vehicles["flatbed"].arguments()
    assert "model" not in told
    assert "turn_radius_m_min" not in told
    assert told["wheelbase_m"] == 4.2


def test_port_0_may_stand_for_several_sockets(tmp_path: Path) -> None:
    free = '["tcp://127.0.0.1:0"]'
    told = load(write(tmp_path, f"[sockets]\nrequests = {free}\nupdates = {free}\n"))
    assert told.sockets.requests == told.sockets.updates


def test_settings_cannot_be_changed() -> None:
    with pytest.raises(ValueError, match="frozen"):
        load().site.cell_m = 0.2  # type: ignore[misc]


def test_every_mistake_is_told_at_once_with_its_line(tmp_path: Path) -> None:
    text = """\
[site]
cel_m = 0.1
limits_m = [0, 0,
    -80, 60]

[sockets]
requests = ["tcp://0.0.0.0:7461"]
events = []

[vehicles.tug]
model = "car"
footprint_m = [[0, 0],
    [1, 1], [1, 0], [0, 1]]
speed_mps_max = -3
lateral_acceleration_mps2_max = nan

[vehicles.cart]
model = "dics"

[worker]
count = 3
"""
    assert mistakes(tmp_path, text) == [
        "site.toml:2: site.cel_m: not a known key; did you mean cell_m?",
        (
            "site.toml:3: site.limits_m: must be [x_min, y_min, x_max, y_max] "
            "with each min below its max"
        ),
        (
            "site.toml:7: sockets.requests: tcp://0.0.0.0:7461: without keys TCP is served on "
            "loopback only, such as tcp://127.0.0.1:7461; byway keys makes some, [keys] names them"
        ),
        "site.toml:8: sockets.events: the list should have at least 1 item, not 0",
        (
            "site.toml:10: vehicles.tug.steer_rad_max: how does it turn? give turn_radius_m_min, "
            "or wheelbase_m and steer_rad_max"
        ),
        "site.toml:12: vehicles.tug.footprint_m: the edges from corner 0 and corner 2 cross",
        "site.toml:14: vehicles.tug.speed_mps_max: must be greater than 0, not -3",
        (
            "site.toml:15: vehicles.tug.lateral_acceleration_mps2_max: must be a finite number, "
            "not nan"
        ),
        "site.toml:17: vehicles.cart: model is 'dics': must be one of car, forward_car, disc",
        "site.toml:20: worker: not a known key; did you mean workers?",
    ]


@pytest.mark.parametrize(
    ("section", "told"),
    [
        ("[vehicles.a]\nradius_m = 1", ":1: vehicles.a: model is missing"),
        ('[vehicles.a]\nmodel = "disc"', ":1: vehicles.a.radius_m: is missing"),
        ('[vehicles.a]\nmodel = "disc"\nradius_m = inf', ":3: vehicles.a.radius_m: must be"),
        ('[vehicles.a]\nmodel = "disc"\nradius_m = 1\nreverse_factor = 2', ":4: vehicles.a.rev"),
        ('[vehicles."no name"]\nmodel = "disc"\nradius_m = 1', ":1: vehicles.no name: a name be"),
        ("vehicles = {}", ":1: vehicles: "),
        ("[layers.lidar]\nunknown_blocks = 7", ":2: layers.lidar.unknown_blocks: must be"),
        ("[layers.lidar]\ndecay_s = 0", ":2: layers.lidar.decay_s: must be greater than 0, not 0"),
        ("[layers.lidar]\nexpected_period_s = -1", ":2: layers.lidar.expected_period_s: must be"),
        ("[layers.lidar]\nwhen_stale = 'stop'", "when_stale: must be 'ignore', 'report' or 'refu"),
        ("[layers.lidar]\ndecay = 3", "layers.lidar.decay: not a known key; did you mean decay_s"),
        ("[site]\nsweep_s = 900", ":2: site.sweep_s: must be less than or equal to 60, not 900"),
        ("[site]\ncarry_every_s = 0.0", ":2: site.carry_every_s: must be greater than or equal"),
        ("[site]\ntrack_expires_s = 0", ":2: site.track_expires_s: must be greater than 0"),
        ("[guards]\ncount_max = 0", ":2: guards.count_max: must be greater than or equal to 1"),
        ("[guards]\nsilence_s = nan", ":2: guards.silence_s: must be"),
        ("[guards]\nbudget_s = 99", ":2: guards.budget_s: must be less than or equal to 60"),
        ("[sockets]\nevents = ['ipc://']", ":2: sockets.events: ipc://: an ipc path has 1"),
        (f"[sockets]\nevents = ['ipc://{'x' * 108}']", "an ipc path has 1 to 107 bytes"),
        ("[sockets]\nevents = ['udp://127.0.0.1:3']", "expected tcp://127.0.0.1:PORT"),
        ("[sockets]\nevents = ['tcp://127.0.0.1:77777']", "expected tcp://127.0.0.1:PORT"),
        ("[sockets]\nevents = ['tcp://127.0.0.1:7461']", "stands for more than one socket"),
        ("[workers]\ncores = [0, -1]", ":2: workers.cores[1]: must be greater than or equal to 0"),
        ("[site]\norigin_m = [1, 2, 3]", ":2: site.origin_m: the list should have at most 2"),
        ("[answers]\nmargin_s = 2", ":2: answers.margin_s: must be less than or equal to 1"),
        ("[answers]\nbudget_s_max = 99", ":2: answers.budget_s_max: must be less than or equal"),
        ("[site]\ncell_m = 0.001", ":2: site.cell_m: must be greater than or equal to 0.02"),
    ],
)
def test_one_mistake(tmp_path: Path, section: str, told: str) -> None:
    (found,) = mistakes(tmp_path, section + "\n")
    assert told in found


@pytest.mark.parametrize(
    ("corners", "told"),
    [
        ("[[0, 0], [1, 0]]", "at least 3 items"),
        ("[[0, 0], [1, 0], [2, 0]]", "no area"),
        ("[[0, 0], [2, 0], [2, 2], [1, 0], [0, 2]]", "cross"),
        (str([[i % 9, i * 0.1] for i in range(33)]), "at most 32 items"),
        ("[[0, 0], [1e9, 0], [0, 1]]", "less than or equal to 100"),
    ],
)
def test_a_footprint_must_be_an_outline(tmp_path: Path, corners: str, told: str) -> None:
    text = f'[vehicles.a]\nmodel = "car"\nturn_radius_m_min = 3\nfootprint_m = {corners}\n'
    found = mistakes(tmp_path, text)
    assert len(found) == 1
    assert told in found[0]


@pytest.mark.parametrize(
    "turning",
    ["", "wheelbase_m = 2", "steer_rad_max = 0.5", "turn_radius_m_min = 3\nwheelbase_m = 2"],
)
def test_how_a_car_turns_is_said_once(tmp_path: Path, turning: str) -> None:
    corners = "[[0, 0], [1, 0], [0, 1]]"
    text = f'[vehicles.a]\nmodel = "forward_car"\nfootprint_m = {corners}\n{turning}\n'
    (found,) = mistakes(tmp_path, text)
    assert "how does it turn?" in found


def test_a_mistake_in_the_environment_names_the_variable(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("BYWAY_WORKERS__COUNT", "many")
    monkeypatch.setenv("BYWAY_WROKERS__COUNT", "3")
    monkeypatch.setenv("BYWAY_SITE__CELL", "3")
    assert mistakes(tmp_path, "[site]\ncell_m = 0.1\n") == [
        "environment BYWAY_SITE__CELL: site.cell: not a known key; did you mean cell_m?",
        (
            "environment BYWAY_WORKERS__COUNT: workers.count: must be a valid integer, "
            "unable to parse string as an integer, not 'many'"
        ),
        "environment BYWAY_WROKERS__COUNT: no section of this name; did you mean workers?",
    ]


def test_a_variable_that_is_no_json_is_told(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("BYWAY_SITE", "[")
    with pytest.raises(BadSettings, match=r"environment: .*site"):
        load()


def test_a_file_that_is_no_toml_is_told_with_its_line(tmp_path: Path) -> None:
    (found,) = mistakes(tmp_path, "[site]\ncell_m == 1\n")
    assert found.startswith("site.toml: not TOML: ")
    assert "line 2" in found


def test_a_file_that_is_not_there_is_told(tmp_path: Path) -> None:
    with pytest.raises(BadSettings, match=r"nowhere\.toml: cannot be read: No such file"):
        load(tmp_path / "nowhere.toml")


def test_a_file_that_is_no_text_is_told(tmp_path: Path) -> None:
    file = tmp_path / "x.toml"
    file.write_bytes(b"\xff\xfe\x00")
    with pytest.raises(BadSettings, match="cannot be read: not UTF-8"):
        load(file)


def test_ipc_sockets_live_in_a_folder_of_the_user(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("RUNTIME_DIRECTORY", "/run/somewhere")
    assert load().sockets.events[1] == "ipc:///run/somewhere/byway/events"


def test_lines_of_keys_in_every_form_of_toml() -> None:
    text = """\
top = 1

[a]
b.c = 2
d = [
  1,
  [2, 3],
]
e = { f = 1, g = 2 }
[[h]]
i = \"\"\"
[not.a.table]
\"\"\"
[[h]]
i = 3
"""
    lines = lines_of_keys(text)
    assert lines[("top",)] == 1
    assert lines[("a",)] == 3
    assert lines[("a", "b", "c")] == 4
    assert lines[("a", "d", "1", "0")] == 5
    assert lines[("a", "e", "g")] == 9
    assert lines[("h", "0", "i")] == 11
    assert lines[("h", "1")] == 14
    assert ("not", "a", "table") not in lines
