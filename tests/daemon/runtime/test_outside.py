"""What peers send becomes events, replies reach them or are counted, the last event is kept."""

import pytest
import zmq

from byway import frames, messages
from byway.frames import Header
from bywayd.core import effects, events
from bywayd.runtime.outside import Outside, messages_per_turn, replayed_max


@pytest.fixture
def outside(tmp_path):
    endpoints = {
        name: (f"ipc://{tmp_path}/{name}", "tcp://127.0.0.1:0")
        for name in ("requests", "updates", "events")
    }
    opened = Outside(endpoints, epoch="e1")
    yield opened
    opened.close()
    assert list(tmp_path.iterdir()) == []


@pytest.fixture
def connect(outside):
    """Connect a client socket to one of the three; all are closed at the end."""
    context = zmq.Context()
    made = []

    def connecting(kind, name, way=0):
        sock = context.socket(kind)
        sock.setsockopt(zmq.LINGER, 0)
        sock.setsockopt(zmq.RCVTIMEO, 5000)
        sock.connect(outside.endpoints[name][way])
        made.append(sock)
        return sock

    yield connecting
    for sock in made:
        sock.close()
    context.term()


def _received(outside, name, count=1):
    got: list[events.Event] = []
    while len(got) < count:
        assert outside.sockets[name].poll(5000)
        outside.receive(name, got.append)
    return got


HELLO = frames.encode(Header("hello", "r1"), messages.Hello(versions=[1], client="c"))
DROP = frames.encode(
    Header("drop", source="s", number=3, epoch="e1"), messages.Drop(layer="stacks", ids=["a"])
)


@pytest.mark.parametrize("way", [0, 1])
@pytest.mark.parametrize(("name", "sent"), [("requests", HELLO), ("updates", DROP)])
def test_a_message_becomes_an_event_and_its_reply_finds_the_way_back(
    outside, connect, name, sent, way
):
    client = connect(zmq.DEALER, name, way)
    client.send_multipart(sent)
    (event,) = _received(outside, name)
    assert isinstance(event, events.Received)
    assert event.peer.channel == name
    assert event.came.header.kind == ("hello" if name == "requests" else "drop")
    reply = effects.Reply(event.peer, Header("noted", "r1"), messages.Noted(replans=["x"]))
    assert outside.reply(reply)
    came = frames.decode(client.recv_multipart(), frames.REPLIES)
    assert came.message == messages.Noted(replans=["x"])


@pytest.mark.parametrize(
    "garbage",
    [[b"", b""], [b"\xff" * 40, b"x"], [b"one frame"], [HELLO[0], b"\xc1"], [*HELLO, b"", b""]],
)
def test_garbage_becomes_an_event_too(outside, connect, garbage):
    connect(zmq.DEALER, "requests").send_multipart(garbage)
    (event,) = _received(outside, "requests")
    assert isinstance(event, events.Unreadable)
    assert event.fault.code == "bad_message"


def test_a_message_for_the_other_socket_is_not_understood_here(outside, connect):
    connect(zmq.DEALER, "requests").send_multipart(DROP)
    (event,) = _received(outside, "requests")
    assert isinstance(event, events.Unreadable)


def test_a_flood_is_taken_in_by_turns(outside, connect):
    client = connect(zmq.DEALER, "requests")
    for _ in range(3 * messages_per_turn):
        client.send_multipart(HELLO)
    first = _received(outside, "requests")
    assert len(first) <= messages_per_turn
    _received(outside, "requests", 3 * messages_per_turn - len(first))


def test_a_reply_to_somebody_who_left_is_counted(outside):
    gone = events.Peer("requests", b"gone")
    assert not outside.reply(effects.Reply(gone, Header("noted"), messages.Noted(replans=[])))
    assert outside.undelivered == 1


def test_a_peer_that_does_not_read_loses_replies_and_stops_nobody(outside, connect):
    client = connect(zmq.DEALER, "requests")
    client.send_multipart(HELLO)
    (event,) = _received(outside, "requests")
    assert isinstance(event, events.Received)
    noted = messages.Noted(replans=["x" * 60] * 900)
    reply = effects.Reply(event.peer, Header("noted", "r1"), noted)
    handed = [outside.reply(reply) for _ in range(3000)]
    assert not all(handed)
    assert outside.undelivered == handed.count(False)


def _publish(outside, topic, number):
    header = Header("listening", number=number, epoch="e1")
    outside.publish(effects.Publish(topic, header, messages.Listening(topic=topic)))


def _subscribe(outside, connect, prefix):
    client = connect(zmq.SUB, "events")
    client.setsockopt(zmq.SUBSCRIBE, prefix)
    assert outside.sockets["events"].poll(5000)
    outside.receive_subscriptions()
    return client


def _heard(client):
    topic, *rest = client.recv_multipart()
    return topic, frames.decode(rest, frames.EVENTS)


def test_a_subscriber_is_told_that_it_is_heard_and_what_was_said_last(outside, connect):
    _publish(outside, "better.tug-1", 1)
    _publish(outside, "better.tug-2", 1)
    _publish(outside, "health", 8)
    _publish(outside, "better.tug-1", 2)
    client = _subscribe(outside, connect, b"better.")
    topic, came = _heard(client)
    assert (topic, came.header.kind, came.message.topic) == (b"better.", "listening", "better.")
    assert came.header.epoch == "e1"
    # Each with the number it had, the oldest first.
    assert [(t, c.header.number) for t, c in (_heard(client), _heard(client))] == [
        (b"better.tug-2", 1),
        (b"better.tug-1", 2),
    ]
    _publish(outside, "better.tug-2", 2)
    topic, came = _heard(client)
    assert (topic, came.header.number) == (b"better.tug-2", 2)


def test_a_subscription_to_everything_brings_no_more_than_a_queue_holds(outside, connect):
    for number in range(2 * replayed_max):
        _publish(outside, f"better.tug-{number}", 1)
    client = _subscribe(outside, connect, b"")
    topics = [_heard(client)[0] for _ in range(replayed_max + 1)]
    assert topics[0] == b""
    assert topics[-1] == f"better.tug-{2 * replayed_max - 1}".encode()
