"""What else the blocking client does: questions, events, whose it is, how it ends."""

import os
import threading
from collections.abc import Callable, Iterator

import numpy as np
import pytest
from tests.protocol.fake_daemon import FakeDaemon, outcome, set_patience

import byway
from byway import frames, messages, obstacles
from byway.frames import Header
from byway.packed import pack

NewClient = Callable[..., byway.Client]


# -- questions -----------------------------------------------------------------------------------


def test_hello_tells_who_the_daemon_is(new_client: NewClient, daemon: FakeDaemon) -> None:
    client = new_client(client_id="yard-office")
    assert client.epoch == ""
    assert client.clock_offset_s is None
    welcome = client.hello()
    assert (welcome.state, welcome.vehicles, welcome.version) == ("ready", ["tug"], 1)
    assert client.epoch == daemon.epoch
    assert client.client_id == "yard-office"
    assert daemon.log[-1].message.client == "yard-office"
    assert client.clock_offset_s is not None
    assert client.clock_offset_s < -1.0e8  # the fake daemon lives in 2001


def test_a_client_has_a_name(new_client: NewClient, daemon: FakeDaemon) -> None:
    with pytest.raises(byway.BadValue, match="no name") as caught:
        new_client(client_id="yard office").hello()
    assert caught.value.facts == {"field": "client_id"}
    assert not daemon.got


def test_vehicles_and_health(client: byway.Client) -> None:
    assert client.vehicles() == [byway.Vehicle("tug", "car", {"r_m": 5.0})]
    assert client.health().planning == 0


def test_the_site_is_told_by_layer(client: byway.Client, daemon: FakeDaemon) -> None:
    kiln = np.array([(0.0, 0.0), (2.0, 0.0), (0.0, 1.0)])
    cells = np.array([[0, 1, 2]], np.uint8)
    columns, packed = pack(
        {
            "ids": obstacles.pack_ids(["kiln", "kiln", "post"]),
            "starts": np.array([0, 3, 6]),
            "vertices_m": np.concatenate([kiln, kiln + 9.0]),
            "discs_m": np.array([[5.0, 5.0, 0.5]]),
            "cells-1": cells,
        }
    )
    layers = [
        messages.LayerIs(layer="fixed", polygons=1, discs=0),
        messages.LayerIs(
            layer="lidar",
            unknown_blocks=True,
            polygons=1,
            discs=1,
            cells=[messages.CellsIs(column="cells-1", corner_m=(20.0, 0.0), cell_m=0.1)],
        ),
    ]
    told = messages.SiteIs(
        revision=4, limits_m=(0.0, 0.0, 9.0, 9.0), layers=layers, columns=columns
    )
    client.hello()
    header = Header("site_is", next_id(client), epoch=daemon.epoch)
    daemon.instead["site"] = frames.encode(header, told, packed)
    site = client.site(["fixed", "lidar"], box_m=(0, 0, 9, 9), cells=True)
    assert daemon.log[-1].message == messages.Site(
        layers=["fixed", "lidar"], box_m=(0.0, 0.0, 9.0, 9.0)
    )
    assert (site.revision, site.epoch, site.origin_m) == (4, daemon.epoch, (0.0, 0.0))
    assert site.limits_m == (0.0, 0.0, 9.0, 9.0)
    fixed, lidar = site.layers["fixed"], site.layers["lidar"]
    assert np.array_equal(fixed.polygons["kiln"], kiln)
    assert (fixed.discs, fixed.cells, fixed.unknown_blocks) == ({}, (), False)
    assert np.array_equal(lidar.polygons["kiln"], kiln + 9.0)
    assert lidar.discs == {"post": (5.0, 5.0, 0.5)}
    assert lidar.unknown_blocks
    assert lidar.cells[0].corner_m == (20.0, 0.0)
    assert lidar.cells[0].cell_m == 0.1
    assert np.array_equal(lidar.cells[0].cells, cells)


def test_an_empty_site(client: byway.Client) -> None:
    assert client.site().layers == {}


