"""
From a message of a source to what stands in the line, or to why it is refused.

What can be seen without looking into the geometry is decided here: whose the layer is, what it is,
what expires when. The rest is for the surveyor.
"""

from __future__ import annotations

from typing import Literal, TypeAlias

from byway import messages, obstacles
from byway.errors import SenderFault
from byway.packed import Bytes
from bywayd.core.effects import Change
from bywayd.core.entries import Entry
from bywayd.core.expiries import Expiries
from bywayd.core.freshness import Freshness
from bywayd.core.front_settings import FrontSettings
from bywayd.core.instants import Duration, Instant
from bywayd.core.keepline import KeepLine
from bywayd.core.keepsakes import why_never_kept, why_not_kept
from bywayd.core.layers import Layer, Layers, No
from bywayd.core.sources import Source

#: What a layer of outlines does not take.
_NOT_AMONG_OUTLINES = (messages.Patch, messages.Scan, messages.Track)
_What: TypeAlias = Literal["put", "replace", "track"]


class Changes:
    """Owned by the ledger, whose layers and expiries it fills."""

    def __init__(
        self,
        settings: FrontSettings,
        layers: Layers,
        freshness: Freshness,
        expiries: Expiries,
        keepline: KeepLine,
    ) -> None:
        self._settings = settings
        self._layers = layers
        self._freshness = freshness
        self._expiries = expiries
        self._keepline = keepline

    def entry(
        self, source: Source, message: messages.Change, packed: Bytes, size: int, now: Instant
    ) -> Entry | No:
        """Return the entry for a change of a source, or why it is refused."""
        no = why_never_kept(message, self._settings)
        if no is not None:
            return no
        match message:
            case messages.Claim() | messages.ReplaceLayer():
                layer = self._layers.claim(source.name, message.layer, message, now)
                if not isinstance(layer, No):
                    self._freshness.claimed(layer, now)
            case _:
                layer = self._layers.to_change(source.name, message.layer, now)
        if isinstance(layer, No):
            return layer
        if layer.flags.durable:
            no = why_not_kept(message, self._keepline, self._settings)
            if no is not None:
                return no
        return self._entry_for(layer, source, message, packed, size, now)

    def _entry_for(
        self,
        layer: Layer,
        source: Source,
        message: messages.Change,
        packed: Bytes,
        size: int,
        now: Instant,
    ) -> Entry | No:
        name, flags, number = layer.name, layer.flags, source.have
        if flags.outlines_only and isinstance(message, _NOT_AMONG_OUTLINES):
            text = f"layer {name} holds outlines only: no cells, and nothing that moves"
            return No("conflict", text, {"layer": name, "field": "outlines_only"})
        match message:
            case messages.Put() | messages.ReplaceLayer() | messages.Track():
                return self._obstacles(layer, source, message, packed, size, now)
            case messages.Scan():
                change = Change("scan", name, flags, message, packed, as_of=_seen(message, now))
            case messages.Drop():
                change = Change("drop", name, flags, ids=tuple(message.ids))
            case messages.Patch():
                change = Change("patch", name, flags, message, packed)
            case _:
                change = Change("claim", name, flags)
        return Entry(now, source.name, number, change, size_bytes=size)

    def _obstacles(
        self,
        layer: Layer,
        source: Source,
        message: messages.Put | messages.ReplaceLayer | messages.Track,
        packed: Bytes,
        size: int,
        now: Instant,
    ) -> Entry | No:
        """Obstacles by their ids, of which some may expire; tracks always do."""
        what: _What = "put"
        as_of = None
        after_s = message.expires_in_s
        if isinstance(message, messages.Track):
            what, as_of = "track", _seen(message, now)
            after_s = self._settings.track_expires_s if after_s is None else after_s
        elif isinstance(message, messages.ReplaceLayer):
            what = "replace"
        ids = self._ids(message, packed, expires=after_s is not None)
        if isinstance(ids, No):
            return ids
        expires_at = None if after_s is None else now + Duration.of_s(after_s)
        replaces, expires = what == "replace", expires_at is not None
        self._expiries.coming(layer.name, ids, replaces=replaces, expires=expires)
        change = Change(what, layer.name, layer.flags, message, packed, as_of=as_of)
        return Entry(
            now,
            source.name,
            source.have,
            change,
            ids=ids,
            expires_at=expires_at,
            size_bytes=size,
        )

    def _ids(
        self,
        message: messages.Put | messages.ReplaceLayer | messages.Track,
        packed: Bytes,
        *,
        expires: bool,
    ) -> tuple[str, ...] | No:
        """Return the ids of obstacles that are put, if they matter here."""
        boxes = 0 if isinstance(message, messages.Track) else message.boxes
        layer, count = message.layer, message.polygons + message.discs + boxes
        if not expires:
            if not self._expiries.is_timed(layer):
                return ()
        elif count > self._expiries.room_left:
            most = self._settings.expiries_max
            return No(
                "too_large",
                f"{count} more obstacles with an expiry would be too many, the most is {most}",
                {"obstacles": count, "expiries_max": most},
            )
        try:
            ids = tuple(obstacles.ids_of(message.columns, packed, count))
        except SenderFault as fault:
            return No(fault.code, fault.text, fault.facts)
        if expires:
            self._expiries.begin(layer)
        return ids


def _seen(message: messages.Scan | messages.Track, now: Instant) -> Instant:
    """When something was seen that is told of now."""
    return now - Duration.of_s(message.age_s)
