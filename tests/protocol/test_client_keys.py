"""Clients with keys: let in, turned away with clear words, let in later, never fooled."""

import asyncio
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import pytest
import zmq
from tests.protocol.fake_daemon import FakeDaemon
from zmq.utils import z85

import byway
from byway import aio, frames, messages
from byway.frames import Header
from byway.keys import Keys, new_keys, save_keys
from byway.source import Source

DAEMON = new_keys("daemon")
EYE = new_keys("eye", DAEMON.public)
STRANGER = new_keys("stranger", DAEMON.public)
DECEIVED = new_keys("deceived", new_keys("impostor").public)

NewClient = Callable[..., byway.Client]


class KeyedDaemon(FakeDaemon):
    """Lets those in whose keys are in `allowed`."""

    def __init__(self, folder: Path | None) -> None:
        self.allowed = {EYE.public}
        self.asked = 0
        super().__init__(folder)

    def start(self) -> None:
        self._gate: threading.Thread | None = None
        super().start()

    def _socket(self, kind: int) -> Any:
        if self._gate is None:
            zap = self._context.socket(zmq.REP)
            zap.bind("inproc://zeromq.zap.01")
            self._gate = threading.Thread(target=self._decide, args=(zap,), name="gate")
            self._gate.start()
        sock = super()._socket(kind)
        sock.curve_secretkey = DAEMON.secret.encode()
        sock.curve_server = True
        sock.zap_domain = b"byway"
        sock.setsockopt(zmq.ZAP_ENFORCE_DOMAIN, 1)
        return sock

    def _decide(self, zap: Any) -> None:
        while True:
            try:
                asked = zap.recv_multipart()
            except zmq.ContextTerminated:
                zap.close(0)
                return
            self.asked += 1
            is_good = z85.encode(asked[6]).decode() in self.allowed
            status = b"200" if is_good else b"400"
            zap.send_multipart([b"1.0", asked[1], status, b"", b"", b""])


@pytest.fixture
def daemon() -> Iterator[KeyedDaemon]:
    with TemporaryDirectory(prefix="bw") as folder:
        fake = KeyedDaemon(Path(folder))
        yield fake
        fake.stop()


def replanned(daemon: KeyedDaemon, client: byway.Client) -> list[float]:
    """Return the costs of the better routes that are heard before the answer."""

    def plan() -> None:
        daemon.better(7.0)
        time.sleep(0.1)
        daemon.release()

    daemon.holds = True
    heard: list[float] = []
    planning = threading.Thread(target=plan)
    planning.start()
    answer = client.replan(
        *("tug", (0, 0, 0), (5, 0, 0), 0.5), on_better=lambda better: heard.append(better.cost)
    )
    planning.join()
    assert answer.kind == "route"
    return heard


def test_all_sockets_are_reached_with_a_key_file(
    daemon: KeyedDaemon, new_client: NewClient, tmp_path: Path
) -> None:
    save_keys(EYE, tmp_path / "eye.key")
    client = new_client(keys=tmp_path / "eye.key")
    assert client.put("fixed", discs={"post": (1, 2, 0.5)}) > 0
    assert replanned(daemon, client) == [7.0]


def test_a_client_of_asyncio_takes_keys_too(daemon: KeyedDaemon) -> None:
    async def ask() -> str:
        async with aio.AsyncClient(daemon.endpoints["requests"], keys=EYE) as client:
            return (await client.hello()).state

    assert asyncio.run(ask()) == "ready"


@pytest.mark.parametrize(
    ("keys", "words"),
    [(STRANGER, "does not let this key in"), (None, "lets nobody in without keys")],
)
def test_who_is_turned_away_hears_so_at_once(
    new_client: NewClient, keys: Keys | None, words: str
) -> None:
    client = new_client(keys=keys, reconnect_s=5.0)
    began_s = time.monotonic()
    for call in (client.hello, lambda: client.put("fixed", discs={"a": (1, 2, 0.5)})):
        with pytest.raises(byway.Forbidden, match=words) as caught:
            call()
        assert "endpoint" in caught.value.facts
    assert time.monotonic() - began_s < 4.0


def test_a_client_that_expects_keys_does_not_talk_to_a_daemon_without() -> None:
    with TemporaryDirectory(prefix="bw") as folder:
        open_daemon = FakeDaemon(Path(folder))
        try:
            endpoint = open_daemon.endpoints["requests"]
            with (
                byway.Client(endpoint, keys=EYE) as client,
                pytest.raises(byway.Forbidden, match="uses no keys"),
            ):
                client.hello()
            assert not open_daemon.got
        finally:
            open_daemon.stop()


