"""The daemon as it is served: real planning, real processes, bare frames."""

import os
import signal
import subprocess
import sys
import time

import numpy as np
import pytest
from tests.daemon.daemon_harness import ROOT, Daemon, Peer, eventually

from byway import frames, messages, obstacles
from byway.packed import read

KILN_M = [(8.0, -6.0), (10.0, -6.0), (10.0, 6.0), (8.0, 6.0)]


@pytest.fixture(scope="module")
def served(tmp_path_factory):
    daemon = Daemon(tmp_path_factory.mktemp("daemon"), skills="bywayd.crew.trade")
    peer = Peer(daemon)
    peer.when_ready(within_s=200.0)  # from a cold cache
    yield daemon, peer
    peer.close()
    daemon.end()


@pytest.fixture
def daemon(served):
    return served[0]


@pytest.fixture
def peer(served):
    for layer in ("fixed", "sudden"):
        served[1].decided(served[1].change(_layer(layer)[0], _layer(layer)[1]))
    return served[1]


def _layer(layer, **polygons):
    fields, packed = obstacles.pack_shapes(obstacles.shapes(polygons, None))
    return messages.ReplaceLayer(layer=layer, **fields), packed


def _ask(peer, budget_s, **more):
    return peer.send(
        messages.Replan(
            vehicle="tug",
            unit="tug-1",
            start=(0.0, 0.0, 0.0),
            goal=(18.0, 0.0, 0.0),
            budget_s=budget_s,
            **more,
        )
    )


def _answer(peer, id):
    """Return the answer to a replan with its outcome and its rows."""
    while True:
        came = peer.hear()
        if came.header.id == id and not isinstance(came.message, messages.Accepted):
            break
    assert isinstance(came.message, messages.AnswerMessage), came.message
    outcome = frames.decode_outcome(came.message.outcome, came.packed)
    rows = {name: read(column, came.packed) for name, column in outcome.columns.items()}
    return came.message, outcome, rows


def _within_kiln(rows):
    x, y = rows["x_m"], rows["y_m"]
    return bool(((x > 7.0) & (x < 11.0) & (np.abs(y) < 6.0)).any())


def test_a_route_leads_round_what_was_acknowledged_before(peer):
    _, outcome, rows = _answer(peer, _ask(peer, 0.3))
    assert outcome.cost == pytest.approx(18.0)
    done = peer.decided(peer.change(*_layer("fixed", kiln=KILN_M)))
    answer, outcome, rows = _answer(peer, _ask(peer, 0.3))
    assert answer.revision >= done.revision
    assert outcome.kind == "route"
    assert not _within_kiln(rows)
    assert rows["t_s"][0] == 0.0
    assert (rows["speed_mps"][-1], rows["gear"][-1]) == (0.0, 0)


def test_a_route_that_is_blocked_while_it_is_made_does_not_leave(peer):
    """What becomes visible before the answer counts, though planning began before it."""
    wall_m = [(7.5, -20.0), (8.5, -20.0), (8.5, -5.0), (7.5, -5.0)]
    peer.decided(peer.change(*_layer("fixed", kiln=KILN_M)))  # the way round it is not proved best
    id = _ask(peer, 20.0)
    time.sleep(0.3)
    above_m = [(x, -y) for x, y in wall_m]
    done = peer.decided(peer.change(*_layer("sudden", below=wall_m, above=above_m)))
    peer.send(messages.Finish(replan=id))
    answer, outcome, rows = _answer(peer, id)
    assert answer.revision >= done.revision
    # All that led round the kiln within reach is blocked now; what leaves must be on the far
    # side of the walls' ends, or nothing.
    if outcome.kind == "route":
        assert float(np.abs(rows["y_m"]).max()) > 20.0


def test_a_finish_brings_the_best_there_is_now(peer):
    peer.decided(peer.change(*_layer("fixed", kiln=KILN_M)))
    id = _ask(peer, 30.0)
    time.sleep(0.2)
    began_s = time.monotonic()
    peer.send(messages.Finish(replan=id))
    _, outcome, _ = _answer(peer, id)
    assert time.monotonic() - began_s < 2.0
    assert outcome.kind == "route"


def test_better_routes_are_published_as_they_are_found(peer):
    peer.decided(peer.change(*_layer("fixed", kiln=KILN_M)))
    peer.subscribe("better.tug-1")
    id = _ask(peer, 0.4)
    _, outcome, _ = _answer(peer, id)
    costs = []
    while not costs or costs[-1] > outcome.cost * 1.0001:
        came = peer.hear(name="events")
        if came.header.id == id:
            costs.append(frames.decode_outcome(came.message.outcome, came.packed).cost)
    assert costs == sorted(costs, reverse=True)


def test_a_surveyor_that_dies_leaves_its_site_to_the_next(daemon, peer):
    done = peer.decided(peer.change(*_layer("fixed", kiln=KILN_M)))
    surveyor = next(p for name, p in daemon.family().items() if name.startswith("byway-surv"))
    os.kill(surveyor, signal.SIGKILL)
    _, outcome, rows = _answer(peer, _ask(peer, 0.3))
    assert not _within_kiln(rows)
    again = peer.decided(peer.change(*_layer("sudden", post=[(30, 30), (31, 30), (31, 31)])))
    assert again.revision > done.revision
    _, outcome, rows = _answer(peer, _ask(peer, 0.3))
    assert outcome.kind == "route"
    assert not _within_kiln(rows)


def test_senseless_requests_get_errors_of_their_own(peer):
    for more, code in (
        ({"method": "magic"}, "bad_value"),
        ({"start_curvature_per_m": 9.0}, "bad_value"),
        ({"leave_out": ["fixed"]}, "bad_value"),
    ):
        id = _ask(peer, 0.3, **more)
        reply = peer.answer_to(id)
        assert isinstance(reply, messages.ErrorMessage), more
        assert reply.code == code


def test_the_health_record_has_the_memory_of_every_process(daemon, peer):
    def all_known():
        known = peer.ask(messages.Health()).memory_bytes
        names = {"front", "template", "surveyor", "site"}
        return known if names <= known.keys() and any("worker" in n for n in known) else None

    known = eventually(all_known, within_s=20.0)
    assert 10e6 < known["front"] < 100e6


def test_the_front_knows_no_compiler():
    """The loop's process stays small, and nothing can begin to compile beside it."""
    told = "import bywayd.runtime, bywayd.settings, sys; print(*sorted(sys.modules))"
    loaded = subprocess.run(
        [sys.executable, "-c", told], capture_output=True, check=True, text=True, cwd=ROOT
    ).stdout.split()
    assert "zmq" in loaded
    assert not {"numba", "scipy", "byway_planning", "matplotlib"} & set(loaded)
