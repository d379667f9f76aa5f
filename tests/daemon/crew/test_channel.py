"""Messages arrive whole, in order, or the channel says why not."""

import select
import socket

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bywayd.crew import channel as channel_module
from bywayd.crew.channel import Channel, ChannelBroken, ChannelClosed, ChannelFull, channel_pair


@pytest.fixture
def ends():
    left, right = channel_pair()
    pair = Channel(left), Channel(right)
    yield pair
    for end in pair:
        end.close()


def _take_all(end: Channel, count: int) -> list[dict]:
    messages: list[dict] = []
    while len(messages) < count:
        messages += end.wait_take(1.0)
    return messages


def _put_for_ever(end: Channel, message: dict) -> None:
    for _ in range(1000):
        end.put(message)


def test_messages_arrive_whole_and_in_order(ends):
    left, right = ends
    sent = [{"kind": "job", "number": n, "body": bytes(n)} for n in range(40)]
    for message in sent:
        left.put(message)
    assert _take_all(right, 40) == sent
    assert right.take() == []


def test_one_take_hands_out_a_bounded_number_and_says_that_more_is_there(ends):
    left, right = ends
    for number in range(5):
        left.put({"n": number})
    assert [m["n"] for m in right.take(2)] == [0, 1]
    assert right.has_message
    assert [m["n"] for m in right.take(2)] == [2, 3]
    assert [m["n"] for m in right.take(2)] == [4]
    assert not right.has_message


def test_a_message_larger_than_the_socket_holds_goes_in_pieces(ends):
    left, right = ends
    body = bytes(range(256)) * 12_000
    left.put({"body": body})
    assert left.wants_to_send
    messages: list[dict] = []
    while not messages:
        left.flush()
        messages = right.take()
    assert messages == [{"body": body}]
    assert not left.wants_to_send
    assert left.unsent_bytes == 0


def test_what_nobody_reads_is_bounded():
    left, right = channel_pair()
    sender, receiver = Channel(left, unsent_bytes_max=1_000_000), Channel(right)
    piece = {"body": bytes(100_000)}
    for _ in range(9):  # the socket itself takes some, never less than nothing
        sender.put(piece)
    with pytest.raises(ChannelFull):
        _put_for_ever(sender, piece)
    kept_bytes = sender.unsent_bytes
    assert kept_bytes <= 1_000_000
    with pytest.raises(ChannelFull):  # a refused message leaves nothing behind
        sender.put({"body": bytes(1_000_000)})
    assert sender.unsent_bytes == kept_bytes
    sender.close()
    receiver.close()


def test_messages_before_the_end_are_handed_out_first(ends):
    left, right = ends
    left.put({"last": True})
    left.close()
    assert right.wait_take(1.0) == [{"last": True}]
    with pytest.raises(ChannelClosed):
        right.take()


def test_a_peer_that_is_gone_is_noticed_when_sending(ends):
    left, right = ends
    right.close()
    with pytest.raises(ChannelClosed):
        left.put({"body": b"x"})


@pytest.mark.parametrize(
    "wild",
    [
        (channel_module.message_bytes_max + 1).to_bytes(4, "little"),
        b"\x01\x00\x00\x00\xc1",  # a byte that msgpack never uses
        b"\x01\x00\x00\x00\x07",  # a whole number, not a map
        b"\x02\x00\x00\x00\x80\x80",  # two maps where one was announced
    ],
)
def test_wild_bytes_are_told_apart_from_a_message(wild):
    left, right = channel_pair()
    receiver = Channel(right)
    left.sendall(wild)
    with pytest.raises(ChannelBroken):
        receiver.take()
    left.close()
    receiver.close()


def test_a_message_over_the_limit_is_refused_before_it_is_sent(ends, monkeypatch):
    left, right = ends
    monkeypatch.setattr(channel_module, "message_bytes_max", 1000)
    with pytest.raises(ValueError, match="1000"):
        left.put({"body": bytes(1001)})
    assert right.take() == []


@settings(max_examples=30, deadline=None)
@given(cuts=st.lists(st.integers(1, 40), max_size=30))
def test_wherever_the_stream_is_cut_the_same_messages_come_out(cuts):
    left, right = channel_pair()
    capture_from, capture_to = channel_pair()
    sent = [{"n": n, "text": "y" * n} for n in range(12)]
    writer = Channel(left)
    for message in sent:
        writer.put(message)
    stream = right.recv(100_000)
    reader = Channel(capture_to)
    got: list[dict] = []
    for size in [*cuts, len(stream)]:
        if stream:
            capture_from.sendall(stream[:size])
            stream = stream[size:]
            got += reader.take()
    while stream_left := reader.take():
        got += stream_left
    assert got == sent
    for end in (left, right, capture_from, capture_to):
        end.close()


def test_waiting_puts_returns_once_the_other_end_has_room():
    left, right = channel_pair()
    left.setsockopt(socket.SOL_SOCKET, socket.SO_SNDBUF, 4096)
    sender = Channel(left)
    sender.put({"body": bytes(300_000)})
    assert select.select([], [left], [], 0)[1] == []
    received = 0
    while sender.wants_to_send:
        received += len(right.recv(65536))
        sender.flush()
    assert received > 200_000
    sender.close()
    right.close()
