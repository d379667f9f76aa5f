"""
Promises about layers that have not changed for too long, and about owners that keep silent.

On one day all who tell what they expect of a layer tell the same of it, so that the checker knows
the terms without knowing who may tell them. What it cannot know exactly, such as when a claim was
taken in, it takes at the moment that asks least of the core.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

from tests.simulation.promises import promise
from tests.simulation.times import SECOND

from byway import messages

#: Of every lease.
LEASE_NS = SECOND


@dataclass(frozen=True)
class Terms:
    """What is told of a layer if anything is."""

    period_s: float
    when_stale: messages.WhenStale

    @property
    def period_ns(self) -> int:
        return round(self.period_s * SECOND)


class FreshCheck:
    """One life of the daemon."""

    def __init__(self, terms: Mapping[str, Terms], declared: Iterable[str], now_ns: int) -> None:
        self.terms = terms
        #: Since when the front surely knows the terms of a layer.
        self.since_ns = dict.fromkeys(declared, now_ns)
        #: When a change of a source last became visible.
        self.visible_ns: dict[str, int] = {}
        #: What was said of each layer last: "stale" or "fresh".
        self.told: dict[str, str] = {}
        #: When each source was last heard.
        self.heard_ns: dict[str, int] = {}
        self.is_ending = False

    # -- what goes in -------------------------------------------------------------------------

    def acknowledged(self, layer: str, now_ns: int) -> None:
        """A claim was acknowledged that told the terms of a layer."""
        self.since_ns.setdefault(layer, now_ns)

    def became_visible(self, layers: Iterable[str], now_ns: int) -> None:
        """The front hears of a snapshot with changes of these layers."""
        self.visible_ns.update(dict.fromkeys(layers, now_ns))

    # -- what is so ---------------------------------------------------------------------------

    def _is_stale(self, layer: str, now_ns: int) -> bool:
        """Whether a layer is stale beyond doubt."""
        if layer not in self.since_ns:
            return False
        since_ns = max(self.since_ns[layer], self.visible_ns.get(layer, 0))
        return now_ns >= since_ns + self.terms[layer].period_ns

    def _may_be_stale(self, layer: str, now_ns: int) -> bool:
        return now_ns >= self.visible_ns.get(layer, 0) + self.terms[layer].period_ns

    # -- what comes out -----------------------------------------------------------------------

    def accepted(self, ask: messages.Replan, now_ns: int) -> None:
        """A replan is taken in."""
        for layer in self.since_ns:
            if self.terms[layer].when_stale == "refuse" and layer not in ask.leave_out:
                promise(
                    not self._is_stale(layer, now_ns),
                    "no replan is taken in while a layer is stale that it depends on",
                    *(layer, ask.goal),
                )

    def refused(self, ask: messages.Replan, message: messages.ErrorMessage, now_ns: int) -> None:
        """A replan is refused."""
        if message.code != "stale_layer":
            return
        layer = str(message.facts["layer"])
        promise(layer not in ask.leave_out, "a layer that is left out refuses nothing", layer)
        promise(
            self.terms[layer].when_stale == "refuse" and self._may_be_stale(layer, now_ns),
            "replans are refused because of layers that are stale only",
            *(layer, self.visible_ns.get(layer)),
        )

    def layer_state(self, topic: str, message: messages.LayerState, now_ns: int) -> None:
        """An event about a layer leaves the front."""
        layer = message.layer
        promise(topic == f"layers.{layer}", "what becomes of a layer goes to its topic")
        if message.state == "forfeited":
            silent_ns = now_ns - self.heard_ns.get(message.source or "", now_ns)
            promise(
                silent_ns >= LEASE_NS or self.is_ending,
                "a layer is taken from who was silent past the lease only",
                *(message, silent_ns / 1e9),
            )
            return
        last = self.told.get(layer, "fresh")
        promise(message.state != last, "a layer becomes stale or fresh once", message)
        self.told[layer] = message.state
        if message.state == "fresh":
            just_now = self.visible_ns.get(layer) == now_ns
            promise(just_now, "a layer is fresh when it has changed", message)
            return
        promise(
            self._may_be_stale(layer, now_ns) and self.terms[layer].when_stale != "ignore",
            "a layer is told to be stale when it is, and somebody minds",
            message,
        )

    def health(self, message: messages.HealthIs, now_ns: int) -> None:
        """The health record is published."""
        for name, layer in message.layers.items():
            if name in self.terms:
                is_right = layer.stale or not self._is_stale(name, now_ns)
                promise(is_right, "the health record knows what is stale", name)
                is_right = not layer.stale or self._may_be_stale(name, now_ns)
                promise(is_right, "the health record knows what is fresh", name)

    def turn_ends(self, now_ns: int) -> None:
        """All effects of one event are out."""
        for layer in self.since_ns:
            if self.terms[layer].when_stale != "ignore" and self._is_stale(layer, now_ns):
                promise(self.told.get(layer) == "stale", "a layer that is stale is told", layer)
