"""Layers that have not changed for too long: noted, told, and what is refused because of them."""

from __future__ import annotations

import pytest
from tests.daemon.core.coursetables import straight
from tests.daemon.core.frontdesk import Desk, ms, put, replace, settings
from tests.daemon.core.guarddesk import GuardDesk, block
from tests.daemon.core.movingdesk import batch, scan, states

from byway import messages
from bywayd.core import effects, events
from bywayd.core.effects import LayerFlags


@pytest.fixture
def desk() -> Desk:
    return Desk().open()


def claim(desk: Desk, *, source: str = "s", after_ms: float = 0.0, **fields: object) -> None:
    """A source claims the layer, and the surveyor is done with that at once."""
    desk.change(messages.Claim(layer="lidar", **fields), source=source, after_ms=after_ms)  # type: ignore[arg-type]
    desk.publish(batch(desk), after_ms=0.0)


def see(desk: Desk, *, after_ms: float = 0.0) -> None:
    """The source has seen something, and it is visible at once."""
    desk.change(*scan("lidar"), after_ms=after_ms)
    desk.publish(batch(desk), after_ms=0.0)


def told(desk: Desk) -> list[str]:
    """What the last event had published about layers."""
    return [message.state for message in states(desk)]


def is_refused(desk: Desk, id: str, **fields: object) -> bool:
    """Whether a replan is refused because a layer is stale."""
    desk.ask(id, **fields)
    if desk.all_of(effects.StartJob) or len(desk.front.dispatch.room):
        return False
    return desk.error(id) == "stale_layer"


def is_stale(desk: Desk, layer: str = "lidar") -> bool:
    desk.say(messages.Health())
    record = desk.answer("q")
    assert isinstance(record, messages.HealthIs)
    return record.layers[layer].stale


# -- noted and told --------------------------------------------------------------------------------


def test_a_layer_that_does_not_change_in_time_is_stale_and_fresh_when_it_does(desk: Desk) -> None:
    claim(desk, expected_period_s=1.0, when_stale="report")
    see(desk, after_ms=200)
    desk.tick(999)
    assert states(desk) == []
    desk.tick(1)
    (message,) = states(desk)
    assert (message.state, message.source, message.age_s) == ("stale", "s", 1.0)
    assert is_stale(desk)
    desk.tick(500)
    assert told(desk) == []  # once
    see(desk)
    (message,) = states(desk)
    assert (message.state, message.age_s) == ("fresh", 0.0)
    assert not is_stale(desk)
    desk.tick(1_000)
    assert told(desk) == ["stale"]
    assert desk.count("layers_stale_total") == 2


def test_time_counts_from_when_a_change_is_visible_not_from_its_arrival(desk: Desk) -> None:
    claim(desk, expected_period_s=1.0, when_stale="report")
    desk.change(*scan("lidar"), after_ms=900)
    desk.tick(100)
    assert told(desk) == ["stale"]
    desk.publish(2)
    assert told(desk) == ["fresh"]


def test_before_the_first_change_time_counts_from_the_claim(desk: Desk) -> None:
    claim(desk, expected_period_s=1.0, when_stale="report")
    desk.tick(1_000)
    (message,) = states(desk)
    assert (message.state, message.age_s) == ("stale", None)


def test_what_is_expected_later_counts_from_then(desk: Desk) -> None:
    see(desk)
    claim(desk, expected_period_s=1.0, when_stale="report", after_ms=60_000)
    assert told(desk) == []
    desk.tick(999)
    assert told(desk) == []
    desk.tick(1)
    assert [(m.state, m.age_s) for m in states(desk)] == [("stale", 61.0)]


def test_a_claim_that_is_repeated_keeps_no_layer_fresh(desk: Desk) -> None:
    claim(desk, expected_period_s=1.0, when_stale="refuse", lease_s=0.9)
    see(desk)
    for _ in range(3):
        claim(desk, lease_s=0.9, after_ms=300)
    desk.tick(100)
    (message,) = states(desk)
    assert (message.state, message.age_s) == ("stale", 1.0)
    claim(desk, expected_period_s=1.0, when_stale="refuse", lease_s=0.9)
    assert told(desk) == []
    assert is_refused(desk, "a")


