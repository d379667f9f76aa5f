"""Settings of keys, and of what may be listened on with and without them."""

from pathlib import Path

import pytest
from typer.testing import CliRunner

import bywayd.commands as commands
from bywayd.runtime.sockets import told_endpoints
from bywayd.settings import BadSettings, Settings, load

KEYS = '[keys]\nfile = "/k/daemon.key"\nallowed = "/k/allowed.toml"\n'
OPEN = '[sockets]\nrequests = ["tcp://*:7461", "tcp://192.0.2.7:7471", "tcp://[::]:7481"]\n'


def told(tmp_path: Path, text: str) -> Settings:
    file = tmp_path / "site.toml"
    file.write_text(text)
    return load(file)


def mistakes(tmp_path: Path, text: str) -> list[str]:
    with pytest.raises(BadSettings) as caught:
        told(tmp_path, text)
    return [str(each).replace(f"{tmp_path}/", "") for each in caught.value.mistakes]


def test_with_keys_other_hosts_may_reach_the_sockets(tmp_path: Path) -> None:
    settings = told(tmp_path, KEYS + OPEN)
    assert settings.sockets.requests[:2] == ("tcp://*:7461", "tcp://192.0.2.7:7471")
    assert (settings.keys.file, settings.keys.allowed) == ("/k/daemon.key", "/k/allowed.toml")


def test_without_keys_each_such_address_is_refused(tmp_path: Path) -> None:
    (mistake,) = mistakes(tmp_path, OPEN)
    assert mistake.startswith("site.toml:2: sockets.requests: tcp://*:7461: without keys TCP is")
    for host in ("0.0.0.0", "192.0.2.7", "[::]", "yard.example"):
        (mistake,) = mistakes(tmp_path, f'[sockets]\nevents = ["tcp://{host}:1"]\n')
        assert "without keys" in mistake


def test_a_key_without_a_list_and_a_list_without_a_key_are_mistakes(tmp_path: Path) -> None:
    assert mistakes(tmp_path, '[keys]\nfile = "/k/daemon.key"\n' + OPEN) == [
        "site.toml:1: keys.allowed: is missing: with a key, say who is allowed"
    ]
    (mistake,) = mistakes(tmp_path, '[keys]\nallowed = "/k/a.toml"\n')
    assert mistake.startswith("site.toml:2: keys.allowed: a list of who is allowed means nothing")
    # Half of it is no permission to listen anywhere.
    assert len(mistakes(tmp_path, '[keys]\nallowed = "/k/a.toml"\n[sockets]\nevents = []\n')) == 2


@pytest.mark.parametrize(
    ("text", "why"),
    [
        (
            '[keys]\nfile = "daemon.key"\nallowed = "/a"',
            ":2: keys.file: daemon.key: must be an a",
        ),
        ('[keys]\nfiles = "/a"', "keys.files: not a known key; did you mean file?"),
        (KEYS + '[sockets]\nrequests = ["tcp://a b:1"]', "'a b' is no host"),
        (KEYS + '[sockets]\nrequests = ["tcp://*:99999"]', "expected tcp://"),
        ('[sockets]\ntell_updates = ["tcp://*:7462"]', "nobody can connect to that"),
        ('[sockets]\ntell_events = ["tcp://yard:0"]', "nobody can connect to that"),
        ('[sockets]\ntell_events = ["yard:7463"]', "expected tcp://"),
        ("[sockets]\nconnections_max = 2", "sockets.connections_max: must be greater than or eq"),
    ],
)
def test_each_mistake_is_told(tmp_path: Path, text: str, why: str) -> None:
    assert any(why in mistake for mistake in mistakes(tmp_path, text))


def test_keys_may_come_from_the_environment_and_state_folder(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("XDG_STATE_HOME", "/state")
    monkeypatch.delenv("STATE_DIRECTORY", raising=False)
    monkeypatch.setenv("BYWAY_KEYS__FILE", "{state}/daemon.key")
    monkeypatch.setenv("BYWAY_KEYS__ALLOWED", "/k/allowed.toml")
    monkeypatch.setenv("BYWAY_SOCKETS__UPDATES", '["tcp://*:7462"]')
    settings = load()
    assert settings.keys.file == "/state/byway/daemon.key"
    assert settings.sockets.updates == ("tcp://*:7462",)


def test_check_finds_an_open_address_without_keys(tmp_path: Path) -> None:
    file = tmp_path / "site.toml"
    file.write_text(OPEN)
    found = CliRunner().invoke(commands.app, ["check", str(file)])
    assert found.exit_code == 1
    assert "byway keys makes some" in found.stderr


def test_without_a_place_for_sockets_of_its_own_nobody_looks_for_one(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """As in a container where nothing can be written."""
    monkeypatch.setattr("bywayd.settings.runtime_folder", lambda: 1 / 0)
    sockets = "\n".join(f'{n} = ["tcp://*:746{i}"]' for i, n in enumerate(("requests", "updates")))
    told(tmp_path, f'{KEYS}[sockets]\n{sockets}\nevents = ["tcp://*:7469"]\n')


@pytest.mark.parametrize(
    ("bound", "wanted"),
    [
        ("tcp://127.0.0.1:7462", "tcp://127.0.0.1:7462"),
        ("tcp://[::1]:7462", "tcp://[::1]:7462"),
        ("tcp://0.0.0.0:7462", "tcp://0.0.0.0:7462"),
        ("tcp://192.0.2.7:7462", "tcp://0.0.0.0:7462"),
        ("tcp://yard.example:7462", "tcp://0.0.0.0:7462"),
        ("ipc:///run/byway/updates", "ipc:///run/byway/updates"),
    ],
)
def test_clients_are_told_ports_and_find_the_host_by_themselves(bound: str, wanted: str) -> None:
    assert told_endpoints((), [bound]) == (wanted,)
    assert told_endpoints(("tcp://yard:17462",), [bound]) == ("tcp://yard:17462",)
