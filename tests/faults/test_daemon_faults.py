"""The daemon itself is killed, flooded, starved; what it promises outlasts that."""

import contextlib
import os
import resource
import signal
import time
from pathlib import Path

import pytest
import zmq
from tests.daemon.daemon_harness import Daemon, Peer, eventually, outcome_of, running

from byway import messages


def _alive(pid: int) -> bool:
    try:
        return Path(f"/proc/{pid}/stat").read_text().rsplit(")", 1)[1].split()[0] != "Z"
    except OSError:
        return False


@pytest.fixture
def started(tmp_path):
    """Start daemons; all are ended."""
    daemons = []

    def starting(name="one", **options):
        daemons.append(Daemon(tmp_path / name, **options))
        return daemons[-1]

    yield starting
    for daemon in daemons:
        daemon.end()


@pytest.fixture
def meet():
    """Talk to daemons; all conversations are ended."""
    peers = []

    def meeting(daemon, *, ready=True):
        peers.append(Peer(daemon))
        if ready:
            peers[-1].when_ready()
        return peers[-1]

    yield meeting
    for peer in peers:
        peer.close()


def test_nothing_is_left_of_a_daemon_that_was_killed(started, meet):
    daemon = started()
    peer = meet(daemon)
    peer.send_replan("hang", 60.0)  # one worker is where it hears nothing any more
    eventually(lambda: len(daemon.family()) == 5)
    family = daemon.family()
    daemon.process.kill()
    eventually(lambda: not any(_alive(pid) for pid in family.values()))
    daemon.process.wait()
    # The next one can serve from the same folder at once.
    successor = started()
    meet(successor)
    assert successor.stop() == 0


def test_a_stop_answers_what_is_open_and_refuses_what_comes(started, meet):
    daemon = started(workers=1)
    peer = meet(daemon)
    hung = peer.send_replan("hang_with_a_route", 60.0, unit="hung")
    waiting = peer.send_replan("at_once", 60.0, unit="waiting")
    time.sleep(0.1)
    began_s = time.monotonic()
    daemon.process.send_signal(signal.SIGTERM)
    eventually(lambda: daemon.log_lines("front.draining"))
    late = peer.send_replan("at_once", 1.0, unit="late")
    heard = {}
    while len(heard) < 3:
        came = peer.hear()
        if not isinstance(came.message, messages.Accepted):
            heard[came.header.id] = came.message
    assert daemon.process.wait(5) == 0
    assert time.monotonic() - began_s < 2.5
    assert outcome_of(heard[hung])["cost"] == 3.0
    assert isinstance(heard[waiting], messages.AnswerMessage | messages.ErrorMessage)
    assert heard[late].code == "stopping"


def test_a_stop_of_the_whole_process_group_is_as_orderly(started, meet):
    """As Ctrl-C does, and a service manager: the crew must not die before it has answered."""
    daemon = started(new_group=True)
    peer = meet(daemon)
    id = peer.send_replan("auto", 60.0)
    time.sleep(0.1)
    os.killpg(daemon.process.pid, signal.SIGINT)
    assert outcome_of(peer.answer_to(id))["kind"] == "route"
    assert daemon.process.wait(5) == 0


def test_a_second_daemon_in_the_same_folder_is_refused_with_the_reason(started, meet):
    first = started()
    peer = meet(first)
    second = started()
    assert second.process.wait(10) == 69
    why = eventually(lambda: second.log_lines("daemon.cannot_listen"))[0]["why"]
    assert str(first.process.pid) in why
    assert peer.hello().state == "ready"


def test_while_warming_every_replan_is_told_so_at_once(started, meet):
    daemon = started(environment={"STANDIN_WARM_S": "1.0"})
    peer = meet(daemon, ready=False)
    assert peer.hello().state == "warming"
    answer = peer.replan("at_once", 0.5)
    assert isinstance(answer, messages.ErrorMessage)
    assert answer.code == "warming"
    assert peer.ask(messages.Health()).state == "warming"
    peer.when_ready()
    assert outcome_of(peer.replan("at_once", 0.5))["kind"] == "route"


