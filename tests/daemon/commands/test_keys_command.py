"""`byway keys`, and `--keys` of every command that connects."""

import json
import re
import stat
import tomllib
from pathlib import Path
from typing import Any

import pytest
from typer.testing import CliRunner, Result

import byway
import bywayd.commands as commands
from byway.keys import load_keys, new_keys
from bywayd.allowed import load_allowed
from bywayd.core.rights import Rights


def run(*arguments: str) -> Result:
    return CliRunner().invoke(commands.app, arguments)


def keys(*arguments: object) -> Result:
    return run("keys", *(str(each) for each in arguments))


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    made = tmp_path / "keys"
    assert keys("new", made).exit_code == 0
    return made


def mode_of(path: Path) -> int:
    return stat.S_IMODE(path.stat().st_mode)


def test_new_makes_a_folder_for_the_daemon_alone_and_says_what_to_set(tmp_path: Path) -> None:
    found = keys("new", tmp_path / "keys")
    assert found.exit_code == 0
    assert mode_of(tmp_path / "keys") == 0o700
    assert mode_of(tmp_path / "keys" / "daemon.key") == 0o600
    assert load_allowed(tmp_path / "keys" / "allowed.toml") == {}
    told = tomllib.loads(found.stdout[found.stdout.index("[keys]") :])["keys"]
    assert load_keys(told["file"]).name == "daemon"
    assert load_allowed(Path(told["allowed"])) == {}


def test_new_never_replaces_a_daemons_key(folder: Path) -> None:
    before = load_keys(folder / "daemon.key")
    found = keys("new", folder)
    assert found.exit_code == 1
    assert "File exists" in found.stderr
    assert load_keys(folder / "daemon.key") == before


def test_new_refuses_a_folder_that_others_may_enter(tmp_path: Path) -> None:
    tmp_path.chmod(0o755)
    found = keys("new", tmp_path)
    assert found.exit_code == 1
    assert "chmod 700" in found.stderr
    assert list(tmp_path.iterdir()) == []


def test_add_makes_a_key_that_is_on_the_list_and_knows_its_daemon(folder: Path) -> None:
    found = keys("add", folder, "lidar", "--role", "source", "--layer", "lidar.*", "--layer", "sky")
    assert found.exit_code == 0
    made = load_keys(folder / "lidar.key")
    assert mode_of(folder / "lidar.key") == 0o600
    assert made.daemon == load_keys(folder / "daemon.key").public
    assert load_allowed(folder / "allowed.toml") == {
        made.public: Rights("source", "lidar", ("lidar.*", "sky"))
    }
    assert made.secret not in found.output
    assert "Carry it to its owner by a way that nobody else can read" in found.stdout


def test_keys_go_to_a_folder_of_their_own_if_wanted(folder: Path, tmp_path: Path) -> None:
    away = tmp_path / "away"
    assert keys("add", folder, "yard/eye", "--role", "watcher", "--to", away).exit_code == 0
    assert load_keys(away / "yard_eye.key").name == "yard/eye"
    assert mode_of(away) == 0o700
    assert sorted(each.name for each in folder.iterdir()) == ["allowed.toml", "daemon.key"]


def test_a_secret_need_not_travel(folder: Path, tmp_path: Path) -> None:
    daemon = load_keys(folder / "daemon.key").public
    file = tmp_path / "tug.key"
    found = keys("pair", file, "--name", "tug-3", "--daemon", daemon)
    assert found.exit_code == 0
    made = load_keys(file)
    assert (made.name, made.daemon) == ("tug-3", daemon)
    assert made.secret not in found.output
    (public,) = re.findall("--public '(.*)'", found.stdout)
    assert keys("add", folder, "tug-3", "--role", "driver", "--public", public).exit_code == 0
    assert load_allowed(folder / "allowed.toml") == {made.public: Rights("driver", "tug-3")}
    assert not (folder / "tug-3.key").exists()


SOME_KEY = new_keys("some").public


@pytest.mark.parametrize(
    ("arguments", "status", "why"),
    [
        (("eye", "--role", "watcher"), 1, "is on the list already"),
        (("b", "--role", "emperor"), 2, "none of source, driver, watcher"),
        (("two words", "--role", "driver"), 1, "no name for a key"),
        (("b", "--role", "operator", "--layer", "a"), 1, "mean nothing for the role operator"),
        (("b", "--role", "source", "--layer", "a b"), 1, "no name of a layer"),
        (("b", "--role", "driver", "--public", "short"), 1, "public key is not 40 characters"),
        (("b", "--role", "driver", "--public", SOME_KEY), 1, "that is the key of some"),
    ],
)
def test_what_cannot_be_added_changes_nothing(
    folder: Path, arguments: tuple[str, ...], status: int, why: str
) -> None:
    keys("add", folder, "eye", "--role", "watcher")
    keys("add", folder, "some", "--role", "watcher", "--public", SOME_KEY)
    before = {each.name: each.read_bytes() for each in folder.iterdir()}
    found = keys("add", folder, *arguments)
    assert found.exit_code == status
    assert why in " ".join(re.sub("[│╭╮╰╯─]", "", found.stderr).split())
    assert {each.name: each.read_bytes() for each in folder.iterdir()} == before


