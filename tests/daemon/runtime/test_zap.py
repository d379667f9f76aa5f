"""Nobody gets in who is not on the list, whatever state the loop is in."""

import time
from pathlib import Path
from typing import Any

import pytest
import zmq

from byway import frames, messages
from byway.frames import Header
from byway.keys import Keys, new_keys
from bywayd.allowed import save_allowed
from bywayd.core import effects, events
from bywayd.core.rights import Rights
from bywayd.runtime.outside import Outside
from bywayd.runtime.sockets import DoorFault
from bywayd.runtime.zap import answers_per_turn, told_per_look

DAEMON = new_keys("daemon")
EYE = new_keys("eye", DAEMON.public)
STRANGER = new_keys("stranger", DAEMON.public)
HELLO = frames.encode(Header("hello", "r1"), messages.Hello(versions=[1], client="c"))


class Door:
    """The daemon's sockets, and clients of them."""

    def __init__(self, folder: Path, **options: Any) -> None:
        self.told: list[tuple[str, dict[str, Any]]] = []
        self.list_file = folder / "allowed.toml"
        self.allow(EYE)
        self.outside = Outside(
            dict.fromkeys(("requests", "updates", "events"), ("tcp://127.0.0.1:0",)),
            "e1",
            keys=DAEMON,
            list_file=self.list_file,
            tell=lambda event, **facts: self.told.append((event, facts)),
            **options,
        )
        self._context = zmq.Context()
        self._clients: list[zmq.Socket[bytes]] = []

    def allow(self, *keys: Keys) -> None:
        save_allowed({each.public: Rights("watcher", each.name) for each in keys}, self.list_file)

    def arrive(self, keys: Keys | None, name: str = "requests", kind: int = zmq.DEALER) -> Any:
        client = self._context.socket(kind)
        client.setsockopt(zmq.LINGER, 0)
        client.setsockopt(zmq.RECONNECT_IVL, 10)
        if keys is not None:
            client.curve_publickey = keys.public.encode()
            client.curve_secretkey = keys.secret.encode()
            client.curve_serverkey = keys.daemon.encode()
        self._clients.append(client)
        client.connect(self.outside.endpoints[name][0])
        return client

    def serve(self, for_s: float, *, answers: bool = True) -> list[events.Event]:
        """Do as the loop does, except that it may forget those who knock."""
        came: list[events.Event] = []
        end_s = time.monotonic() + for_s
        while time.monotonic() < end_s and not came:
            if answers:
                self.outside.admission.answer()
            self.outside.receive("requests", came.append)
            self.outside.receive("updates", came.append)
            self.outside.receive_subscriptions()
            self.outside.doorman.look()
            time.sleep(0.001)
        return came

    def close(self) -> None:
        for client in self._clients:
            client.close()
        self._context.term()
        self.outside.close()


@pytest.fixture
def door(tmp_path: Path) -> Any:
    made = Door(tmp_path)
    yield made
    made.close()


def test_whoever_is_on_the_list_gets_in_with_his_rights(door: Door) -> None:
    client = door.arrive(EYE)
    client.send_multipart(HELLO)
    (came,) = door.serve(5.0)
    assert isinstance(came, events.Received)
    assert came.peer.rights == Rights("watcher", "eye")
    door.outside.reply(effects.Reply(came.peer, Header("noted", "r1"), messages.Noted(replans=[])))
    assert client.poll(5000)
    assert door.outside.admission.admitted == 1


ONLY_DAEMON_KNOWN = new_keys("guess", new_keys("other").public)


@pytest.mark.parametrize("keys", [STRANGER, None, ONLY_DAEMON_KNOWN])
@pytest.mark.parametrize("name", ["requests", "updates"])
def test_others_get_nowhere(door: Door, keys: Keys | None, name: str) -> None:
    door.arrive(keys, name).send_multipart(HELLO)
    assert door.serve(0.15) == []
    assert door.outside.admission.admitted == 0
    # It tells who knocked, where that can be known.
    assert [event for event, _ in door.told] == (["keys.turned_away"] if keys is STRANGER else [])


def test_a_subscriber_without_a_key_hears_nothing(door: Door) -> None:
    ears = {}
    for who, keys in (("eye", EYE), ("stranger", STRANGER), ("nobody", None)):
        ears[who] = door.arrive(keys, "events", zmq.SUB)
        ears[who].setsockopt(zmq.SUBSCRIBE, b"")
    door.serve(0.3)
    header = Header("listening", number=1, epoch="e1")
    said = effects.Publish("health", header, messages.Listening(topic="health"))
    door.outside.publish(said)
    heard = [ears["eye"].recv_multipart()[0] for _ in range(2)]
    assert heard == [b"", b"health"]
    assert not ears["stranger"].poll(50)
    assert not ears["nobody"].poll(50)


def test_while_nobody_answers_nobody_gets_in(door: Door) -> None:
    """Without an enforced domain ZeroMQ would let everybody in."""
    friend, stranger, nobody = door.arrive(EYE), door.arrive(STRANGER), door.arrive(None)
    for client in (friend, stranger, nobody):
        client.send_multipart(HELLO)
    assert door.serve(0.2, answers=False) == []
    (came,) = door.serve(5.0)
    assert came.peer.rights == Rights("watcher", "eye")
    assert door.serve(0.1) == []