def test_neither_does_what_expires_nor_what_is_refused(desk: Desk) -> None:
    claim(desk, expected_period_s=1.0, when_stale="report")
    desk.change(*put("lidar", "a", expires_in_s=0.5))
    desk.publish(batch(desk), after_ms=0.0)
    desk.tick(500)
    desk.publish(batch(desk), after_ms=0.0)
    desk.change(*put("lidar", "a"), after_ms=100)
    desk.publish(batch(desk), events.Refusal(0, "bad_geometry", "no", {}), after_ms=0.0)
    desk.tick(400)
    assert told(desk) == ["stale"]


def test_a_new_owner_has_to_send_something_before_its_layer_is_fresh(desk: Desk) -> None:
    claim(desk, expected_period_s=1.0, when_stale="refuse")
    desk.tick(1_000)
    claim(desk, source="other")
    assert told(desk) == []
    assert is_refused(desk, "a")
    desk.change(*replace("lidar"), source="other")
    desk.publish(batch(desk))
    assert [(m.state, m.source) for m in states(desk)] == [("fresh", "other")]


def test_a_longer_period_makes_a_layer_fresh_that_has_changed_within_it(desk: Desk) -> None:
    claim(desk, expected_period_s=1.0, when_stale="report")
    desk.tick(1_000)
    claim(desk, expected_period_s=3.0)
    # The claim itself is what tells it, not its becoming visible.
    assert desk.front.ledger.layers.get("lidar").is_stale is False  # type: ignore[union-attr]
    desk.tick(1_999)
    assert told(desk) == []
    desk.tick(1)
    assert told(desk) == ["stale"]


def test_a_shorter_period_makes_a_layer_stale_at_once(desk: Desk) -> None:
    claim(desk, expected_period_s=3.0, when_stale="report")
    desk.change(messages.Claim(layer="lidar", expected_period_s=0.5), after_ms=1_000)
    assert told(desk) == ["stale"]


def test_nobody_hears_of_a_layer_that_nobody_minds_until_somebody_does(desk: Desk) -> None:
    claim(desk, expected_period_s=1.0)
    desk.tick(1_000)
    assert told(desk) == []
    assert is_stale(desk)
    assert not is_refused(desk, "a")
    desk.change(messages.Claim(layer="lidar", when_stale="report"))
    assert told(desk) == ["stale"]
    # What listeners know stays true when nobody minds any more.
    desk.change(messages.Claim(layer="lidar", when_stale="ignore"))
    assert told(desk) == []
    desk.publish(2)
    desk.publish(3)
    see(desk)
    assert told(desk) == ["fresh"]


def test_what_is_done_about_a_stale_layer_may_change_both_ways(desk: Desk) -> None:
    claim(desk, expected_period_s=1.0, when_stale="report")
    desk.tick(1_000)
    assert told(desk) == ["stale"]
    assert not is_refused(desk, "a")
    desk.change(messages.Claim(layer="lidar", when_stale="refuse"))
    assert told(desk) == []  # it is known already
    assert is_refused(desk, "b")
    desk.change(messages.Claim(layer="lidar"))
    assert is_refused(desk, "c")
    desk.change(messages.Claim(layer="lidar", when_stale="ignore"))
    assert not is_refused(desk, "d")


def test_what_is_expected_may_be_told_with_the_whole_layer(desk: Desk) -> None:
    fields = {"expected_period_s": 1.0, "when_stale": "report", "decay_s": 5.0}
    desk.change(*replace("lidar", "a", **fields))
    assert desk.one(effects.ApplyChanges).changes[0].settings == LayerFlags(decay_s=5.0)
    desk.publish(batch(desk), after_ms=0.0)
    desk.change(*replace("lidar", "a", expected_period_s=2.0))
    desk.publish(batch(desk), after_ms=0.0)
    desk.tick(1_999)
    assert told(desk) == []
    desk.tick(1)
    assert told(desk) == ["stale"]


def test_a_whole_layer_that_is_refused_has_told_what_is_expected_all_the_same(desk: Desk) -> None:
    desk.change(*replace("lidar", "a", expected_period_s=1.0, when_stale="report"))
    desk.publish(batch(desk), events.Refusal(0, "bad_geometry", "no", {}), after_ms=0.0)
    desk.tick(1_000)
    (message,) = states(desk)
    assert (message.state, message.age_s) == ("stale", None)


