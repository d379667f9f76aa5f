"""A fake daemon, and clients that are closed whatever happens."""

from collections.abc import Callable, Iterator
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import pytest
from tests.protocol.fake_daemon import FakeDaemon

import byway


@pytest.fixture
def daemon() -> Iterator[FakeDaemon]:
    # Not tmp_path: the path of a Unix socket has at most 107 bytes.
    with TemporaryDirectory(prefix="bw") as folder:
        fake = FakeDaemon(Path(folder))
        yield fake
        fake.stop()


@pytest.fixture
def new_client(daemon: FakeDaemon) -> Iterator[Callable[..., byway.Client]]:
    """Makes clients of the fake daemon with little patience."""
    made: list[byway.Client] = []

    def make(**settings: Any) -> byway.Client:
        patience = {"timeout_s": 5.0, "reconnect_s": 1.0, "repeat_s": 1.0}
        endpoint = settings.pop("endpoint", daemon.endpoints["requests"])
        made.append(byway.Client(endpoint, **{**patience, **settings}))
        return made[-1]

    yield make
    for client in made:
        client.close()


@pytest.fixture
def client(new_client: Callable[..., byway.Client]) -> byway.Client:
    return new_client()
