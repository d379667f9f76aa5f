"""
How long ago a layer last changed, and what is to be done when that is too long.

A layer may tell how often its owner means to change it. When that time has passed without a
change of a source becoming visible it is stale: nobody minds, or it is reported, or replans that
depend on it are refused as well, until a change makes it fresh again. A claim is no such change:
a source repeats it to keep its lease, and does so while its sensor hangs.
"""

from __future__ import annotations

from collections.abc import Iterable

from byway.messages import ErrorMessage, LayerState
from bywayd.core.alarms import Alarms
from bywayd.core.health import Health
from bywayd.core.instants import Instant
from bywayd.core.invariant import invariant, known
from bywayd.core.layers import Layer, Layers
from bywayd.core.outbox import Outbox, error_of

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
        """A claim may have changed what is expected; one that is repeated changes nothing."""
        if layer.expected_period is not None and layer.expected_since is None:
            layer.expected_since = now
        self._look(layer, now)

    def changed(self, layer: Layer, now: Instant) -> None:
        """A change of a layer has become visible."""
        layer.changed_at = now
        self._look(layer, now)

    @staticmethod
    def _due(layer: Layer) -> Instant | None:
        """Return when a layer is stale if nothing comes; None if nothing is expected of it."""
        if layer.expected_period is None or layer.expected_since is None:
            return None
        since = layer.expected_since
        if layer.changed_at is not None and layer.changed_at > since:
            since = layer.changed_at
        return since + layer.expected_period

    def _look(self, layer: Layer, now: Instant) -> None:
        """See whether a layer is stale, have it looked at again in time, and tell what is new."""
        due = self._due(layer)
        if due is None:
            return
        layer.is_stale = due <= now
        if not layer.is_stale:
            self._alarms.set(layer.name, due)
            if layer.is_told_stale:
                layer.is_told_stale = False
                self.tell(layer, "fresh", now)
            return
        self._alarms.clear(layer.name)
        if layer.when_stale != "ignore" and not layer.is_told_stale:
            layer.is_told_stale = True
            self._health.count("layers_stale_total")
            self._outbox.log("warning", "layer.stale", layer=layer.name, source=layer.last_owner)
            self.tell(layer, "stale", now)

    def settle(self, now: Instant) -> None:
        """Note and tell which layers have become stale."""
        if not self._is_begun:
            self._is_begun = True
            for each in self._layers:
                self.claimed(each, now)
        while (name := self._alarms.pop_due(now)) is not None:
            self._look(known(self._layers.get(name), "a layer that is timed is known"), now)

    def tell(self, layer: Layer, state: str, now: Instant) -> None:
        """Publish what has become of a layer."""
        age_s = _age_s(layer, now)
        message = LayerState(layer=layer.name, state=state, source=layer.last_owner, age_s=age_s)
        self._outbox.publish(TOPIC + layer.name, message)

    def why_not(self, left_out: Iterable[str], now: Instant) -> ErrorMessage | None:
        """
        Return why a replan is refused that leaves these layers out; None if it is not.

        A layer that is stale by now is so even if that has not been noted yet.
        """
        passed = frozenset(left_out)
        for layer in self._layers:
            due = self._due(layer)
            if due is None or now < due or layer.when_stale != "refuse" or layer.name in passed:
                continue
            text = f"layer {layer.name} has not changed for longer than is expected of it"
            facts = {"layer": layer.name, "age_s": _age_s(layer, now)}
            period = known(layer.expected_period, "a layer that can be stale has a period")
            return error_of("stale_layer", text, facts, retry_after_s=period.s)
        return None

    def next_alarm(self) -> Instant | None:
        """Return when a layer may become stale."""
        return self._alarms.next()

    def check(self) -> None:
        """Stop with a `Defect` if a layer could become stale unnoticed."""
        self._alarms.check()
        for layer in self._layers:
            timed = self._alarms.at(layer.name) is not None
            is_watched = timed or layer.is_stale or not self._is_begun
            expects = layer.expected_period is not None
            invariant(not expects or is_watched, "what is expected of a layer is timed")
            is_told = layer.when_stale == "ignore" or layer.is_told_stale
            invariant(not layer.is_stale or is_told, "a layer that is stale is told to be")


def _age_s(layer: Layer, now: Instant) -> float | None:
    return None if layer.changed_at is None else now.since(layer.changed_at).s