def test_remove_takes_off_the_list_and_deletes_the_file(folder: Path) -> None:
    keys("add", folder, "eye", "--role", "watcher")
    keys("add", folder, "boss", "--role", "operator")
    found = keys("remove", folder, "eye")
    assert found.exit_code == 0
    assert "restart the daemon" in " ".join(found.stdout.split())
    assert [each.name for each in load_allowed(folder / "allowed.toml").values()] == ["boss"]
    assert not (folder / "eye.key").exists()
    assert keys("remove", folder, "eye").exit_code == 1


def test_list_shows_who_is_allowed_and_no_secret(folder: Path) -> None:
    keys("add", folder, "lidar", "--role", "source", "--layer", "lidar.*")
    told = json.loads(keys("list", folder, "--json").stdout)
    made = load_keys(folder / "lidar.key")
    assert told == {
        "daemon": made.daemon,
        "allowed": [
            {"name": "lidar", "role": "source", "layers": ["lidar.*"], "public": made.public}
        ],
    }
    shown = keys("list", folder).stdout
    assert made.public in shown
    assert made.daemon in shown
    assert "lidar.*" in shown
    assert made.secret not in shown


def test_list_finds_files_that_are_no_good(folder: Path) -> None:
    (folder / "daemon.key").chmod(0o644)
    found = keys("list", folder)
    assert found.exit_code == 1
    assert "can be read by others" in found.stderr


def test_where_there_is_no_key_of_a_daemon_nothing_can_be_done(tmp_path: Path) -> None:
    for arguments in (("list", tmp_path), ("add", tmp_path, "a", "--role", "driver")):
        found = keys(*arguments)
        assert found.exit_code == 1
        assert "cannot be read: No such file" in found.stderr


# -- every command that connects ---------------------------------------------------------------


COMMANDS = (
    ("ask", "tug", "--start", "0,0,0", "--goal", "1,0,0"),
    ("listen",),
    ("health",),
    ("put", "site.json"),
    ("site",),
    ("demo", "--connect", "tcp://127.0.0.1:1"),
)


@pytest.fixture
def asked(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> list[dict[str, Any]]:
    """With which keys a client was made."""
    made: list[dict[str, Any]] = []

    def make(endpoint: str, **more: Any) -> None:
        made.append({"endpoint": endpoint, **more})
        raise byway.Forbidden("that is as far as it goes")

    monkeypatch.setattr(byway, "Client", make)
    monkeypatch.chdir(tmp_path)
    (tmp_path / "site.json").write_text('{"type": "FeatureCollection", "features": []}')
    return made


@pytest.mark.parametrize("command", COMMANDS, ids=lambda command: command[0])
def test_every_command_that_connects_takes_keys(
    asked: list[dict[str, Any]], command: tuple[str, ...], tmp_path: Path
) -> None:
    found = run(*command, "--keys", str(tmp_path / "eye.key"))
    assert asked[0]["keys"] == tmp_path / "eye.key"
    assert found.exit_code != 0


@pytest.mark.parametrize("command", COMMANDS[:-1], ids=lambda command: command[0])
def test_or_finds_them_in_the_environment(
    asked: list[dict[str, Any]],
    command: tuple[str, ...],
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setenv("BYWAY_KEY_FILE", str(tmp_path / "eye.key"))
    run(*command)
    assert asked[0]["keys"] == tmp_path / "eye.key"


def test_no_other_command_connects() -> None:
    """A new one has to be put into the list above."""
    others = {"serve", "check", "bench", "warm", "keys"}
    names = {each.name or each.callback.__name__ for each in commands.app.registered_commands}
    assert names | {"keys"} == {command[0] for command in COMMANDS} | others


def test_the_demo_takes_a_folder_with_a_key_for_each(
    asked: list[dict[str, Any]], tmp_path: Path
) -> None:
    run("demo", "--connect", "tcp://127.0.0.1:1", "--keys", str(tmp_path))
    assert asked[0]["keys"] == tmp_path / "yard.key"
    # Its own daemon is on sockets that nobody else can reach.
    assert run("demo", "--keys", str(tmp_path)).exit_code == 2