def test_a_client_is_not_taken_in_by_another_daemon(
    daemon: KeyedDaemon, new_client: NewClient
) -> None:
    client = new_client(keys=DECEIVED, reconnect_s=0.2)
    with pytest.raises(byway.DaemonLost, match="is its key the one in the key file"):
        client.hello()
    with pytest.raises(byway.DaemonLost):
        next(iter(client.listen(timeout_s=2.0)))
    assert not daemon.got


def test_who_is_put_on_the_list_later_gets_in_by_the_same_client(
    daemon: KeyedDaemon, new_client: NewClient
) -> None:
    client = new_client(keys=STRANGER)
    with pytest.raises(byway.Forbidden):
        client.hello()
    daemon.allowed.add(STRANGER.public)
    assert client.hello().state == "ready"


def test_a_client_that_is_turned_away_does_not_knock_without_a_pause(
    daemon: KeyedDaemon, new_client: NewClient
) -> None:
    client = new_client(keys=STRANGER)
    end_s = time.monotonic() + 0.45
    while time.monotonic() < end_s:
        with pytest.raises(byway.Forbidden):
            client.hello()
    assert daemon.asked <= 3


def test_a_layer_is_looked_after_again_when_its_key_is_let_in_again(
    daemon: KeyedDaemon, new_client: NewClient
) -> None:
    client = new_client(keys=EYE)
    with client.source("fixed", lease_s=5.0) as source:
        source.put(discs={"post": (1, 2, 0.5)})
        daemon.allowed.clear()
        daemon.restart()
        time.sleep(0.8)  # the tender meets a closed door meanwhile
        assert not daemon.layers
        daemon.allowed.add(EYE.public)
        end_s = time.monotonic() + 5.0
        while "fixed" not in daemon.layers:
            assert time.monotonic() < end_s
            time.sleep(0.01)


def test_listening_is_refused_in_the_same_words(daemon: KeyedDaemon, new_client: NewClient) -> None:
    client = new_client(keys=EYE)
    client.hello()
    daemon.allowed.clear()
    with pytest.raises(byway.Forbidden, match="does not let this key in"):
        next(iter(client.listen(["health"], timeout_s=5.0)))


def test_better_routes_are_heard_again_when_the_key_is_let_in_again(
    daemon: KeyedDaemon, new_client: NewClient
) -> None:
    client = new_client(keys=EYE)
    client.hello()
    daemon.allowed.clear()
    # The events socket is turned away; the answer comes by the one that is there.
    assert replanned(daemon, client) == []
    daemon.allowed.add(EYE.public)
    assert replanned(daemon, client) == [7.0]


def forbidden(number: int = 0) -> messages.ErrorMessage:
    facts = {"role": "watcher", "number": number}
    return messages.ErrorMessage(code="forbidden", text="eye is a watcher", facts=facts)


def test_a_change_that_a_role_does_not_allow_is_raised_and_forgotten(
    daemon: KeyedDaemon, new_client: NewClient
) -> None:
    """The daemon does not count it, so there is no acknowledgement that would pass it."""
    client = new_client(keys=EYE)
    client.claim("fixed")
    for _ in range(2):
        daemon.refuses["put"] = forbidden()
        with pytest.raises(byway.Forbidden, match="eye is a watcher"):
            client.put("fixed", discs={"a": (1, 2, 0.5)})
    assert not client._contact.source.line


def test_a_forbidden_change_that_nobody_waits_for_is_told_by_the_next_call(
    daemon: KeyedDaemon, new_client: NewClient
) -> None:
    client = new_client(keys=EYE)
    with client.source("fixed") as source:
        daemon.refuses["put"] = forbidden()
        source.put(discs={"a": (1, 2, 0.5)}, wait=False)
        with pytest.raises(byway.Forbidden):
            source.settle()


def test_one_forbidden_change_of_several_is_forgotten_alone() -> None:
    source = Source("s")
    sent = [source.add(messages.Claim(layer=layer), b"", 0.0) for layer in "abc"]
    error = byway.Forbidden("no")
    assert source.turned_away("2", error)
    assert [each.number for each in source.line] == [1, 2, 3]
    assert (sent[1].error, sent[1].is_decided) == (error, True)
    assert source.turned_away("1", error)
    assert [each.number for each in source.line] == [3]


def test_a_forbidden_that_is_about_no_change_is_raised(
    daemon: KeyedDaemon, new_client: NewClient
) -> None:
    client = new_client(keys=EYE)
    client.claim("fixed")
    assert not client._contact.source.turned_away("17", byway.Forbidden("no"))
    header = Header("error", "17", epoch=daemon.epoch)
    daemon.instead["put"] = frames.encode(header, forbidden())
    with pytest.raises(byway.Forbidden):
        client.put("fixed", discs={"a": (1, 2, 0.5)})
    # The change is not decided by it, and goes with the next one.
    assert client.put("fixed", discs={"b": (3, 2, 0.5)}) > 0
    assert set(daemon.layers["fixed"]["obstacles"]) == {"a", "b"}
