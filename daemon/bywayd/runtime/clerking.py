"""Between what the core wants kept or has recalled, and what travels to and from the clerk."""

from collections.abc import Callable, Mapping
from dataclasses import asdict, fields
from typing import Any, Final, TypeAlias

from byway import frames, limits, messages
from bywayd.core import effects, kept
from bywayd.core.instants import Duration, Instant

Message: TypeAlias = dict[str, Any]

_MODELS: Final[Mapping[str, type[messages.Change]]] = {
    "put": messages.Put,
    "patch": messages.Patch,
}
_FLAGS: Final = frozenset(field.name for field in fields(effects.LayerFlags))


def keepsake_message(keepsake: kept.Keepsake, host_ns: Callable[[Instant], int]) -> Message:
    """Return a change for the clerk; when it expires is told on the host's own clock."""
    change, expires_at = keepsake.change, keepsake.expires_at
    return {
        "what": change.what,
        "layer": change.layer,
        "settings": {**asdict(change.settings), **keepsake.terms},
        "message": None if change.message is None else change.message.model_dump(),
        "packed": bytes(change.packed),
        "ids": change.ids,
        "expires_ns": None if expires_at is None else host_ns(expires_at),
    }


# -- what the clerk says -------------------------------------------------------------------------


def _stock(message: Message) -> kept.Stock:
    return kept.Stock(int(message["size_bytes"]), int(message["patches"]))


def _recollection(told: Mapping[str, Any]) -> kept.Recollection:
    layer, settings = str(told["layer"]), told["settings"]
    flags = effects.LayerFlags(**{n: v for n, v in settings.items() if n in _FLAGS})
    terms = {n: v for n, v in settings.items() if n not in _FLAGS}
    left_s = told["expires_in_s"]
    what = told["what"]
    if what == "claim":
        return kept.Recollection(effects.Change("claim", layer, flags), terms)
    fields_told = {**told["message"], "layer": layer}
    message = frames.build(_MODELS[what], fields_told)
    return kept.Recollection(
        effects.Change(what, layer, flags, message, told["packed"]),
        terms,
        tuple(map(str, told["ids"])),
        None if left_s is None else Duration.of_s(min(left_s, _left_s_max)),
    )


#: Where a recall begins, in the words of the store.
recall_begin: Final = (0, 0)

#: A wall clock that was set back in between must not make things last for ever.
_left_s_max: Final = float(limits.expiry_s_max)


def _recalled(number: int, message: Message) -> kept.Recalled:
    found = tuple(_recollection(told) for told in message["changes"])
    return kept.Recalled(number, int(message["task"]), found, message["place"])


CLERK_SAYS: Final[Mapping[str, Callable[[int, Message], kept.ClerkEvent]]] = {
    "ready": lambda number, m: kept.ClerkReady(number, _stock(m)),
    "alive": lambda number, _: kept.ClerkAlive(number),
    "hindered": lambda number, m: kept.ClerkHindered(number, str(m["text"])),
    "unfit": lambda number, m: kept.ClerkUnfit(number, str(m["text"])),
    "recalled": _recalled,
    "kept": lambda number, m: kept.ChangesKept(number, int(m["task"]), _stock(m)),
}