def test_a_closed_admission_keeps_all_out(door: Door) -> None:
    door.outside.admission.close()
    for keys in (EYE, STRANGER, None):
        door.arrive(keys).send_multipart(HELLO)
    assert door.serve(0.2, answers=False) == []


def test_a_crowd_of_strangers_does_not_keep_a_friend_out_nor_get_in(door: Door) -> None:
    crowd = [door.arrive(STRANGER) for _ in range(3 * answers_per_turn)]
    for client in crowd:
        client.send_multipart(HELLO)
    friend = door.arrive(EYE)
    friend.send_multipart(HELLO)
    (came,) = door.serve(10.0)
    assert came.peer.rights == Rights("watcher", "eye")
    assert door.serve(0.2) == []
    admission = door.outside.admission
    assert (admission.admitted, admission.rejected) == (1, len(crowd))
    # They cannot fill the log either.
    assert len(door.told) == told_per_look
    admission.look()
    assert door.told[-1] == ("keys.turned_away.more", {"count": len(crowd) - told_per_look})


def test_those_who_are_turned_away_are_not_counted_as_inside(door: Door) -> None:
    for keys in (STRANGER, None, ONLY_DAEMON_KNOWN):
        door.arrive(keys).send_multipart(HELLO)
    door.serve(0.3)
    for client in door._clients:
        client.close()
    door.serve(0.1)
    assert door.outside.doorman.peers == 0


def test_one_turn_answers_a_bounded_number(door: Door) -> None:
    for _ in range(2 * answers_per_turn):
        door.arrive(STRANGER)
    time.sleep(0.5)
    door.outside.admission.answer()
    assert 0 < door.outside.admission.rejected <= answers_per_turn


def test_whoever_is_taken_off_the_list_has_no_rights_left(door: Door) -> None:
    client = door.arrive(EYE)
    client.send_multipart(HELLO)
    (came,) = door.serve(5.0)
    door.allow(STRANGER)
    door.outside.admission.look()
    assert door.told == [("keys.list_read", {"allowed": 1})]
    client.send_multipart(HELLO)
    (came,) = door.serve(5.0)
    assert came.peer.rights.role is None
    newcomer = door.arrive(STRANGER)
    newcomer.send_multipart(HELLO)
    (came,) = door.serve(5.0)
    assert came.peer.rights == Rights("watcher", "stranger")
    assert door.outside.admission.rejected == 0


@pytest.mark.parametrize("damage", ["gone", "nonsense", "open to others"])
def test_a_list_that_is_no_good_changes_nothing(door: Door, damage: str) -> None:
    if damage == "gone":
        door.list_file.unlink()
    elif damage == "nonsense":
        door.list_file.write_text("[eye]\nrole = 'emperor'\n")
    else:
        door.allow(STRANGER)
        door.list_file.chmod(0o666)
    for _ in range(2):
        door.outside.admission.look()
    assert [event for event, _ in door.told] == ["keys.list_refused"]
    door.arrive(EYE).send_multipart(HELLO)
    (came,) = door.serve(5.0)
    assert came.peer.rights == Rights("watcher", "eye")


def test_without_a_list_there_are_no_sockets(tmp_path: Path) -> None:
    with pytest.raises(DoorFault, match="cannot be read"):
        Outside(
            {"requests": ("tcp://127.0.0.1:0",)}, "e1", keys=DAEMON, list_file=tmp_path / "none"
        )


def test_with_keys_other_hosts_may_come(tmp_path: Path) -> None:
    save_allowed({EYE.public: Rights("watcher", "eye")}, tmp_path / "allowed.toml")
    everywhere = dict.fromkeys(("requests", "updates", "events"), ("tcp://*:0",))
    opened = Outside(everywhere, "e1", keys=DAEMON, list_file=tmp_path / "allowed.toml")
    assert opened.endpoints["requests"][0].startswith("tcp://0.0.0.0:")
    opened.close()
    with pytest.raises(DoorFault, match="no keys"):
        Outside(everywhere, "e1")


def test_no_more_are_let_in_than_the_settings_say(tmp_path: Path) -> None:
    small = Door(tmp_path, peers_max=4)
    try:
        inside = [small.arrive(EYE) for _ in range(4)]
        small.serve(0.3)
        assert small.outside.doorman.peers == 4
        outside = small.arrive(EYE)
        outside.send_multipart(HELLO)
        assert small.serve(0.2) == []
        inside[0].close()
        assert len(small.serve(5.0)) == 1
    finally:
        small.close()


def test_the_sockets_enforce_what_is_decided(door: Door) -> None:
    for sock in door.outside.sockets.values():
        assert sock.curve_server
        assert sock.getsockopt(zmq.ZAP_ENFORCE_DOMAIN) == 1
        assert sock.getsockopt(zmq.ZAP_DOMAIN) == b"byway"
        assert sock.getsockopt(zmq.MECHANISM) == zmq.CURVE