def test_a_daemon_that_cannot_compile_ends_and_says_why(started):
    daemon = started(environment={"STANDIN_WARM_FAILS": "1"})
    assert daemon.process.wait(20) == 1
    assert daemon.log_lines("daemon.cannot_work")
    assert any("out of order" in line["line"] for line in daemon.log_lines("crew.said"))


def test_a_log_that_nobody_reads_does_not_stop_the_front(started, meet):
    unread, log_to = os.pipe()
    daemon = started(log_to=log_to)
    os.close(log_to)
    peer = meet(daemon)
    for _ in range(600):  # a line each; the pipe holds 64 KiB
        assert outcome_of(peer.replan("at_once", 1.0))["kind"] == "route"
    assert daemon.stop() == 0
    assert len(os.read(unread, 1 << 20)) > 60_000
    os.close(unread)


def test_running_out_of_descriptors_is_prevented(tmp_path, meet):
    """
    An ipc listener of libzmq that finds no descriptor left aborts the process; a crowd of
    connections must not do that to the daemon.
    """
    with running(tmp_path, descriptors_max=1024) as (daemon, peer), _crowd(daemon, 900) as crowd:
        eventually(lambda: daemon.log_lines("doors.shut"))
        # Who was inside before is served on.
        for _ in range(20):
            assert peer.hello().state == "ready"
            time.sleep(0.01)
        assert daemon.process.poll() is None
        for sock in crowd[:-1]:
            sock.close()
        eventually(lambda: daemon.log_lines("doors.opened"))
        assert meet(daemon).hello().state == "ready"


@contextlib.contextmanager
def _crowd(daemon, count):
    assert resource.getrlimit(resource.RLIMIT_NOFILE)[0] > 3 * count
    context = zmq.Context()
    made = []
    for number in range(count):
        sock = context.socket(zmq.DEALER)
        sock.setsockopt(zmq.LINGER, 0)
        sock.connect(daemon.endpoints["requests" if number % 2 else "events"])
        made.append(sock)
        if number % 50 == 0:
            time.sleep(0.002)  # a crowd, not a machine gun: the front has to notice it
    try:
        yield made
    finally:
        for sock in made:
            sock.close()
        context.term()


def test_any_free_port_will_do_and_is_told(tmp_path):
    with running(tmp_path) as (daemon, peer):
        (line,) = daemon.log_lines("daemon.listening")
        told = next(endpoint for endpoint in line["requests"] if endpoint.startswith("tcp"))
        assert any(endpoint.startswith("tcp") for endpoint in peer.hello().events_endpoints)
        with zmq.Context() as context, context.socket(zmq.DEALER) as sock:
            sock.setsockopt(zmq.LINGER, 0)
            sock.connect(told)
            sock.send_multipart([b"\xff", b""])
            assert sock.poll(5000)


def test_garbage_is_answered_and_changes_nothing(tmp_path):
    with running(tmp_path) as (daemon, peer):
        context = zmq.Context()
        for name in ("requests", "updates"):
            sock = context.socket(zmq.DEALER)
            sock.setsockopt(zmq.LINGER, 0)
            sock.connect(daemon.endpoints[name])
            for parts in ([b""], [b"\xff" * 100, b"\xc1"], [b"a", b"b", b"c", b"d"]):
                sock.send_multipart(parts)
                assert sock.poll(5000)
                assert b"bad_message" in b"".join(sock.recv_multipart())
            sock.send(bytes(20_000_000))  # the connection is cut
            sock.close()
        context.term()
        assert outcome_of(peer.replan("at_once", 0.5))["statistics"]["obstacles"] == 0
        assert peer.ask(messages.Health()).counts["unreadable_total"] == 6


def test_a_frozen_front_goes_on_where_it_was(tmp_path):
    """A virtual machine that was paused, a debugger: late, and still right."""
    with running(tmp_path) as (daemon, peer):
        daemon.process.send_signal(signal.SIGSTOP)
        id = peer.send_replan("at_once", 0.5)
        time.sleep(0.7)
        daemon.process.send_signal(signal.SIGCONT)
        assert outcome_of(peer.answer_to(id))["kind"] == "route"
        assert daemon.process.poll() is None
