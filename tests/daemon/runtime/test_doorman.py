"""Too many inside: the entrances are shut, those inside are served, the rest get in later."""

import time

import pytest
import zmq

from bywayd.runtime.doorman import Doorman
from bywayd.runtime.entrances import bind, leave_all
from bywayd.runtime.sockets import open_socket


@pytest.fixture
def context():
    made = zmq.Context()
    yield made
    made.term()


@pytest.fixture(params=["ipc", "tcp"])
def door(request, context, tmp_path):
    sock = open_socket(context, "requests")
    ways = {"ipc": f"ipc://{tmp_path}/requests", "tcp": "tcp://127.0.0.1:0"}
    entrance = bind(sock, ways[request.param])
    doorman = Doorman(context, [sock], [entrance], peers_max=4)
    yield sock, entrance.endpoint, doorman
    doorman.close()
    sock.close()
    leave_all([entrance])


@pytest.fixture
def arrive(context, door):
    """Connect a client; all are gone at the end."""
    clients = []

    def arriving():
        client = context.socket(zmq.DEALER)
        client.setsockopt(zmq.RECONNECT_IVL, 10)
        client.setsockopt(zmq.CONNECT_TIMEOUT, 100)
        client.setsockopt(zmq.LINGER, 0)
        client.connect(door[1])
        clients.append(client)
        return client

    yield arriving
    for client in clients:
        client.close()


def _serve_until(door, holds, within_s=5.0):
    sock, _, doorman = door
    end_s = time.monotonic() + within_s
    while not holds():
        assert time.monotonic() < end_s, (doorman.peers, doorman.is_open)
        doorman.look()
        while sock.poll(2):
            sock.send_multipart(sock.recv_multipart())


def _answered(clients):
    return sum(1 for client in clients if client.poll(0))


def test_comings_and_goings_are_counted(arrive, door):
    clients = [arrive() for _ in range(3)]
    _serve_until(door, lambda: door[2].peers == 3)
    clients[0].close()
    _serve_until(door, lambda: door[2].peers == 2)
    assert door[2].is_open


def test_too_many_shut_the_entrances_and_leaving_opens_them(arrive, door):
    doorman = door[2]
    inside = [arrive() for _ in range(4)]
    _serve_until(door, lambda: not doorman.is_open)
    assert doorman.shut_count == 1
    outside = arrive()
    for client in [*inside, outside]:
        client.send(b"anybody there?")
    _serve_until(door, lambda: _answered(inside) == 4)
    assert not outside.poll(50)
    inside[0].close()
    _serve_until(door, lambda: _answered([outside]) == 1)
    _serve_until(door, lambda: doorman.peers == 4)
