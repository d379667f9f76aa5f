"""
How long ago a layer last changed, and what is to be done when that is too long.

A layer may tell how often its owner means to change it. When that time has passed without a
change becoming visible it is stale: nobody minds, or it is reported, or replans that depend on it
are refused as well, until a change makes it fresh again.
"""

from __future__ import annotations

from collections.abc import Iterable

from byway.messages import LayerState
from bywayd.core.alarms import Alarms
from bywayd.core.health import Health
from bywayd.core.instants import Instant
from bywayd.core.invariant import invariant
from bywayd.core.layers import Layer, Layers
from bywayd.core.outbox import Outbox

#: What a topic about a layer begins with.
TOPIC = "layers."


class Freshness:
    """Owned by the ledger."""

    __slots__ = ("_alarms", "_health", "_is_begun", "_layers", "_outbox")

    def __init__(self, layers: Layers, outbox: Outbox, health: Health) -> None:
        # -- shared with the rest of the front -------------------------------------------------
        self._layers = layers
        self._outbox = outbox
        self._health = health
        # -- state -----------------------------------------------------------------------------
        #: By name, when a layer becomes stale if nothing comes.
        self._alarms: Alarms[str] = Alarms()
        #: Whether the time has begun for what the settings expect.
        self._is_begun = False

    def claimed(self, layer: Layer, now: Instant) -> None:
        """A claim may have changed what is expected; the time begins anew."""
        self._set(layer, now)

    def changed(self, layer: Layer, now: Instant) -> None:
        """A change of a layer has become visible."""
        layer.changed_at = now
        if layer.is_stale:
            layer.is_stale = False
            self.tell(layer, "fresh", now)
        self._set(layer, now)

    def _set(self, layer: Layer, now: Instant) -> None:
        if layer.expected_period is None or layer.when_stale == "ignore":
            self._alarms.clear(layer.name)
            if layer.is_stale:
                layer.is_stale = False
                self.tell(layer, "fresh", now)
        elif not layer.is_stale:
            self._alarms.set(layer.name, now + layer.expected_period)

    def settle(self, now: Instant) -> None:
        """Note and tell which layers have become stale."""
        if not self._is_begun:
            self._is_begun = True
            for each in self._layers:
                self._set(each, now)
        while (name := self._alarms.pop_due(now)) is not None:
            layer = self._layers.get(name)
            if layer is not None:
                layer.is_stale = True
                self._health.count("layers_stale_total")
                self._outbox.log("warning", "layer.stale", layer=name, source=layer.owner)
                self.tell(layer, "stale", now)

    def tell(self, layer: Layer, state: str, now: Instant) -> None:
        """Publish what has become of a layer."""
        age_s = None if layer.changed_at is None else now.since(layer.changed_at).s
        message = LayerState(layer=layer.name, state=state, source=layer.owner, age_s=age_s)
        self._outbox.publish(TOPIC + layer.name, message)

    def refusing(self, left_out: Iterable[str]) -> Layer | None:
        """Return a stale layer because of which replans are refused, if there is one."""
        passed = frozenset(left_out)
        for layer in self._layers:
            if layer.is_stale and layer.when_stale == "refuse" and layer.name not in passed:
                return layer
        return None

    def next_alarm(self) -> Instant | None:
        """Return when a layer may become stale."""
        return self._alarms.next()

    def check(self) -> None:
        """Stop with a `Defect` if a layer could become stale unnoticed."""
        self._alarms.check()
        for layer in self._layers:
            expects = layer.expected_period is not None and layer.when_stale != "ignore"
            timed = self._alarms.at(layer.name) is not None
            is_watched = timed or layer.is_stale or not self._is_begun
            invariant(not expects or is_watched, "what is expected of a layer is timed")
