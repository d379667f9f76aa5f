"""A whole daemon with keys: roles, restarts, floods, and files that are no good."""

import threading
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from tests.daemon.daemon_harness import Daemon, eventually

import byway
from byway.keys import Keys, new_keys, save_keys
from bywayd.allowed import save_allowed
from bywayd.core.rights import Rights

DAEMON = new_keys("daemon")
RIGHTS = (
    Rights("watcher", "eye"),
    Rights("driver", "tug", ("unit.*",)),
    Rights("source", "lidar", ("lidar.*",)),
    Rights("source", "crane"),
    Rights("operator", "boss"),
)
KEYS = {rights.name: new_keys(rights.name, DAEMON.public) for rights in RIGHTS}
STRANGER = new_keys("stranger", DAEMON.public)
POST = {"post": (1.0, 2.0, 0.5)}


def keep_keys(folder: Path) -> dict[str, str]:
    """Write key and list of a daemon; return the settings that name them."""
    folder.mkdir(mode=0o700, exist_ok=True)
    if not (folder / "daemon.key").exists():
        save_keys(DAEMON, folder / "daemon.key")
    allow(folder, *RIGHTS)
    return {
        "BYWAY_KEYS__FILE": str(folder / "daemon.key"),
        "BYWAY_KEYS__ALLOWED": str(folder / "allowed.toml"),
    }


def allow(folder: Path, *rights: Rights) -> None:
    save_allowed({KEYS[each.name].public: each for each in rights}, folder / "allowed.toml")


def client_of(daemon: Daemon, keys: Keys | str | None, **more: Any) -> byway.Client:
    keys = KEYS[keys] if isinstance(keys, str) else keys
    return byway.Client(daemon.endpoints["requests"], keys=keys, **more)


def wait_until_ready(daemon: Daemon) -> None:
    def is_ready() -> bool:
        try:
            with client_of(daemon, "eye") as client:
                return client.hello().state == "ready"
        except byway.LinkFault:
            return False

    eventually(is_ready, 20.0)


@pytest.fixture(scope="module")
def daemon(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Daemon]:
    folder = tmp_path_factory.mktemp("d")
    started = Daemon(folder, environment=keep_keys(folder / "keys"))
    try:
        wait_until_ready(started)
        yield started
    finally:
        started.end()


def outcome(call: Any) -> str:
    try:
        call()
    except byway.BadReply:
        return "done"  # the stand-in for a planner answers, but with a route without rows
    except byway.BywayError as error:
        return error.code
    return "done"


def replan(client: byway.Client, unit: str) -> str:
    asked = (*("tug", (0, 0, 0), (5, 0, 0)), 0.5)
    return outcome(lambda: client.replan(*asked, method="at_once", unit=unit))


@pytest.mark.parametrize(
    ("who", "route", "lidar", "unit", "fixed"),
    [
        ("eye", "forbidden", "forbidden", "forbidden", "forbidden"),
        ("tug", "done", "forbidden", "done", "forbidden"),
        ("lidar", "forbidden", "done", "forbidden", "forbidden"),
        ("crane", "forbidden", "done", "done", "done"),
        ("boss", "done", "done", "done", "done"),
    ],
)
def test_each_role_does_what_it_may_and_nothing_else(
    daemon: Daemon, who: str, route: str, lidar: str, unit: str, fixed: str
) -> None:
    with client_of(daemon, who) as client:
        assert client.health().state == "ready"
        assert client.vehicles()
        seen = {
            "replan": replan(client, who),
            "lidar": outcome(lambda: client.put(f"lidar.{who}", discs=POST)),
            "unit": outcome(lambda: client.put(f"unit.{who}", discs=POST)),
            "fixed": outcome(lambda: client.put(f"fixed.{who}", discs=POST)),
        }
    assert seen == {"replan": route, "lidar": lidar, "unit": unit, "fixed": fixed}


def test_what_is_forbidden_leaves_what_follows_alone(daemon: Daemon) -> None:
    """One by one, in a stream of changes that nobody waits for."""
    with client_of(daemon, "lidar") as client, client.source("lidar.stream") as stream:
        for index in range(5):
            stream.put(discs={f"a-{index}": (1.0, 2.0, 0.5)}, wait=False)
            assert outcome(lambda: client.put("fixed", discs=POST)) == "forbidden"
        stream.settle()
        layers = client.health().layers
        assert layers["lidar.stream"].obstacles == 5
        assert "fixed" not in layers


