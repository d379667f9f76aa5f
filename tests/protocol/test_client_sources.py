"""A layer that a blocking client looks after: streams, windows, leases, other lives."""

import threading
import time
from collections.abc import Callable, Iterator

import numpy as np
import pytest
from tests.protocol.fake_daemon import FakeDaemon, set_patience

import byway
from byway import messages

NewClient = Callable[..., byway.Client]
PILE = {"pile": (1.0, 1.0, 1.0)}
CELLS = np.zeros((2, 2), np.uint8)


def kinds(daemon: FakeDaemon) -> list[str]:
    """Kinds of the changes that came in, in order."""
    return [came.header.kind for came in daemon.log if came.header.source]


def eventually(holds: Callable[[], object], within_s: float = 10.0) -> None:
    """Return when it is true."""
    end_s = time.monotonic() + within_s
    while not holds():
        assert time.monotonic() < end_s
        time.sleep(0.005)


def tend_until(source: byway.LayerSource, holds: Callable[[], object]) -> None:
    """Tend until it is true."""

    def tend() -> object:
        source.tend(0.02)
        return holds()

    eventually(tend)


def has(daemon: FakeDaemon, layer: str, obstacle_id: str) -> Callable[[], bool]:
    return lambda: obstacle_id in daemon.layers.get(layer, {}).get("obstacles", ())


@pytest.fixture
def stacks(client: byway.Client) -> Iterator[byway.LayerSource]:
    """Looked after by the test alone."""
    with client.source("stacks", tends=False) as source:
        yield source


