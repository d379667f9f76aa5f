"""Between the ledger's entries and what the clerk keeps of them, both ways."""

from __future__ import annotations

from dataclasses import replace

from byway import messages
from bywayd.core.effects import Change
from bywayd.core.entries import Entry
from bywayd.core.expiries import Expiries
from bywayd.core.front_settings import FrontSettings
from bywayd.core.instants import Instant
from bywayd.core.keepline import KeepLine
from bywayd.core.kept import Keepsake, Recollection
from bywayd.core.layers import Layer, No


def keepsake_of(entry: Entry, change: Change, layer: Layer) -> Keepsake:
    """Return what is to be kept of an entry that has become visible."""
    arrived = None if entry.source is None else entry.arrived
    period = layer.expected_period
    terms = {
        "expected_period_s": None if period is None else period.s,
        "when_stale": layer.when_stale,
    }
    return Keepsake(change, entry.expires_at, terms, arrived, entry.size_bytes)


def recalled_entry(
    recollection: Recollection, layer: Layer, expiries: Expiries, now: Instant
) -> Entry:
    """Return the entry that makes what was kept, and let it expire when it is time."""
    change = replace(recollection.change, settings=layer.flags)
    ids: tuple[str, ...] = ()
    expires_at = None
    # Without room for an expiry the obstacle stays, which is the safer of the two.
    if recollection.expires_in is not None and expiries.room_left > 0:
        ids, expires_at = recollection.ids, now + recollection.expires_in
        expiries.begin(layer.name)
        expiries.coming(layer.name, ids, replaces=False, expires=True)
    size_bytes = len(change.packed)
    return Entry(now, None, 0, change, None, ids, expires_at, size_bytes, is_recalled=True)


def why_never_kept(message: messages.Change, settings: FrontSettings) -> No | None:
    """Return why a layer cannot be claimed as this says: there is nowhere to keep it."""
    is_durable = isinstance(message, messages.Claim | messages.ReplaceLayer) and message.durable
    if settings.keeps or not is_durable:
        return None
    layer, setting = message.layer, settings.keep_setting
    text = f"layer {layer} cannot be durable: there is no file for it, set {setting}"
    return No("conflict", text, {"layer": layer, "field": "durable", "setting": setting})


def why_not_kept(message: messages.Change, line: KeepLine, settings: FrontSettings) -> No | None:
    """
    Return why a change cannot be taken into a durable layer; None if it can.

    Whatever makes room is taken in always.
    """
    layer = message.layer
    if isinstance(message, messages.Scan | messages.Track):
        text = f"layer {layer} is durable, and takes no {message.kind}"
        return No("conflict", text, {"layer": layer, "field": "durable"})
    if not _adds(message):
        return None
    kept_bytes, most_bytes = line.stock.size_bytes, settings.keep_bytes_max
    if kept_bytes + line.size_bytes >= most_bytes:
        text = (
            f"{kept_bytes} bytes of durable layers are kept, the most is {most_bytes}: drop "
            "obstacles, replace a layer by nothing, or allow for more"
        )
        return No("too_large", text, {"bytes": kept_bytes, "bytes_max": most_bytes})
    patches, most = line.stock.patches, settings.keep_patches_max
    if isinstance(message, messages.Patch) and patches >= most:
        text = (
            f"{patches} patches of durable layers are kept, the most is {most}: replace the "
            "layer, then send patches that cover each other"
        )
        return No("too_large", text, {"patches": patches, "patches_max": most})
    return None


def _adds(message: messages.Change) -> bool:
    match message:
        case messages.Put() | messages.ReplaceLayer():
            return bool(message.polygons + message.discs + message.boxes)
        case messages.Patch():
            return True
        case _:
            return False
