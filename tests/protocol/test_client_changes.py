"""Changes of the site through the blocking client, and what a restarted daemon gets again."""

from collections.abc import Callable

import numpy as np
import pytest
from tests.protocol.fake_daemon import FakeDaemon, set_patience

import byway
from byway import frames, limits, messages
from byway.frames import Header
from byway.link import wait

NewClient = Callable[..., byway.Client]
KILN = [(10, 5), (18, 5), (18, 9), (10, 9)]
CELLS = np.array([[0, 1], [2, 0]], np.uint8)


def kinds(daemon: FakeDaemon) -> list[str]:
    """Kinds of the changes that came in, in order."""
    return [came.header.kind for came in daemon.log if came.header.source]


def test_a_change_returns_the_revision_that_has_it(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    assert client.replace_layer("fixed", polygons={"kiln": KILN}) == 1
    assert client.put("fixed", discs={"post": (1, 2, 0.5)}, expires_in_s=60.0) == 2
    assert client.drop("fixed", ["kiln", "nothing"]) == 3
    assert client.patch("fixed", (20.0, 0.0), 0.1, CELLS) == 4
    assert daemon.layers["fixed"]["obstacles"] == {"post": [1.0, 2.0, 0.5]}
    assert daemon.layers["fixed"]["patches"] == [(20.0, 0.0)]
    assert [came.header.number for came in daemon.log if came.header.source] == [1, 2, 3, 4]
    assert daemon.log[-1].message.columns["cells"].shape == (2, 2)
    assert bytes(daemon.log[-1].packed)[:4] == bytes([0, 1, 2, 0])


def test_boxes_scans_and_tracks(client: byway.Client, daemon: FakeDaemon) -> None:
    assert client.put("movers", boxes={"crate": (1, 2, 0.5, 4, 2)}) == 2
    assert client.scan("movers", (1, 2, 0.5), [0.0, 0.1], [3.0, 9.0], 5.0, 0.2, 0.1) == 3
    scan = daemon.log[-1].message
    assert (scan.origin, scan.range_m_max, scan.range_m_min, scan.age_s) == (
        (1.0, 2.0, 0.5),
        *(5.0, 0.2, 0.1),
    )
    fork = byway.Track(pose=(1, 2, 0), outline_m=KILN, velocity_mps=(1, 0), growth_mps=0.2)
    assert client.track("movers", {"fork": fork}, age_s=0.3, expires_in_s=4.0) == 4
    track = daemon.log[-1].message
    assert (track.polygons, track.discs, track.age_s, track.expires_in_s) == (1, 0, 0.3, 4.0)
    assert client.patch("movers", (0.0, 0.0), 0.1, CELLS, heading_rad=0.5) == 5
    assert daemon.log[-1].message.heading_rad == 0.5


def test_a_layer_is_claimed_before_its_first_change(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    client.patch("lidar", (20.0, 0.0), 0.1, CELLS)
    client.put("lidar", polygons={"kiln": np.array(KILN)})
    assert kinds(daemon) == ["claim", "patch", "put"]


def test_a_claim_says_what_the_caller_said(client: byway.Client, daemon: FakeDaemon) -> None:
    client.claim("lidar", lease_s=5.0, unknown_blocks=True, outlines_only=False)
    client.patch("lidar", (20.0, 0.0), 0.1, CELLS)
    assert kinds(daemon) == ["claim", "patch"]
    claim = messages.Claim(layer="lidar", lease_s=5.0, unknown_blocks=True, outlines_only=False)
    assert next(came.message for came in daemon.log if came.header.source) == claim


def test_another_client_takes_a_layer_over(new_client: NewClient, daemon: FakeDaemon) -> None:
    """The same script run twice works: who comes last owns the layer, and the other hears it."""
    first, second = new_client(), new_client()
    first.put("stacks", discs={"pile": (1, 1, 1)})
    second.put("stacks", discs={"heap": (2, 2, 1)})
    assert set(daemon.layers["stacks"]["obstacles"]) == {"pile", "heap"}
    with pytest.raises(byway.NotOwner):
        first.put("stacks", discs={"pile": (3, 3, 1)})
    assert daemon.layers["stacks"]["obstacles"]["pile"] == [1.0, 1.0, 1.0]


def test_a_refused_change_is_raised_and_the_next_one_works(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    client.claim("stacks")
    daemon.refuses_change["stacks"] = ("bad_geometry", "pile: crosses itself")
    with pytest.raises(byway.BadGeometry, match="crosses itself"):
        client.put("stacks", polygons={"pile": [(0, 0), (1, 1), (1, 0), (0, 1)]})
    assert client.put("stacks", discs={"pile": (1, 1, 1)}) == 2


@pytest.mark.parametrize("fault", ["lose", "mute"])
def test_a_lost_change_or_acknowledgement_is_made_good(
    new_client: NewClient, daemon: FakeDaemon, fault: str
) -> None:
    """The change is made once, whether it or its acknowledgement was lost."""
    client = new_client(repeat_s=0.03)
    client.claim("stacks")
    if fault == "lose":
        daemon.lose["put"] = 1
    else:
        daemon.mute["acknowledged"] = 1
    assert client.put("stacks", discs={"pile": (1, 1, 1)}) == 2
    assert daemon.got["put"] == (1 if fault == "lose" else 2)


def test_a_lost_refusal_is_repeated(new_client: NewClient, daemon: FakeDaemon) -> None:
    client = new_client(repeat_s=0.03)
    client.claim("stacks")
    daemon.refuses_change["stacks"] = ("too_large", "no room")
    daemon.mute["refused"] = daemon.mute["acknowledged"] = 1
    with pytest.raises(byway.TooLarge):
        client.put("stacks", discs={"pile": (1, 1, 1)})


def test_a_gap_is_filled(new_client: NewClient, daemon: FakeDaemon) -> None:
    """The claim is lost, the patch behind it arrives: both are sent again."""
    client = new_client(repeat_s=5.0)
    client.hello()
    daemon.lose["claim"] = 1
    assert client.patch("lidar", (0.0, 0.0), 0.1, CELLS) == 2
    assert kinds(daemon) == ["patch", "claim", "patch"]


def test_a_restarted_daemon_gets_the_layers_with_the_next_change(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    client.replace_layer("fixed", polygons={"kiln": KILN}, discs={"post": (1, 2, 0.5)})
    client.patch("lidar", (20.0, 0.0), 0.1, CELLS)
    client.put("lidar", discs={"crate": (5, 5, 1)}, expires_in_s=1000.0)
    daemon.restart()
    client.put("fixed", discs={"bin": (7, 7, 1)})
    assert set(daemon.layers["fixed"]["obstacles"]) == {"kiln", "post", "bin"}
    assert set(daemon.layers["lidar"]["obstacles"]) == {"crate"}
    assert daemon.layers["lidar"]["patches"] == [(20.0, 0.0)]
    assert client.epoch == daemon.epoch
    assert client.replan("tug", (0, 0, 0), (5, 0, 0), 0.05).kind == "route"


def test_a_restarted_daemon_gets_the_layers_as_soon_as_it_is_met(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    client.replace_layer("fixed", polygons={"kiln": KILN})
    daemon.restart()
    client.health()
    assert set(daemon.layers["fixed"]["obstacles"]) == {"kiln"}
    daemon.restart()
    with pytest.raises(byway.NewEpoch):
        client.replan("tug", (0, 0, 0), (5, 0, 0), 0.05)
    assert set(daemon.layers["fixed"]["obstacles"]) == {"kiln"}


def test_a_restoration_that_timed_out_goes_on_with_the_next_call(
    new_client: NewClient, daemon: FakeDaemon
) -> None:
    client = new_client()
    client.replace_layer("fixed", polygons={"kiln": KILN})
    daemon.restart()
    daemon.mute["acknowledged"] = 1000
    set_patience(client, timeout_s=0.2)
    with pytest.raises(byway.TimedOut):
        client.put("fixed", discs={"bin": (7, 7, 1)})
    daemon.mute.clear()
    set_patience(client, timeout_s=5.0)
    client.health()
    assert client.epoch == daemon.epoch
    assert set(daemon.layers["fixed"]["obstacles"]) == {"kiln", "bin"}


def test_a_daemon_that_warms_up_gets_the_layers_before_the_next_replan(
    new_client: NewClient, daemon: FakeDaemon
) -> None:
    """It acknowledges nothing soon, and is not waited for by who asks how it is."""
    client = new_client(repeat_s=0.05)
    client.replace_layer("fixed", polygons={"kiln": KILN})
    daemon.restart()
    daemon.state = "warming"
    daemon.mute["acknowledged"] = 1000
    assert client.health().state == "warming"
    assert client.hello().state == "warming"
    daemon.mute.clear()
    daemon.state = "ready"
    assert client.replan("tug", (0, 0, 0), (5, 0, 0), 0.05).epoch == daemon.epoch
    assert set(daemon.layers["fixed"]["obstacles"]) == {"kiln"}


def test_a_replan_after_a_restoration_that_timed_out_waits_for_it(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    """It must not be answered on a site that lacks what this client had put there."""
    client.replace_layer("fixed", polygons={"kiln": KILN})
    daemon.restart()
    daemon.lose["replace_layer"] = 1
    set_patience(client, timeout_s=0.05)
    with pytest.raises(byway.TimedOut):
        client.hello()
    set_patience(client, timeout_s=5.0)
    assert daemon.layers == {}
    client.replan("tug", (0, 0, 0), (5, 0, 0), 0.05)
    assert set(daemon.layers["fixed"]["obstacles"]) == {"kiln"}


def test_patches_that_were_too_many_to_keep_are_told(
    client: byway.Client, daemon: FakeDaemon, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("byway.strokes.patches_max", 1)
    client.patch("lidar", (0.0, 0.0), 0.1, CELLS)
    client.patch("lidar", (9.0, 0.0), 0.1, CELLS)
    daemon.restart()
    with pytest.raises(byway.NewEpoch, match="more patches") as caught:
        client.health()
    assert caught.value.facts["layer"] == "lidar"
    assert daemon.layers["lidar"]["patches"] == [(9.0, 0.0)]
    assert client.health().state == "ready"


def test_a_layer_that_somebody_took_meanwhile_is_told(
    new_client: NewClient, daemon: FakeDaemon
) -> None:
    client = new_client()
    client.replace_layer("fixed", polygons={"kiln": KILN})
    daemon.restart()
    daemon.refuses_change["fixed"] = ("not_owner", "somebody has a lease")
    with pytest.raises(byway.NotOwner):
        client.put("stacks", discs={"pile": (1, 1, 1)})
    assert set(daemon.layers) == {"stacks"}
    daemon.restart()
    client.health()
    assert set(daemon.layers) == {"stacks"}


def test_a_change_that_timed_out_is_sent_again_by_the_next_call(
    new_client: NewClient, daemon: FakeDaemon
) -> None:
    client = new_client()
    client.claim("stacks")
    daemon.lose["put"] = 1
    set_patience(client, timeout_s=0.03)
    with pytest.raises(byway.TimedOut, match="1 changes"):
        client.put("stacks", discs={"pile": (1, 1, 1)})
    set_patience(client, timeout_s=5.0)
    client.put("stacks", discs={"heap": (2, 2, 1)})
    assert set(daemon.layers["stacks"]["obstacles"]) == {"pile", "heap"}


def test_without_a_daemon_changes_are_kept_and_bounded(
    new_client: NewClient, daemon: FakeDaemon
) -> None:
    client = new_client()
    client.claim("stacks")
    daemon.stop()
    set_patience(client, reconnect_s=0.001)
    for number in range(limits.unacknowledged_max + 3):
        with pytest.raises(byway.DaemonLost):
            client.put("stacks", discs={f"pile-{number}": (1, 1, 1)})
    assert len(client._contact.source.line) == limits.unacknowledged_max
    daemon.start()
    set_patience(client, reconnect_s=5.0)
    client.drop("stacks", ["none"])
    assert len(daemon.layers["stacks"]["obstacles"]) == limits.unacknowledged_max


def test_a_stopping_daemon_is_told_and_the_change_kept(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    client.claim("stacks")
    daemon.refuses["put"] = messages.ErrorMessage(code="stopping", text="on its way out")
    with pytest.raises(byway.Stopping):
        client.put("stacks", discs={"pile": (1, 1, 1)})
    daemon.restart()
    client.claim("other")
    assert set(daemon.layers["stacks"]["obstacles"]) == {"pile"}


def test_a_full_daemon_is_given_time(client: byway.Client, daemon: FakeDaemon) -> None:
    client.claim("stacks")
    source = client._contact.source.name
    header = Header("resend", epoch=daemon.epoch)
    resend = messages.Resend(source=source, reason="full", have=1, retry_after_s=0.02)
    daemon.instead["put"] = frames.encode(header, resend)
    began_s = client._contact.clock()
    assert client.put("stacks", discs={"pile": (1, 1, 1)}) == 2
    assert client._contact.clock() - began_s >= 0.02


def test_what_is_said_to_others_or_by_an_earlier_life_is_passed_over(
    new_client: NewClient, daemon: FakeDaemon
) -> None:
    client = new_client(repeat_s=0.03)
    client.claim("stacks")
    source = client._contact.source.name
    strays = [
        (daemon.epoch, messages.Acknowledged(source="other", number=9, revision=9)),
        ("epoch-0", messages.Acknowledged(source=source, number=9, revision=9)),
        (daemon.epoch, messages.Refused(source="other", number=2, code="conflict", text="")),
        ("epoch-0", messages.Refused(source=source, number=2, code="conflict", text="")),
        (daemon.epoch, messages.Resend(source="other", reason="gap", have=0)),
        (daemon.epoch, messages.Accepted(unit="u", budget_s=1.0, revision=1)),
    ]
    for number, (epoch, stray) in enumerate(strays):
        daemon.instead["put"] = frames.encode(Header(stray.kind, epoch=epoch), stray)
        assert client.put("stacks", discs={"pile": (1, 1, 1)}) == number + 2


def test_what_came_while_nobody_called_is_taken_in_first(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    client.claim("stacks")
    link = client._contact._updates.link  # type: ignore[union-attr]
    told = messages.Acknowledged(source="other", number=1, revision=1)
    parts = frames.encode(Header("acknowledged", epoch=daemon.epoch), told)
    daemon.do(lambda: daemon._sockets["updates"].send_multipart([daemon.identity, *parts]))
    wait([(link, False)], client._contact.clock() + 5.0, client._contact.clock)
    assert client.put("stacks", discs={"pile": (1, 1, 1)}) == 2


def test_nonsense_on_the_updates_socket_is_a_bad_reply(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    client.hello()
    daemon.instead["claim"] = [b"x", b"y"]
    with pytest.raises(byway.BadReply, match="cannot be read"):
        client.claim("stacks")


def test_many_ids_are_dropped_in_several_changes(client: byway.Client, daemon: FakeDaemon) -> None:
    client.replace_layer("stacks", discs={f"pile-{i}": (i, 0, 1) for i in range(1000)})
    client.drop("stacks", (f"pile-{i}" for i in range(1000)))
    assert kinds(daemon) == ["replace_layer", "drop", "drop"]
    assert daemon.layers["stacks"]["obstacles"] == {}
    client.drop("stacks", [])
    assert daemon.got["drop"] == 3


@pytest.mark.parametrize(
    ("call", "error"),
    [
        (lambda c: c.put("stacks", polygons={"a b": KILN}), byway.BadValue),
        (lambda c: c.put("stacks", polygons={"a": KILN}, discs={"a": (0, 0, 1)}), byway.BadValue),
        (lambda c: c.put("stacks", polygons={"a": [1, 2, 3]}), byway.BadGeometry),
        (lambda c: c.put("stacks", polygons={"a": "kiln"}), byway.BadGeometry),
        (lambda c: c.put("stacks", polygons={"a": []}), byway.BadGeometry),
        (lambda c: c.put("stacks", polygons={"a": [(0, 0), (1, float("nan"))]}), byway.BadValue),
        (lambda c: c.put("stacks", discs={"a": (0, 0)}), byway.BadGeometry),
        (lambda c: c.put("stacks", discs={"a": (0, 0, 1e9)}), byway.OutsideLimits),
        (lambda c: c.put("stacks", expires_in_s=-1.0), byway.BadValue),
        (lambda c: c.put("not a name"), byway.BadValue),
        (lambda c: c.drop("stacks", ["a b"]), byway.BadValue),
        (lambda c: c.patch("lidar", (0, 0), 0.1, CELLS.astype(float)), byway.BadValue),
        (lambda c: c.patch("lidar", (0, 0), 0.1, CELLS[0]), byway.BadValue),
        (lambda c: c.patch("lidar", (0, 0), 0.0, CELLS), byway.BadValue),
        (lambda c: c.patch("lidar", ("x", 0), 0.1, CELLS), byway.BadValue),
        (lambda c: c.patch("lidar", (0, 0), 0.1, np.zeros((3000, 3000), "u1")), byway.TooLarge),
        (
            lambda c: c.put("stacks", discs={f"d{i}": (0, 0, 1) for i in range(16_385)}),
            byway.TooLarge,
        ),
        (
            lambda c: c.put("stacks", polygons={"a": np.zeros((600_000, 2))}),
            byway.TooLarge,
        ),
        (lambda c: c.claim("stacks", lease_s=0.0), byway.BadValue),
        (lambda c: c.claim("stacks", misspelt=1.0), byway.BadMessage),
        (lambda c: c.put("stacks", boxes={"a": (0, 0, 0, 1)}), byway.BadGeometry),
        (lambda c: c.put("stacks", polygons={"a": {"holes": []}}), byway.BadGeometry),
        (lambda c: c.patch("a", (0, 0), 0.1, CELLS, float("nan")), byway.BadValue),
        (lambda c: c.scan("a", (0, 0, 0), [0.0], [float("nan")], 5.0), byway.BadGeometry),
        (lambda c: c.scan("a", (0, 0), [0.0], [1.0], 5.0), byway.BadMessage),
        (lambda c: c.scan("a", (0, 0, 0), [0.0], [1.0], 0.0), byway.BadValue),
        (lambda c: c.scan("a", (0, 0, 0), [0.0], [1.0], 5.0, 6.0), byway.BadValue),
        (lambda c: c.scan("a", (0, 0, 0), [0.0], [1.0], 5.0, age_s=-1.0), byway.BadValue),
        (lambda c: c.track("a", {"f": byway.Track(pose=(0, 0, 0))}), byway.BadGeometry),
        (
            lambda c: c.track("a", {"f": byway.Track(pose=(0, 0, 0), radius_m=1)}, age_s=-1.0),
            byway.BadValue,
        ),
    ],
)
def test_what_cannot_be_meant_is_refused_before_it_is_sent(
    client: byway.Client,
    daemon: FakeDaemon,
    call: Callable[[byway.Client], object],
    error: type[byway.BywayError],
) -> None:
    with pytest.raises(error):
        call(client)
    assert not kinds(daemon)