def test_a_source_claims_its_layer_with_what_is_told(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    with client.source("lidar", lease_s=5.0, when_stale="refuse", tends=False) as lidar:
        assert (lidar.layer, lidar.revision, lidar.undecided) == ("lidar", 1, 0)
        wanted = messages.Claim(layer="lidar", lease_s=5.0, when_stale="refuse")
        assert daemon.log[-1].message == wanted
        lidar.claim(expected_period_s=1.0)
        assert daemon.log[-1].message == wanted.model_copy(update={"expected_period_s": 1.0})


def test_all_that_can_be_sent(stacks: byway.LayerSource, daemon: FakeDaemon) -> None:
    assert stacks.put(discs=PILE) == 2
    assert stacks.put(boxes={"box": (0, 0, 0, 2, 1)}, expires_in_s=60.0) == 3
    assert stacks.drop(["pile"]) == 4
    assert stacks.patch((20.0, 0.0), 0.5, CELLS, 0.1) == 5
    assert stacks.scan((0.0, 0.0, 0.0), [0.0], [1.0], 5.0, 0.1, 0.2) == 6
    assert stacks.track({"fork": byway.Track(pose=(0, 0, 0), radius_m=0.5)}, 0.3, 4.0) == 7
    assert daemon.layers["stacks"]["obstacles"] == {"box": [0.0, 0.0, 0.0, 2.0, 1.0], "fork": 0.3}
    assert daemon.layers["stacks"]["scans"] == [((0.0, 0.0, 0.0), 0.2)]
    assert stacks.replace(discs=PILE) == 8
    assert set(daemon.layers["stacks"]["obstacles"]) == {"pile"}
    assert stacks.revision == 8


def test_a_replaced_layer_keeps_its_lease(client: byway.Client, daemon: FakeDaemon) -> None:
    with client.source("stacks", lease_s=5.0, tends=False) as stacks:
        stacks.replace(discs=PILE)
    assert daemon.log[-1].message.lease_s == 5.0


def test_a_stream_does_not_wait(client: byway.Client, daemon: FakeDaemon) -> None:
    """Nothing is acknowledged, and the window is not full."""
    with client.source("stacks", window=4, tends=False) as stacks:
        daemon.mute["acknowledged"] = 1000
        for number in range(4):
            assert stacks.put(discs={f"pile-{number}": (1, 1, 1)}, wait=False) == 1
        assert stacks.undecided == 4
        eventually(lambda: len(daemon.layers["stacks"]["obstacles"]) == 4)
        set_patience(client, timeout_s=0.05)
        with pytest.raises(byway.TimedOut):
            stacks.put(discs={"pile-4": (1, 1, 1)}, wait=False)
        assert stacks.undecided == 4
        daemon.mute.clear()
        set_patience(client, timeout_s=5.0)
        stacks.put(discs={"pile-4": (1, 1, 1)}, wait=False)
        assert stacks.settle() == stacks.revision == daemon.revision
        assert stacks.undecided == 0


def test_windows_are_of_layers(client: byway.Client, daemon: FakeDaemon) -> None:
    with (
        client.source("a", window=1, tends=False) as first,
        client.source("b", window=1, tends=False) as second,
    ):
        daemon.mute["acknowledged"] = 2
        first.put(discs=PILE, wait=False)
        second.put(discs=PILE, wait=False)
        assert (first.undecided, second.undecided) == (1, 1)


def test_a_refusal_that_nobody_waited_for_is_raised_by_the_next_call(
    client: byway.Client, stacks: byway.LayerSource, daemon: FakeDaemon
) -> None:
    daemon.refuses_change["stacks"] = ("bad_geometry", "pile: crosses itself")
    stacks.put(polygons={"pile": [(0, 0), (1, 1), (1, 0), (0, 1)]}, wait=False)
    client.health()
    eventually(lambda: client._contact.work() or not stacks.undecided)
    count = daemon.got["put"]
    with pytest.raises(byway.BadGeometry, match="crosses itself"):
        stacks.put(discs=PILE, wait=False)
    assert daemon.got["put"] == count
    assert stacks.put(discs=PILE) == 2


@pytest.mark.parametrize("how", ["settle", "tend"])
def test_a_refusal_is_raised_by_whoever_waits_for_all(
    stacks: byway.LayerSource, daemon: FakeDaemon, how: str
) -> None:
    daemon.refuses_change["stacks"] = ("too_large", "no room")
    stacks.put(discs=PILE, wait=False)
    with pytest.raises(byway.TooLarge):
        stacks.settle() if how == "settle" else stacks.tend(10.0)
    stacks.tend()


def test_a_refusal_is_raised_by_its_own_source(client: byway.Client, daemon: FakeDaemon) -> None:
    with (
        client.source("a", tends=False) as first,
        client.source("b", tends=False) as second,
    ):
        daemon.refuses_change["a"] = ("too_large", "no room")
        first.put(discs=PILE, wait=False)
        second.put(discs=PILE)
        client.put("c", discs=PILE)
        with pytest.raises(byway.TooLarge):
            first.settle()
        daemon.refuses_change["b"] = ("too_large", "no room")
        with pytest.raises(byway.TooLarge):
            second.put(discs=PILE)
        assert second.put(discs=PILE) == daemon.revision


def test_a_lost_layer_stays_lost_until_it_is_claimed(
    new_client: NewClient, stacks: byway.LayerSource, daemon: FakeDaemon
) -> None:
    """Two streams that took it from one another in turn would be worse than an error."""
    new_client().replace_layer("stacks", discs={"heap": (2, 2, 1)})
    with pytest.raises(byway.NotOwner):
        stacks.put(discs=PILE)
    count = len(daemon.log)
    for call in (lambda: stacks.put(discs=PILE, wait=False), stacks.settle, stacks.tend):
        with pytest.raises(byway.NotOwner, match="claim it again"):
            call()
    assert len(daemon.log) == count
    stacks.claim()
    stacks.put(discs=PILE)
    assert set(daemon.layers["stacks"]["obstacles"]) == {"heap", "pile"}


def test_a_closed_source(client: byway.Client, daemon: FakeDaemon) -> None:
    stacks = client.source("stacks", lease_s=0.05, tends=False)
    with pytest.raises(RuntimeError, match="already"):
        client.source("stacks")
    stacks.close()
    stacks.close()
    for call in (stacks.tend, stacks.claim, lambda: stacks.put(discs=PILE)):
        with pytest.raises(RuntimeError, match="closed"):
            call()
    with client.source("stacks", tends=False) as again:
        again.put(discs=PILE)


@pytest.mark.parametrize(
    ("call", "error"),
    [
        (lambda c: c.source("a b"), byway.BadValue),
        (lambda c: c.source("a", window=0), byway.BadValue),
        (lambda c: c.source("a", window=65), byway.BadValue),
        (lambda c: c.source("a", lease_s=-1.0), byway.BadValue),
        (lambda c: c.source("a", when_stale="shout"), byway.BadMessage),
        (lambda c: c.source("a", misspelt=True), byway.BadMessage),
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
    with client.source("a", tends=False) as source:
        assert source.revision == 1


def test_a_source_that_could_not_be_claimed_leaves_nothing_behind(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    daemon.refuses_change["a"] = ("not_owner", "somebody has a lease")
    with pytest.raises(byway.NotOwner):
        client.source("a", tends=False)
    with client.source("a", tends=False) as source:
        assert source.revision == 1


# -- looked after ---------------------------------------------------------------------------------


def test_a_lease_is_renewed_between_calls(client: byway.Client, daemon: FakeDaemon) -> None:
    with client.source("stacks", lease_s=0.3):
        eventually(lambda: kinds(daemon).count("claim") >= 4)
    assert {came.message.lease_s for came in daemon.log if came.header.source} == {0.3}


@pytest.mark.parametrize("tends", [False, True])
def test_a_lease_is_renewed_while_a_replan_is_waited_for(
    client: byway.Client, daemon: FakeDaemon, tends: bool
) -> None:
    """Whoever waits looks after the layers as well, and the thread keeps out of the way."""
    daemon.holds = True
    with client.source("stacks", lease_s=0.15, tends=tends):
        ask = client.start_replan("tug", (0, 0, 0), (5, 0, 0), 5.0)

        def release() -> None:
            eventually(lambda: kinds(daemon).count("claim") >= 4)
            daemon.release()

        releaser = threading.Thread(target=release)
        releaser.start()
        assert ask.wait().kind == "route"
        releaser.join()


def test_tending_renews_the_lease(stacks: byway.LayerSource, daemon: FakeDaemon) -> None:
    stacks.claim(lease_s=0.09)
    count = kinds(daemon).count("claim")
    stacks.tend(0.3)
    assert kinds(daemon).count("claim") >= count + 3


def test_a_source_that_never_sends_finds_out_that_the_daemon_is_another(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    with client.source("stacks") as stacks, client.source("other"):
        stacks.replace(discs=PILE)
        for _ in range(2):
            daemon.restart()
            began_s = time.monotonic()
            eventually(has(daemon, "stacks", "pile"))
            assert time.monotonic() - began_s < 2.0
            assert "replace_layer" in kinds(daemon)[-2:]


def test_a_source_that_is_tended_finds_out_too(
    stacks: byway.LayerSource, daemon: FakeDaemon
) -> None:
    stacks.put(discs=PILE)
    daemon.restart()
    tend_until(stacks, has(daemon, "stacks", "pile"))


def test_a_broken_connection_to_the_same_daemon_changes_nothing(
    stacks: byway.LayerSource, daemon: FakeDaemon
) -> None:
    """It is asked whether it still knows the layer, which it does."""
    stacks.put(discs=PILE)
    epoch, layers, have = daemon.epoch, daemon.layers, daemon.have
    daemon.restart()
    daemon.epoch, daemon.layers, daemon.have = epoch, layers, have
    tend_until(stacks, lambda: kinds(daemon)[-1] == "drop" and not stacks.undecided)
    assert has(daemon, "stacks", "pile")()


def test_a_layer_that_was_lost_meanwhile_is_told(
    new_client: NewClient, stacks: byway.LayerSource, daemon: FakeDaemon
) -> None:
    stacks.put(discs=PILE)
    daemon.restart()
    new_client().claim("stacks", lease_s=5.0)
    daemon.refuses_change["stacks"] = ("not_owner", "somebody has a lease")
    with pytest.raises(byway.NotOwner):
        stacks.tend(5.0)


def test_tending_outlasts_a_daemon_that_is_away(
    client: byway.Client, stacks: byway.LayerSource, daemon: FakeDaemon
) -> None:
    stacks.put(discs=PILE)
    daemon.stop()
    set_patience(client, reconnect_s=0.01)
    stacks.tend(0.2)
    daemon.start()
    tend_until(stacks, has(daemon, "stacks", "pile"))


def test_a_daemon_that_sends_sources_away_is_not_asked_without_end(
    stacks: byway.LayerSource, daemon: FakeDaemon
) -> None:
    stopping = messages.ErrorMessage(code="stopping", text="on its way out")
    daemon.refuses["put"] = stopping
    stacks.put(discs=PILE, wait=False)
    stacks.tend(0.35)
    assert daemon.got["put"] == 2
    assert has(daemon, "stacks", "pile")()


def test_a_daemon_that_cannot_be_understood_is_not_asked_without_end(
    client: byway.Client, daemon: FakeDaemon
) -> None:
    daemon.instead["hello"] = [b"x", b"y"]
    began_s = time.monotonic()
    client._run(client._contact.idle(client._contact.clock() + 0.05))
    assert time.monotonic() - began_s >= 0.05
    assert daemon.got["hello"] == 1


def test_a_claim_that_is_refused_leaves_the_source_as_it_was(
    stacks: byway.LayerSource, daemon: FakeDaemon
) -> None:
    stacks.claim(lease_s=9.0)
    daemon.refuses_change["stacks"] = ("conflict", "it is something else")
    with pytest.raises(byway.Conflict):
        stacks.claim(outlines_only=True)
    stacks.replace(discs=PILE)
    assert (daemon.log[-1].message.lease_s, daemon.log[-1].message.outlines_only) == (9.0, None)
