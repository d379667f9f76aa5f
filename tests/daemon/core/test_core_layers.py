"""Who owns which layer, for how long, and what it is."""

from __future__ import annotations

from typing import Any

import pytest
from tests.daemon.core.frontdesk import START, ms

from byway.messages import Claim
from bywayd.core.effects import LayerFlags
from bywayd.core.instants import Instant
from bywayd.core.layers import Layer, Layers, No


class Heard(dict[str, Instant]):
    """When each source was last heard."""


@pytest.fixture
def heard() -> Heard:
    return Heard({"A": START, "B": START})


@pytest.fixture
def layers(heard: Heard) -> Layers:
    return Layers({"fixed": LayerFlags(unknown_blocks=True)}, {}, 3, heard.get)


def claim(
    layers: Layers,
    source: str,
    name: str = "stacks",
    now: Instant = START,
    **wanted: Any,
) -> Layer | No:
    found = layers.claim(source, name, Claim(layer=name, **wanted), now)
    layers.check()
    return found


def refused(found: Layer | No) -> str:
    assert isinstance(found, No)
    return found.code


def test_the_first_claim_makes_a_layer_and_says_what_it_is(layers: Layers) -> None:
    found = claim(layers, "A", outlines_only=True)
    assert isinstance(found, Layer)
    assert found.flags == LayerFlags(outlines_only=True)
    assert found.owner == "A"
    assert not found.is_visible
    assert layers.get("stacks") is found


def test_what_a_layer_is_cannot_be_changed(layers: Layers) -> None:
    assert refused(claim(layers, "A", "fixed", unknown_blocks=False)) == "conflict"
    assert isinstance(claim(layers, "A", "fixed", unknown_blocks=True), Layer)
    assert isinstance(claim(layers, "A", "fixed"), Layer)
    assert refused(claim(layers, "A", "fixed", outlines_only=True)) == "conflict"


def test_how_long_a_layer_remembers_what_was_seen_cannot_be_changed(layers: Layers) -> None:
    found = claim(layers, "A", decay_s=2.0)
    assert isinstance(found, Layer)
    assert found.flags == LayerFlags(decay_s=2.0)
    assert claim(layers, "A") is found
    assert claim(layers, "A", decay_s=2.0) is found
    no = claim(layers, "A", decay_s=3.0)
    assert isinstance(no, No)
    assert no.code == "conflict"
    assert no.facts == {"layer": "stacks", "field": "decay_s", "value": 2.0}
    # One that remembers for ever cannot begin to forget either.
    assert refused(claim(layers, "A", "fixed", decay_s=2.0)) == "conflict"


def test_a_conflict_changes_nothing_that_is_expected(layers: Layers) -> None:
    layer = claim(layers, "A", decay_s=2.0, expected_period_s=1.0, when_stale="report")
    claim(layers, "A", decay_s=3.0, expected_period_s=9.0, when_stale="refuse", lease_s=5.0)
    assert isinstance(layer, Layer)
    assert (layer.expected_period, layer.when_stale, layer.lease) == (ms(1000), "report", None)


def test_a_conflict_does_not_give_the_layer_away(layers: Layers) -> None:
    claim(layers, "A", "fixed", unknown_blocks=False)
    layer = layers.get("fixed")
    assert layer is not None
    assert layer.owner is None


def test_layers_are_bounded(layers: Layers) -> None:
    claim(layers, "A", "one")
    claim(layers, "A", "two")
    assert refused(claim(layers, "A", "three")) == "too_large"
    assert len(layers) == 3


def test_a_layer_without_a_lease_goes_to_whoever_claims_it(layers: Layers) -> None:
    claim(layers, "A")
    found = claim(layers, "B")
    assert isinstance(found, Layer)
    assert found.owner == "B"
    assert refused(layers.to_change("A", "stacks", START)) == "not_owner"


def test_a_layer_with_a_lease_stays_with_its_owner(layers: Layers) -> None:
    claim(layers, "A", lease_s=1.0)
    assert refused(claim(layers, "B")) == "not_owner"
    assert refused(layers.to_change("B", "stacks", START)) == "not_owner"
    assert isinstance(layers.to_change("A", "stacks", START), Layer)


def test_a_change_of_a_layer_that_nobody_owns_claims_it(layers: Layers) -> None:
    found = layers.to_change("A", "new", START)
    assert isinstance(found, Layer)
    assert (found.owner, found.flags) == ("A", LayerFlags())


def test_who_is_silent_past_its_lease_loses_the_layer(layers: Layers, heard: Heard) -> None:
    claim(layers, "A", lease_s=1.0)
    heard["A"] = START + ms(500)
    assert layers.pop_forfeited(START + ms(1000)) is None
    assert layers.next_alarm() == START + ms(1500)
    lost = layers.pop_forfeited(START + ms(1500))
    assert lost is not None
    assert (lost.name, lost.owner) == ("stacks", None)
    assert isinstance(claim(layers, "B", now=START + ms(1500)), Layer)


def test_a_claim_without_a_lease_ends_the_one_before(layers: Layers) -> None:
    claim(layers, "A", lease_s=1.0)
    claim(layers, "A")
    assert layers.next_alarm() is None
    assert layers.pop_forfeited(START + ms(9000)) is None


def test_a_source_that_was_forgotten_has_been_silent_for_longest(
    layers: Layers, heard: Heard
) -> None:
    found = claim(layers, "A", lease_s=1.0)
    assert isinstance(found, Layer)
    del heard["A"]
    assert layers.lease_left_s(found, START) == 0.0
    assert layers.pop_forfeited(START + ms(1000)) is found


def test_the_time_left_of_a_lease_is_told(layers: Layers, heard: Heard) -> None:
    found = claim(layers, "A", lease_s=1.0)
    assert isinstance(found, Layer)
    assert layers.lease_left_s(found, START + ms(400)) == pytest.approx(0.6)
    assert layers.lease_left_s(found, START + ms(4000)) == 0.0
    found = claim(layers, "A")
    assert isinstance(found, Layer)
    assert layers.lease_left_s(found, START) is None


def test_the_end_of_a_lease_that_nobody_holds_any_more_is_passed_over(layers: Layers) -> None:
    found = claim(layers, "A", lease_s=1.0)
    assert isinstance(found, Layer)
    found.owner = None
    assert layers.pop_forfeited(START + ms(2000)) is None