def test_the_ledger_is_woken_when_a_layer_becomes_stale_and_not_again(desk: Desk) -> None:
    claim(desk, expected_period_s=0.05, when_stale="report")
    assert desk.front.ledger.next_alarm() == desk.now + ms(50)
    desk.tick(50)
    assert told(desk) == ["stale"]
    assert desk.front.ledger.freshness.next_alarm() is None


def test_a_shorter_period_leaves_no_alarm_behind(desk: Desk) -> None:
    claim(desk, expected_period_s=3.0, when_stale="report")
    desk.change(messages.Claim(layer="lidar", expected_period_s=0.5), after_ms=1_000)
    assert desk.front.ledger.freshness.next_alarm() is None


def test_a_layer_of_which_nothing_is_expected_is_never_stale(desk: Desk) -> None:
    claim(desk, when_stale="refuse")
    desk.tick(1e9)
    assert told(desk) == []
    assert not is_stale(desk)
    assert not is_refused(desk, "a")


def test_a_layer_that_is_taken_from_its_owner_is_told_with_who_it_was(desk: Desk) -> None:
    claim(desk, lease_s=1.0)
    desk.tick(1_000)
    assert [(m.state, m.layer, m.source) for m in states(desk)] == [("forfeited", "lidar", "s")]


# -- refused ---------------------------------------------------------------------------------------


def test_replans_are_refused_while_a_layer_is_stale_that_they_depend_on(desk: Desk) -> None:
    claim(desk, expected_period_s=0.5, when_stale="refuse")
    see(desk)
    assert not is_refused(desk, "a", after_ms=499.0)
    desk.tick(1)
    desk.ask("b", after_ms=100)
    error = desk.answer("b")
    assert isinstance(error, messages.ErrorMessage)
    assert (error.code, error.facts) == ("stale_layer", {"layer": "lidar", "age_s": 0.6})
    assert error.retry_after_s == 0.5
    see(desk)
    assert not is_refused(desk, "c")


def test_a_replan_is_refused_that_comes_before_the_alarm_but_after_the_time(desk: Desk) -> None:
    claim(desk, expected_period_s=0.5, when_stale="refuse")
    assert is_refused(desk, "a", after_ms=500.0)
    assert told(desk) == ["stale"]


def test_a_replan_that_was_taken_in_before_is_answered(desk: Desk) -> None:
    claim(desk, expected_period_s=0.5, when_stale="refuse")
    desk.ask("a", budget_s=1.0, after_ms=400.0)
    desk.tick(200)
    assert told(desk) == ["stale"]
    assert desk.replies() == []
    assert len(desk.front.answering.open) == 1


def test_a_layer_that_is_only_reported_refuses_nothing(desk: Desk) -> None:
    claim(desk, expected_period_s=0.5, when_stale="report")
    assert not is_refused(desk, "a", after_ms=600.0)


def test_a_replan_that_leaves_the_stale_layer_out_is_served() -> None:
    flags = {"outlines": LayerFlags(outlines_only=True)}
    desk = Desk(settings(layers=flags, expected={"outlines": (0.5, "refuse")})).open()
    desk.tick(500)
    assert [(m.state, m.source, m.age_s) for m in states(desk)] == [("stale", None, None)]
    assert is_refused(desk, "a")
    assert not is_refused(desk, "b", leave_out=["outlines"])


def test_a_guard_is_no_replan_but_its_new_routes_are() -> None:
    desk = GuardDesk()
    desk.open()
    claim(desk, expected_period_s=0.5, when_stale="refuse")
    desk.tick(500)
    desk.guard(rows=straight(20.0), replan_on_alert=True)
    desk.saw(None)
    desk.saw(block(12.0))
    alert, failed = desk.published()
    assert isinstance(alert, messages.Alert)
    assert isinstance(failed, messages.RerouteFailed)
    assert failed.reason == "stale_layer"
    assert not desk.all_of(effects.StartJob)
    assert len(desk.front.guards) == 1