@pytest.mark.parametrize("keys", [STRANGER, None])
def test_strangers_hear_nothing(daemon: Daemon, keys: Keys | None) -> None:
    with client_of(daemon, keys) as client:
        assert outcome(client.hello) == "forbidden"


def test_events_are_for_those_on_the_list(daemon: Daemon) -> None:
    with client_of(daemon, "eye") as client:
        assert next(iter(client.listen(["health"], 5.0))).topic == "health"


def test_the_same_over_tcp(daemon: Daemon) -> None:
    (line,) = daemon.log_lines("daemon.listening")
    assert line["allowed"] == len(RIGHTS)
    with byway.Client(line["requests"][1], keys=KEYS["eye"]) as client:
        assert client.hello().state == "ready"


def test_a_crowd_of_strangers_keeps_nobody_waiting(daemon: Daemon) -> None:
    ending = threading.Event()
    knocked: list[str] = []

    def knock() -> None:
        while not ending.is_set():
            with client_of(daemon, STRANGER) as client:
                knocked.append(outcome(client.hello))

    crowd = [threading.Thread(target=knock) for _ in range(4)]
    for each in crowd:
        each.start()
    try:
        with client_of(daemon, "tug") as client:
            for index in range(10):
                began_s = time.monotonic()
                assert replan(client, f"busy-{index}") == "done"
                assert time.monotonic() - began_s < 1.0
            counts = client.health().counts
    finally:
        ending.set()
        for each in crowd:
            each.join()
    assert set(knocked) == {"forbidden"}
    assert counts["peers"] < 64
    # So many lines and no more, however many knock.
    assert len(daemon.log_lines("keys.turned_away")) < len(knocked)


def test_a_source_goes_on_after_a_restart_and_the_list_is_read_again(tmp_path: Path) -> None:
    environment = keep_keys(tmp_path / "keys")
    first = Daemon(tmp_path, environment=environment)
    second: Daemon | None = None
    try:
        wait_until_ready(first)
        with (
            client_of(first, "lidar", timeout_s=20.0, reconnect_s=20.0) as client,
            client.source("lidar.north") as source,
        ):
            source.put(discs=POST)
            epoch = client.epoch
            first.end()
            second = Daemon(tmp_path, environment=environment)
            wait_until_ready(second)

            def is_back() -> bool:
                with client_of(second, "eye") as eye:
                    layer = eye.health().layers.get("lidar.north")
                return layer is not None and layer.obstacles == 1

            eventually(is_back)
            assert source.put(discs={"more": (3.0, 2.0, 0.5)}) > 0
            assert client.epoch != epoch
            # Taken off the list: nothing is served any more, on the same connection.
            allow(tmp_path / "keys", *(each for each in RIGHTS if each.name != "lidar"))
            eventually(lambda: second.log_lines("keys.list_read"))
            assert outcome(lambda: source.put(discs=POST)) == "forbidden"
    finally:
        for daemon in (first, second):
            if daemon is not None:
                daemon.end()


def _open_key(keys: Path) -> None:
    (keys / "daemon.key").chmod(0o640)


def _open_list(keys: Path) -> None:
    (keys / "allowed.toml").chmod(0o666)


def _no_list(keys: Path) -> None:
    (keys / "allowed.toml").unlink()


def _no_key(keys: Path) -> None:
    (keys / "daemon.key").unlink()


@pytest.mark.parametrize(
    ("damage", "why"),
    [
        (_open_key, "can be read by others"),
        (_open_list, "can be changed by others"),
        (_no_list, "cannot be read"),
        (_no_key, "cannot be read"),
    ],
)
def test_a_daemon_does_not_start_with_files_that_are_no_good(
    tmp_path: Path, damage: Any, why: str
) -> None:
    environment = keep_keys(tmp_path / "keys")
    damage(tmp_path / "keys")
    daemon = Daemon(tmp_path, environment=environment)
    try:
        assert daemon.process.wait(20.0) == 69
    finally:
        daemon.end()
    (line,) = daemon.log_lines("daemon.cannot_listen")
    assert why in line["why"]
