"""Layers of a real daemon: they overlap, they become stale, and what moves in them goes."""

import time

import pytest
from tests.daemon.daemon_harness import Daemon, eventually

import byway
from byway import messages

START, GOAL = (0.0, 0.0, 0.0), (24.0, 0.0, 0.0)
#: Where the vehicle ends.
ON_GOAL = (24.5, 0.0, 0.5)


@pytest.fixture(scope="module")
def daemon(tmp_path_factory):
    started = Daemon(tmp_path_factory.mktemp("daemon"), skills="bywayd.crew.trade")
    with byway.Client(started.endpoints["requests"]) as client:
        eventually(lambda: client.hello().state == "ready", within_s=200.0)  # from a cold cache
    yield started
    started.end()


@pytest.fixture
def driver(daemon):
    with byway.Client(daemon.endpoints["requests"]) as client:
        yield client


@pytest.fixture
def sensor(daemon):
    with byway.Client(daemon.endpoints["requests"]) as client:
        yield client


def kind(driver: byway.Client) -> str:
    return driver.replan("tug", START, GOAL, 0.1).kind


def test_every_layer_blocks_for_itself_whoever_owns_it(driver, sensor, daemon) -> None:
    with byway.Client(daemon.endpoints["requests"]) as other:
        sensor.put("near", discs={"a": ON_GOAL})
        other.put("far", discs={"a": ON_GOAL})
        assert kind(driver) == "goal_blocked"
        sensor.drop("near", ["a"])
        assert kind(driver) == "goal_blocked"
        other.claim("far", lease_s=5.0)
        with pytest.raises(byway.NotOwner):
            sensor.drop("far", ["a"])
        other.drop("far", ["a"])
        assert kind(driver) == "route"


def test_a_track_blocks_until_it_is_told_of_no_more(driver, sensor) -> None:
    stands = byway.Track(pose=(24.5, 0.0, 0.0), radius_m=0.5)
    sensor.track("movers", {"cart": stands}, expires_in_s=0.6)
    told_s = time.monotonic()
    assert kind(driver) == "goal_blocked"
    assert [(view.layer, view.id) for view in driver.site().tracks] == [("movers", "cart")]
    assert driver.health().layers["movers"].tracks == 1
    eventually(lambda: kind(driver) == "route", within_s=3.0)
    assert time.monotonic() - told_s >= 0.6
    assert driver.site().tracks == ()
    assert driver.health().layers["movers"].tracks == 0


def test_a_track_is_carried_to_where_it_is_now(driver, sensor) -> None:
    # It was seen on its way to the goal, and passes it in a second from now.
    comes = byway.Track(pose=(24.5, 6.0, 0.0), radius_m=0.5, velocity_mps=(0.0, -4.0))
    sensor.track("movers", {"cart": comes}, expires_in_s=9.0, age_s=0.5)
    told_s = time.monotonic()
    assert kind(driver) == "goal_blocked"
    eventually(lambda: kind(driver) == "route", within_s=5.0)
    assert 0.8 < time.monotonic() - told_s < 2.5
    (view,) = driver.site().tracks
    assert view.pose[1] < -0.5
    sensor.drop("movers", ["cart"])


def test_a_source_whose_program_hangs_is_found_out_although_it_keeps_its_lease(
    driver, sensor
) -> None:
    settings = {"lease_s": 0.3, "expected_period_s": 0.9, "when_stale": "refuse"}
    # Its library renews the lease every 0.1 s.
    source = sensor.source("lidar", **settings)
    source.put(discs={"far": (90.0, 90.0, 1.0)})
    assert kind(driver) == "route"
    began_s = time.monotonic()
    states = driver.listen(["layers.lidar"], timeout_s=5.0)
    stale = next(states).content
    assert isinstance(stale, messages.LayerState)
    assert (stale.layer, stale.state) == ("lidar", "stale")
    assert 0.6 < time.monotonic() - began_s < 1.5
    assert stale.age_s == pytest.approx(0.9, abs=0.1)
    with pytest.raises(byway.StaleLayer) as caught:
        kind(driver)
    assert caught.value.facts["layer"] == "lidar"
    assert caught.value.retry_after_s == pytest.approx(0.9)
    health = driver.health().layers["lidar"]
    assert (health.stale, health.source) == (True, stale.source)
    source.put(discs={"far": (90.0, 91.0, 1.0)})
    fresh = next(states).content
    assert isinstance(fresh, messages.LayerState)
    assert fresh.state == "fresh"
    assert kind(driver) == "route"
    source.claim(lease_s=0.3, when_stale="ignore")


def test_who_falls_silent_past_the_lease_loses_the_layer_but_what_stands_there_stands(
    driver, sensor, daemon
) -> None:
    with byway.Client(daemon.endpoints["requests"]) as other:
        sensor.claim("stacks", lease_s=0.3)
        sensor.put("stacks", discs={"pile": ON_GOAL})
        states = driver.listen(["layers.stacks"], timeout_s=5.0)
        with pytest.raises(byway.NotOwner):
            other.drop("stacks", ["pile"])
        told = next(states).content
        assert isinstance(told, messages.LayerState)
        assert (told.state, bool(told.source)) == ("forfeited", True)
        assert kind(driver) == "goal_blocked"
        other.drop("stacks", ["pile"])
        assert kind(driver) == "route"
