"""Commands that need no daemon, and what starting any of them costs."""

import json
import subprocess
import sys
from pathlib import Path

import pytest
from typer.testing import CliRunner, Result

import bywayd.commands as commands
from bywayd.settings import DEFAULT_FILE


def run(*arguments: str) -> Result:
    return CliRunner().invoke(commands.app, arguments)


def test_check_says_what_is_good() -> None:
    found = run("check")
    assert found.exit_code == 0
    assert "The settings are good." in found.stdout
    assert "flatbed" in found.stdout
    assert "6.85" in found.stdout  # wheelbase / tan(largest steering angle)


def test_check_tells_what_layers_are_declared(tmp_path: Path) -> None:
    file = tmp_path / "site.toml"
    file.write_text('[layers.lidar]\ndecay_s = 3\nwhen_stale = "refuse"\n[layers.fixed]\n')
    found = run("check", str(file))
    assert "layer lidar: when_stale refuse, decay_s 3.0" in found.stdout
    assert "layer fixed: as layers are" in found.stdout


def test_the_example_is_itself_good(tmp_path: Path) -> None:
    file = tmp_path / "site.toml"
    file.write_text(run("check", "--example").stdout)
    assert file.read_text() == DEFAULT_FILE.read_text()
    assert run("check", str(file)).exit_code == 0


def test_check_tells_mistakes_and_ends_with_no(tmp_path: Path) -> None:
    file = tmp_path / "site.toml"
    file.write_text("[site]\ncell_m = 7\ncelll = 1\n")
    found = run("check", str(file))
    assert found.exit_code == 1
    assert "site.toml:2: site.cell_m" in found.stderr
    assert "site.toml:3: site.celll" in found.stderr
    told = json.loads(run("check", str(file), "--json").stdout)
    assert told["good"] is False
    assert [mistake["key"] for mistake in told["mistakes"]] == ["site.cell_m", "site.celll"]


def test_check_in_json_has_the_settings_as_they_are_used() -> None:
    told = json.loads(run("check", "--json").stdout)
    assert told["settings"]["vehicles"]["tug"]["turn_radius_m_min"] == 2.6


def test_serve_refuses_settings_with_mistakes(tmp_path: Path) -> None:
    file = tmp_path / "site.toml"
    file.write_text("[site]\ncell_m = 7\n")
    found = run("serve", str(file))
    assert found.exit_code == 1
    assert "site.toml:2: site.cell_m" in found.stderr


@pytest.mark.parametrize(
    "command", [["health"], ["listen"], ["ask", "tug", "--start", "0,0,0", "--goal", "1,1,1"]]
)
def test_a_command_that_only_talks_loads_nothing_heavy(command: list[str]) -> None:
    heavy = {"numba", "scipy", "matplotlib", "byway_planning", "structlog", "rich"}
    script = f"""
import sys
from bywayd.commands import main
sys.argv = {["byway", *command, "--endpoint", "ipc:///nowhere/requests", "--json"]!r}
try:
    main()
except SystemExit as ended:
    print(ended.code, sorted({heavy!r} & set(sys.modules)))
"""
    found = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, check=True, timeout=60
    )
    assert found.stdout == "3 []\n"
    assert found.stderr.startswith("byway: daemon_lost: ")


def test_every_command_has_help() -> None:
    for name in ("serve", "demo", "ask", "listen", "health", "check", "bench", "warm"):
        found = run(name, "--help")
        assert found.exit_code == 0
        assert name in found.stdout
