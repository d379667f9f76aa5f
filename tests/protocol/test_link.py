"""Where sockets lead, what options they have, and how the loss of a connection is known."""

import socket
import time
from collections.abc import Iterator
from pathlib import Path
from tempfile import TemporaryDirectory

import pytest
import zmq

import byway
from byway import frames, messages
from byway.ear import Ear
from byway.endpoints import sibling
from byway.frames import Header
from byway.link import DEALER_OPTIONS, OPTIONS_OF_ALL, SUB_OPTIONS, Link, wait


@pytest.fixture
def context() -> Iterator[zmq.Context]:
    context = zmq.Context()
    yield context
    context.term()


@pytest.mark.parametrize(
    ("came_to", "offered", "wanted"),
    [
        ("ipc:///run/a/requests", ["tcp://127.0.0.1:7462", "ipc:///run/b"], "ipc:///run/b"),
        ("tcp://127.0.0.1:7461", ["ipc:///run/b", "tcp://127.0.0.1:9"], "tcp://127.0.0.1:9"),
        ("tcp://yard:7461", ["tcp://127.0.0.1:7462"], "tcp://yard:7462"),
        ("tcp://[::1]:7461", ["tcp://0.0.0.0:7462"], "tcp://[::1]:7462"),
        ("tcp://yard:7461", ["tcp://[::]:7462"], "tcp://yard:7462"),
        ("tcp://yard:7461", ["tcp://localhost:7462"], "tcp://yard:7462"),
        # What the daemon was told to tell holds.
        ("tcp://yard:7461", ["tcp://192.0.2.1:7462"], "tcp://192.0.2.1:7462"),
        ("tcp://yard:7461", ["tcp://events.yard:17462"], "tcp://events.yard:17462"),
    ],
)
def test_other_sockets_are_where_the_first_was(
    came_to: str, offered: list[str], wanted: str
) -> None:
    assert sibling(came_to, "updates", offered) == wanted


def test_no_way_to_a_socket_is_told() -> None:
    with pytest.raises(byway.BadReply, match="no tcp endpoint for events") as caught:
        sibling("tcp://127.0.0.1:7461", "events", ["ipc:///run/b"])
    assert caught.value.facts == {"offered": ["ipc:///run/b"]}


@pytest.mark.parametrize("topics", [None, ["health"]])
def test_sockets_have_their_options(context: zmq.Context, topics: list[str] | None) -> None:
    link = Link(context, "ipc:///tmp/nobody-listens-here", topics)
    options = {**OPTIONS_OF_ALL, **(DEALER_OPTIONS if topics is None else SUB_OPTIONS)}
    assert {option: link._socket.getsockopt(option) for option in options} == options
    link.close()


def test_nothing_is_queued_for_nobody(context: zmq.Context) -> None:
    link = Link(context, "ipc:///tmp/nobody-listens-here")
    assert not link.send([b"a"])
    assert link.receive() is None
    assert not link.is_connected
    link.close()


def test_a_dealer_does_not_subscribe(context: zmq.Context) -> None:
    link = Link(context, "ipc:///tmp/nobody-listens-here")
    link.subscribe("health")
    link.close()


def test_a_connection_that_never_spoke_is_not_a_lost_one(context: zmq.Context) -> None:
    """Something else listens there and hangs up: it is tried again, and nothing was lost."""
    with socket.create_server(("127.0.0.1", 0)) as server:
        link = Link(context, f"tcp://127.0.0.1:{server.getsockname()[1]}")
        for _ in range(2):
            server.accept()[0].close()
            wait([(link, False)], time.monotonic() + 1.0, time.monotonic)
            link.look()
            assert not link.is_connected
            assert not link.is_lost
        link.close()


def test_a_lost_connection_is_known_at_once(context: zmq.Context) -> None:
    with TemporaryDirectory(prefix="bw") as folder:
        endpoint = f"ipc://{Path(folder) / 'x'}"
        router = context.socket(zmq.ROUTER)
        router.bind(endpoint)
        link = Link(context, endpoint)
        assert _until(link, lambda: link.is_connected)
        router.close(0)
        assert _until(link, lambda: link.is_lost)
        link.reopen()
        assert not link.is_lost
        link.close()


def _until(link: Link, holds: "object") -> bool:
    end_s = time.monotonic() + 5.0
    while time.monotonic() < end_s:
        wait([(link, False)], end_s, time.monotonic)
        link.look()
        if holds():  # type: ignore[operator]
            return True
    return False


def test_streams_that_were_forgotten_begin_again(
    context: zmq.Context, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("byway.ear._TOPICS_MAX", 1)
    ear = Ear(Link(context, "ipc:///tmp/nobody-listens-here", [""]))
    told = messages.BetterMessage(unit="u", revision=1, elapsed_s=0.0, outcome=b"\x80")
    queue = [
        [topic, *frames.encode(Header("better", "a", number=number, epoch="e"), told)]
        for topic, number in (
            (b"better.a", 5),
            (b"better.a", 5),
            (b"better.b", 9),
            (b"better.a", 5),
        )
    ]
    monkeypatch.setattr(ear.link, "receive", lambda: queue.pop(0) if queue else None)
    heard = []
    while (each := ear.next()) is not None:
        heard.append((each.topic, each.missed))
    assert heard == [("better.a", 0), ("better.b", 0), ("better.a", 0)]
    ear.link.close()
