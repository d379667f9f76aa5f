"""What each role may do, refused message by message, and never at the cost of somebody else."""

from dataclasses import replace

import pytest
from tests.daemon.core.frontdesk import Desk, put, settings

from byway import frames, messages
from byway.errors import BadMessage
from bywayd.core import effects, events
from bywayd.core.rights import ROLES, Rights, refusal

LOOKING = {"hello", "health", "vehicles", "site"}
DRIVING = {"replan", "cancel", "finish", "guard", "progress", "release"}
MAY_ASK = {
    "watcher": LOOKING,
    "source": LOOKING,
    "driver": LOOKING | DRIVING,
    "operator": LOOKING | DRIVING,
}
MAY_CHANGE = {"watcher": False, "source": True, "driver": False, "operator": True}


def request(kind: type[messages.Message]) -> messages.Message:
    return kind.model_construct()


@pytest.mark.parametrize("role", ROLES)
def test_every_request_is_allowed_to_somebody_and_to_no_more_roles_than_meant(role) -> None:
    asked = {model.kind: refusal(Rights(role, "a"), request(model)) for model in messages.REQUESTS}
    allowed = {kind for kind, refused in asked.items() if refused is None}
    assert allowed == MAY_ASK[role]
    assert {refused.code for refused in asked.values() if refused is not None} <= {"forbidden"}
    assert set(asked) == LOOKING | DRIVING


@pytest.mark.parametrize("role", ROLES)
def test_every_change_is_allowed_to_those_who_may_change_something(role) -> None:
    for model in messages.CHANGES:
        message = model.model_construct(layer="fixed")
        refused = refusal(Rights(role, "a"), message)
        assert (refused is None) == MAY_CHANGE[role], model
        if refused is not None:
            assert refused.facts == {"role": role, "kind": model.kind, "layer": "fixed"}


@pytest.mark.parametrize("role", ["source", "driver"])
@pytest.mark.parametrize(
    ("pattern", "layer", "is_allowed"),
    [
        ("lidar", "lidar", True),
        ("lidar", "lidar.north", False),
        ("lidar.*", "lidar.north", True),
        ("lidar.*", "lidar", False),
        ("lidar*", "lidar", True),
        ("*", "anything", True),
        ("lid*r", "lidar", False),  # only at the end, and the list refuses others
    ],
)
def test_layers_are_allowed_by_name_or_beginning(role, pattern, layer, is_allowed) -> None:
    rights = Rights(role, "a", ("radar", pattern))
    refused = refusal(rights, messages.Drop(layer=layer, ids=[]))
    assert (refused is None) == is_allowed
    assert refusal(rights, messages.Drop(layer="radar", ids=[])) is None


def test_a_request_that_nobody_has_thought_of_is_for_operators() -> None:
    assert [role for role in ROLES if Rights(role, "a").may_ask("new")] == ["operator"]


def test_without_keys_everybody_may_do_everything() -> None:
    for model in (*messages.REQUESTS, *messages.CHANGES):
        assert refusal(None, model.model_construct(layer="fixed")) is None


def test_whoever_is_off_the_list_may_do_nothing() -> None:
    gone = Rights(None, "")
    for model in (*messages.REQUESTS, *messages.CHANGES):
        refused = refusal(gone, model.model_construct(layer="fixed"))
        assert refused is not None
        assert "no longer" in refused.text


# -- in the front ------------------------------------------------------------------------------


def desk_of(rights: Rights | None, desk: Desk | None = None) -> Desk:
    """The desk, with a peer of these rights at both sockets."""
    desk = desk or Desk(settings()).open()
    desk.peer = events.Peer("requests", b"client", rights)
    name = b"" if rights is None else rights.name.encode()
    desk.source = events.Peer("updates", b"source " + name, rights)
    return desk


