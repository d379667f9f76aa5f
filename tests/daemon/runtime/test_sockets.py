"""Sockets have the options that were decided on, and are reachable from this host only."""

import os
import subprocess
import sys

import pytest
import zmq

from byway import limits
from bywayd.runtime.entrances import bind, leave_all
from bywayd.runtime.sockets import (
    DoorFault,
    IpcFolder,
    check_endpoint,
    connections_allowed,
    ipc_folders,
    open_socket,
)


@pytest.fixture
def opened():
    """Open a socket by its name; all are closed at the end."""
    context = zmq.Context()
    made = []

    def opening(name):
        made.append(open_socket(context, name))
        return made[-1]

    yield opening
    for sock in made:
        sock.close()
    context.term()


OF_ALL = {
    zmq.LINGER: 0,
    zmq.HEARTBEAT_IVL: 1000,
    zmq.HEARTBEAT_TIMEOUT: 3000,
    zmq.HEARTBEAT_TTL: 4000,
    zmq.HANDSHAKE_IVL: 5000,
    zmq.TCP_MAXRT: 5000,
    zmq.BACKLOG: 100,
}


@pytest.mark.parametrize(
    ("name", "kind", "options"),
    [
        ("requests", zmq.ROUTER, {zmq.SNDHWM: 100, zmq.RCVHWM: 100}),
        ("updates", zmq.ROUTER, {zmq.SNDHWM: 1000, zmq.RCVHWM: 1000}),
        ("events", zmq.XPUB, {zmq.SNDHWM: 64, zmq.MAXMSGSIZE: 1024}),
    ],
)
def test_the_options_that_can_be_read_back_are_the_ones_decided_on(opened, name, kind, options):
    sock = opened(name)
    assert sock.type == kind
    for option, value in {**OF_ALL, **options}.items():
        assert sock.getsockopt(option) == value, option.name


def test_a_frame_a_little_over_the_wire_limit_still_gets_a_clear_error(opened):
    """ZeroMQ cuts the connection above its own limit, without a word."""
    assert opened("requests").getsockopt(zmq.MAXMSGSIZE) > limits.body_bytes_max
    assert opened("updates").getsockopt(zmq.MAXMSGSIZE) > limits.packed_bytes_max


def test_a_reply_to_an_unknown_peer_is_an_error_and_not_a_loss(opened):
    sock = opened("requests")
    with pytest.raises(zmq.ZMQError) as caught:
        sock.send_multipart([b"nobody", b"reply"], zmq.DONTWAIT)
    assert caught.value.errno == zmq.EHOSTUNREACH


@pytest.mark.parametrize(
    "endpoint",
    [
        "tcp://127.0.0.1:0",
        "tcp://127.1.2.3:7461",
        "tcp://[::1]:7461",
        "tcp://localhost:1",
        "ipc:///x",
    ],
)
def test_addresses_of_this_host_alone_are_good(endpoint):
    check_endpoint(endpoint)


@pytest.mark.parametrize(
    ("endpoint", "reason"),
    [
        ("tcp://0.0.0.0:7461", "no keys"),
        ("tcp://*:7461", "no keys"),
        ("tcp://192.168.1.5:7461", "no keys"),
        ("tcp://[::]:7461", "no keys"),
        ("tcp://yard.example:7461", "no keys"),
        ("udp://127.0.0.1:7461", "write tcp"),
        ("127.0.0.1:7461", "write tcp"),
        ("ipc:///" + "long/" * 30, "shorten"),
    ],
)
def test_other_addresses_are_refused_with_the_reason(opened, endpoint, reason):
    with pytest.raises(DoorFault, match=reason):
        bind(opened("requests"), endpoint)


def test_port_0_becomes_the_port_that_was_taken(opened):
    entrance = bind(opened("requests"), "tcp://127.0.0.1:0")
    assert int(entrance.endpoint.rpartition(":")[2]) > 0
    with pytest.raises(DoorFault, match="another daemon"):
        bind(opened("updates"), entrance.endpoint)
    leave_all([entrance])


def test_one_socket_is_reached_by_ipc_and_tcp(opened, tmp_path):
    sock = opened("requests")
    ways = [bind(sock, f"ipc://{tmp_path}/requests"), bind(sock, "tcp://127.0.0.1:0")]
    for way in ways:
        with zmq.Context() as context, context.socket(zmq.DEALER) as client:
            client.setsockopt(zmq.LINGER, 0)
            client.connect(way.endpoint)
            client.send(b"hello")
            assert sock.poll(5000)
            assert sock.recv_multipart()[1] == b"hello"
    sock.close()
    leave_all(ways)
    assert list(tmp_path.iterdir()) == []


def test_an_ipc_path_that_cannot_be_made_is_a_clear_fault(opened, tmp_path):
    with pytest.raises(DoorFault, match="cannot listen"):
        bind(opened("requests"), f"ipc://{tmp_path}/no/such/folder")


def test_a_folder_is_held_by_one_daemon_at_a_time(tmp_path):
    folder = tmp_path / "byway"
    held = IpcFolder(folder)
    assert folder.stat().st_mode & 0o777 == 0o700
    with pytest.raises(DoorFault, match=rf"process {os.getpid()}\)"):
        IpcFolder(folder)
    held.release()
    IpcFolder(folder).release()


def test_a_folder_that_others_may_write_to_is_refused(tmp_path):
    folder = tmp_path / "byway"
    folder.mkdir()
    folder.chmod(0o777)
    with pytest.raises(DoorFault, match="0700"):
        IpcFolder(folder)
    link = tmp_path / "link"
    link.symlink_to(folder)
    with pytest.raises(DoorFault, match="0700"):
        IpcFolder(link)


def test_the_folders_are_those_of_the_ipc_endpoints(tmp_path):
    endpoints = ["tcp://127.0.0.1:1", f"ipc://{tmp_path}/a", f"ipc://{tmp_path}/b"]
    assert ipc_folders(endpoints) == {tmp_path}


def test_the_limit_of_descriptors_is_raised_and_part_of_it_kept_back():
    told = "import resource as r; r.setrlimit(r.RLIMIT_NOFILE, (500, 1000));"
    told += "from bywayd.runtime.sockets import connections_allowed as c;"
    told += "print(c(reserve=200), r.getrlimit(r.RLIMIT_NOFILE)[0])"
    printed = subprocess.run([sys.executable, "-c", told], capture_output=True, check=True).stdout
    assert printed.split() == [b"400", b"1000"]
    assert connections_allowed() >= 1
