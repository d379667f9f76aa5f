"""
The layers of the site: what each is, who owns it, and for how long.

Only its owner may change a layer. A claim may carry a lease: nobody else can have the layer until
its owner has said nothing for so long. What an owner put there stays when it is gone, for obstacles
do not go away because a sensor has fallen silent; whoever claims the layer next takes it over.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from byway.messages import Claim, ReplaceLayer, WhenStale
from bywayd.core.alarms import Alarms
from bywayd.core.effects import LayerFlags
from bywayd.core.instants import Duration, Instant
from bywayd.core.invariant import invariant


@dataclass(slots=True)
class Layer:
    """One layer."""

    # -- fixed ---------------------------------------------------------------------------------
    name: str
    flags: LayerFlags
    # -- changed by `Layers` and the ledger only -----------------------------------------------
    owner: str | None = None
    #: Who owns it, or did last.
    last_owner: str | None = None
    lease: Duration | None = None
    #: When a change of it that a source sent last became visible. A claim is none.
    changed_at: Instant | None = None
    #: Whether the site has it: from the first change that became visible.
    is_visible: bool = False
    #: How often a change is expected, since when, and what is done when none comes.
    expected_period: Duration | None = None
    expected_since: Instant | None = None
    when_stale: WhenStale = "ignore"
    #: Whether none has come, and whether that has been told.
    is_stale: bool = False
    is_told_stale: bool = False


@dataclass(frozen=True, slots=True)
class No:
    """Why a change is refused: a code of the protocol, a sentence, facts."""

    code: str
    text: str
    facts: Mapping[str, object]


class Layers:
    """
    Owned by the ledger.

    `heard_at` tells when a source was last heard; None for one that has been forgotten, which has
    been silent longer than any that is known.
    """

    __slots__ = ("_alarms", "_count_max", "_heard_at", "_layers")

    def __init__(
        self,
        declared: Mapping[str, LayerFlags],
        expected: Mapping[str, tuple[float, WhenStale]],
        count_max: int,
        heard_at: Callable[[str], Instant | None],
    ) -> None:
        # -- fixed -----------------------------------------------------------------------------
        self._count_max = max(count_max, len(declared))
        self._heard_at = heard_at
        # -- state -----------------------------------------------------------------------------
        self._layers = {
            name: Layer(name, flags, is_visible=True) for name, flags in declared.items()
        }
        for name, (period_s, when_stale) in expected.items():
            self._layers[name].expected_period = Duration.of_s(period_s)
            self._layers[name].when_stale = when_stale
        #: By name, when the lease of a layer may have ended.
        self._alarms: Alarms[str] = Alarms()

    def __iter__(self) -> Iterator[Layer]:
        return iter(self._layers.values())

    def __len__(self) -> int:
        return len(self._layers)

    def get(self, name: str) -> Layer | None:
        """Return a layer, if there is one of that name."""
        return self._layers.get(name)

    def claim(
        self, source: str, name: str, wanted: Claim | ReplaceLayer, now: Instant
    ) -> Layer | No:
        """
        Give a layer to a source, making it if there is none of that name.

        An owner without a lease loses it to whoever claims it next; one with a lease keeps it.
        Flags that are None stay as they are; for a new layer they are off.
        """
        layer = self._layers.get(name)
        if layer is None:
            if len(self._layers) >= self._count_max:
                text = f"the site has {len(self._layers)} layers, the most is {self._count_max}"
                return No("too_large", text, {"layers_max": self._count_max})
            flags = LayerFlags(
                bool(wanted.unknown_blocks),
                bool(wanted.outlines_only),
                bool(wanted.durable),
                wanted.decay_s,
            )
            layer = Layer(name, flags)
            self._layers[name] = layer
        elif layer.owner not in (None, source) and layer.lease is not None:
            return self._not_owner(layer)
        for flag in ("unknown_blocks", "outlines_only", "durable", "decay_s"):
            told, is_so = getattr(wanted, flag), getattr(layer.flags, flag)
            if told is not None and told != is_so:
                text = f"layer {name} has {flag} {is_so}, and that cannot be changed"
                return No("conflict", text, {"layer": name, "field": flag, "value": is_so})
        layer.owner = layer.last_owner = source
        layer.lease = None if wanted.lease_s is None else Duration.of_s(wanted.lease_s)
        if wanted.expected_period_s is not None:
            layer.expected_period = Duration.of_s(wanted.expected_period_s)
        if wanted.when_stale is not None:
            layer.when_stale = wanted.when_stale
        if layer.lease is None:
            self._alarms.clear(name)
        else:
            self._alarms.set(name, now + layer.lease)
        return layer

    def recall(self, name: str, flags: LayerFlags, terms: Mapping[str, Any]) -> Layer:
        """
        Return the layer that the clerk remembers, as the settings have it if they name it.

        Nobody owns it. It is made even where there are as many layers as there may be: what it
        holds must not be forgotten.
        """
        layer = self._layers.get(name)
        if layer is None:
            layer = self._layers[name] = Layer(name, flags)
            period_s = terms.get("expected_period_s")
            layer.expected_period = None if period_s is None else Duration.of_s(period_s)
            layer.when_stale = terms.get("when_stale", layer.when_stale)
            self._count_max = max(self._count_max, len(self._layers))
        return layer

    def to_change(self, source: str, name: str, now: Instant) -> Layer | No:
        """Return a layer for its owner to change. One that nobody owns is claimed by that."""
        layer = self._layers.get(name)
        if layer is not None and layer.owner == source:
            return layer
        if layer is not None and layer.owner is not None:
            return self._not_owner(layer)
        return self.claim(source, name, Claim(layer=name), now)

    def _not_owner(self, layer: Layer) -> No:
        text = f"layer {layer.name} belongs to {layer.owner}"
        return No("not_owner", text, {"layer": layer.name, "owner": layer.owner})

    def pop_forfeited(self, now: Instant) -> Layer | None:
        """Take a layer away from an owner that has been silent past its lease, if there is one."""
        while (name := self._alarms.pop_due(now)) is not None:
            layer = self._layers[name]
            if layer.owner is None or layer.lease is None:
                continue
            heard_at = self._heard_at(layer.owner)
            if heard_at is not None and heard_at + layer.lease > now:
                self._alarms.set(name, heard_at + layer.lease)
                continue
            layer.owner = None
            return layer
        return None

    def lease_left_s(self, layer: Layer, now: Instant) -> float | None:
        """Return for how long the owner may be silent; None without owner or lease."""
        if layer.owner is None or layer.lease is None:
            return None
        heard_at = self._heard_at(layer.owner)
        return 0.0 if heard_at is None else now.until(heard_at + layer.lease).s

    def next_alarm(self) -> Instant | None:
        """Return when a lease may end."""
        return self._alarms.next()

    def check(self) -> None:
        """Stop with a `Defect` if a lease could be forgotten, or memory is not bounded."""
        self._alarms.check()
        invariant(len(self._layers) <= self._count_max, "layers are bounded")
        for layer in self._layers.values():
            leased = layer.owner is not None and layer.lease is not None
            invariant(not leased or self._alarms.at(layer.name) is not None, "every lease is timed")