def test_a_replan_that_is_not_allowed_is_refused_and_leaves_nothing() -> None:
    desk = desk_of(Rights("watcher", "eye"))
    desk.ask("a")
    assert desk.error("a") == "forbidden"
    assert desk.all_of(effects.StartJob) == []
    assert desk.count("forbidden_total") == 1
    assert desk.count("replans_total") == 0
    desk_of(Rights("driver", "tug"), desk)
    desk.ask("a")
    assert isinstance(desk.reply(), messages.Accepted)


def test_a_source_is_refused_for_the_layers_of_others_only() -> None:
    desk = desk_of(Rights("source", "lidar", ("lidar.*",)))
    desk.change(*put("lidar.north", "a"))
    desk.publish(1)
    assert isinstance(desk.reply(), messages.Acknowledged)
    desk.change(*put("fixed", "a"))
    refused, acknowledged = (message for _, message in desk.replies())
    assert isinstance(refused, messages.Refused)
    assert (refused.number, refused.code) == (2, "forbidden")
    assert refused.facts == {"role": "source", "kind": "put", "layer": "fixed"}
    assert isinstance(acknowledged, messages.Acknowledged)
    assert acknowledged.number == 2
    assert desk.all_of(effects.ApplyChanges) == []
    # It goes on where it was.
    desk.change(*put("lidar.north", "b"))
    desk.publish(2)
    assert desk.reply().number == 3


def test_a_repeat_of_what_was_forbidden_is_refused_in_the_same_words() -> None:
    desk = desk_of(Rights("source", "lidar", ("lidar.*",)))
    desk.change(*put("fixed", "a"))
    first = [message for _, message in desk.replies()]
    desk.change(*put("fixed", "a"), number=1)
    assert [message for _, message in desk.replies()] == first


@pytest.mark.parametrize("role", ["watcher", "driver", None])
def test_whoever_may_change_nothing_is_not_even_known_as_a_source(role) -> None:
    """A watcher must not be able to crowd sources out."""
    desk = desk_of(Rights(role, "eye"))
    for source in range(5):
        desk.change(*put("fixed", "a"), source=f"s-{source}")
        assert desk.error("") == "forbidden"
    assert len(desk.front.ledger.sources) == 0
    fault = BadMessage("nonsense")
    fault.header = frames.Header("put", source="s", number=1)
    desk.hand_in(events.Unreadable(desk.source, fault))
    assert desk.error("") == "bad_message"
    assert len(desk.front.ledger.sources) == 0


def test_a_key_cannot_speak_for_the_source_of_another() -> None:
    """It would use up numbers, and what the other sends under them would never be seen."""
    lidar, radar = Rights("source", "lidar"), Rights("source", "radar")
    desk = desk_of(lidar)
    desk.change(*put("lidar", "a"), source="one")
    desk.publish(1)
    desk_of(radar, desk)
    desk.change(*put("radar", "a"), source="one")
    assert desk.error("") == "forbidden"
    fault = BadMessage("nonsense")
    fault.header = frames.Header("put", source="one", number=2)
    desk.hand_in(events.Unreadable(desk.source, fault))
    assert desk.error("") == "bad_message"
    desk_of(lidar, desk)
    desk.change(*put("lidar", "b"), source="one", number=2)
    desk.publish(2)
    assert desk.reply().number == 2


def test_the_same_key_may_come_back_by_another_connection_or_with_other_layers() -> None:
    desk = desk_of(Rights("source", "lidar", ("lidar.*",)))
    desk.change(*put("lidar.north", "a"), source="one")
    desk.publish(1)
    desk_of(Rights("source", "lidar", ("lidar.north", "lidar.south")), desk)
    desk.source = replace(desk.source, identity=b"another connection")
    desk.change(*put("lidar.south", "a"), source="one")
    desk.publish(2)
    assert desk.one(effects.Reply).peer == desk.source


def test_nobody_is_told_of_what_is_forbidden_while_the_daemon_stops_but_the_sender() -> None:
    desk = desk_of(Rights("source", "lidar", ("lidar.*",)))
    desk.change(*put("lidar.north", "a"))
    desk.hand_in(events.StopAsked("SIGTERM"))
    desk.change(*put("fixed", "a"))
    assert desk.error("") == "forbidden"