@pytest.mark.parametrize(
    ("fault", "why"),
    [
        ({"revision": 1, "layers": [], "columns": {}}, "columns must be"),
        (
            {"revision": 1, "layers": [messages.LayerIs(layer="a", polygons=1, discs=0)]},
            "starts",
        ),
        ({"revision": 1, "layers": [messages.LayerIs(layer="a", polygons=0, discs=1)]}, "discs_m"),
        ("ids", "0 ids for 1"),
        ("noted", "where a site_is was due"),
    ],
)
def test_a_site_that_contradicts_itself_is_a_bad_reply(
    client: byway.Client, daemon: FakeDaemon, fault: object, why: str
) -> None:
    count = int(fault == "ids")
    columns, packed = pack(
        {
            "ids": obstacles.pack_ids([]),
            "starts": np.zeros(1, np.int64),
            "vertices_m": np.empty((0, 2)),
            "discs_m": np.zeros((count, 3)),
        }
    )
    client.hello()
    told: messages.Message
    if fault == "noted":
        told, packed = messages.Noted(replans=[]), b""
    elif isinstance(fault, dict):
        told = messages.SiteIs(**{"columns": columns, **fault})
    else:
        layers = [messages.LayerIs(layer="a", polygons=0, discs=1)]
        told = messages.SiteIs(revision=1, layers=layers, columns=columns)
    header = Header(told.kind, next_id(client), epoch=daemon.epoch)
    daemon.instead["site"] = frames.encode(header, told, packed)
    with pytest.raises(byway.BadReply, match=why):
        client.site()


def next_id(client: byway.Client) -> str:
    """The id that the client's next request will have."""
    return f"{client._contact._token}-{client._contact._serial + 1}"


# -- events --------------------------------------------------------------------------------------


def test_listening_gives_events_with_what_was_missed(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    events = client.listen()
    body, packed = outcome(9.0)
    better = messages.BetterMessage(unit="tug-1", revision=1, elapsed_s=0.1, outcome=body)

    def publish() -> None:
        daemon.publish("health", daemon.health())
        daemon.publish("better.tug-1", better, packed, id="r-1")
        daemon.publish("health", daemon.health(), skip=2)

    first = first_event(events, daemon, "health", publish)
    found = [first, next(events), next(events)]
    assert [event.topic for event in found] == ["health", "better.tug-1", "health"]
    assert [event.number for event in found] == [1, 1, 4]
    assert [event.missed for event in found] == [0, 0, 2]
    assert isinstance(found[0].content, messages.HealthIs)
    assert isinstance(found[1].content, byway.Better)
    assert found[1].content.cost == 9.0
    assert found[1].epoch == daemon.epoch
    events.close()


def first_event(
    events: Iterator[byway.Event], daemon: FakeDaemon, topic: str, publish: Callable[[], None]
) -> byway.Event:
    """The first event of a fresh subscription: published once the daemon knows of it."""

    def wait_and_publish() -> None:
        daemon.wait_for_subscription(topic)
        daemon.do(publish)

    publisher = threading.Thread(target=wait_and_publish)
    publisher.start()
    try:
        return next(events)
    finally:
        publisher.join()


def test_repeats_and_unknown_events_are_passed_over(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    health = daemon.health()

    def publish() -> None:
        first = frames.encode(Header("health_is", number=1, epoch=daemon.epoch), health)
        second = frames.encode(Header("health_is", number=2, epoch=daemon.epoch), health)
        alert = frames.encode(Header("alert", number=1, epoch=daemon.epoch), health)
        for parts in (first, first, alert, [b"?"], second, second, first, second):
            daemon.send_event(b"health", parts)
        fresh = frames.encode(Header("health_is", number=1, epoch="epoch-9"), health)
        daemon.send_event(b"health", fresh)

    events = client.listen(["health"])
    found = [
        first_event(events, daemon, "health", publish),
        next(events),
        next(events),
        next(events),
    ]
    assert [event.number for event in found] == [1, 2, 1, 2]
    assert [event.missed for event in found] == [0, 0, 0, 0]
    events.close()


def test_listening_ends_in_time(client: byway.Client) -> None:
    assert list(client.listen(["better.nobody"], timeout_s=0.02)) == []


def test_listening_survives_a_restart_and_tells_a_loss(
    new_client: NewClient, daemon: FakeDaemon
) -> None:
    client = new_client(reconnect_s=5.0)
    events = client.listen(["health"])
    epochs = []
    for _ in range(2):
        publish = lambda: daemon.publish("health", daemon.health())
        epochs.append(first_event(events, daemon, "health", publish).epoch)
        daemon.stop()
        if len(epochs) == 1:
            daemon.start()
    assert epochs == ["epoch-1", "epoch-2"]
    set_patience(client, reconnect_s=0.15)
    with pytest.raises(byway.DaemonLost, match="for events"):
        next(events)


def test_an_event_that_is_no_news_is_a_bad_reply(client: byway.Client, daemon: FakeDaemon) -> None:
    """Kinds that are unknown are passed over; this one is known and cannot be."""
    events = client.listen(["better"])
    broken = messages.BetterMessage(unit="u", revision=1, elapsed_s=0.1, outcome=b"\x80")
    with pytest.raises(byway.BadReply, match="outcome cannot be read"):
        first_event(events, daemon, "better", lambda: daemon.publish("better.u", broken))


def test_a_client_closed_while_listening(client: byway.Client, daemon: FakeDaemon) -> None:
    events = client.listen(["health"])
    first_event(events, daemon, "health", lambda: daemon.publish("health", daemon.health()))
    client.close()
    with pytest.raises(RuntimeError, match="closed"):
        next(events)


# -- whose it is, where it leads -----------------------------------------------------------------


def test_a_second_thread_is_refused(client: byway.Client) -> None:
    client.hello()
    caught: list[BaseException] = []

    def use() -> None:
        for call in (client.hello, client.close, lambda: client.put("stacks")):
            try:
                call()
            except RuntimeError as fault:
                caught.append(fault)

    thread = threading.Thread(target=use)
    thread.start()
    thread.join()
    assert [("belongs to the thread" in str(fault)) for fault in caught] == [True] * 3
    assert client.hello().state == "ready"


def test_a_forked_child_is_refused(client: byway.Client, monkeypatch: pytest.MonkeyPatch) -> None:
    client.hello()
    parent = os.getpid()
    monkeypatch.setattr(os, "getpid", lambda: parent + 1)
    with pytest.raises(RuntimeError, match="in the process"):
        client.hello()
    monkeypatch.undo()


def test_a_closed_client_is_refused(new_client: NewClient, daemon: FakeDaemon) -> None:
    with new_client() as client:
        client.put("stacks", discs={"pile": (1, 1, 1)})
        client.replan("tug", (0, 0, 0), (5, 0, 0), 0.05, on_better=lambda _: None)
    with pytest.raises(RuntimeError, match="closed"):
        client.hello()
    client.close()


def test_a_client_that_never_spoke_can_be_closed(new_client: NewClient) -> None:
    new_client().close()


@pytest.mark.parametrize("endpoint", ["nowhere", "tcp://127.0.0.1", "smoke://signals"])
def test_what_is_no_endpoint_is_told(new_client: NewClient, endpoint: str) -> None:
    with pytest.raises(byway.BadValue, match="no endpoint"):
        new_client(endpoint=endpoint).hello()


def test_the_whole_goes_over_tcp_as_well(new_client: NewClient) -> None:
    """The host that the client came to counts, where the daemon names none in particular."""
    over_tcp = FakeDaemon(None)
    try:
        for name, (endpoint,) in over_tcp.offered.items():
            over_tcp.offered[name] = [endpoint.replace("127.0.0.1", "0.0.0.0")]
        over_tcp.costs = [5.0]
        client = new_client(endpoint=over_tcp.endpoints["requests"])
        assert client.replace_layer("fixed", discs={"post": (1, 2, 0.5)}) == 1
        over_tcp.holds = True
        heard: list[float] = []

        def hear(better: byway.Better) -> None:
            heard.append(better.cost)
            over_tcp.release()

        ask = client.start_replan("tug", (0, 0, 0), (5, 0, 0), 1.0, on_better=hear)
        assert client.health().planning == 1
        over_tcp.better(9.0)
        assert ask.wait().cost == 5.0
        assert heard == [9.0]
        client.close()
    finally:
        over_tcp.stop()


def test_a_daemon_without_a_way_to_its_updates_is_told(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    daemon.offered["updates"] = ["tcp://127.0.0.1:7462"]
    with pytest.raises(byway.BadReply, match="no ipc endpoint for updates"):
        client.claim("stacks")


def test_warnings_of_unclosed_sockets_do_not_come(new_client: NewClient) -> None:
    """Everything that was opened is closed: contexts that wait for sockets would hang here."""
    for _ in range(3):
        client = new_client()
        list(client.listen(timeout_s=0.0))
        client.close()
        assert client._contact._context is not None
        assert client._contact._context.closed
