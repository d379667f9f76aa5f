"""
What the owner of a key may do.

The runtime knows the key of every message, from the handshake of the connection that it came by;
the list of those who are allowed gives it a role. Four roles:

* watcher   looks at everything: site, health, vehicles, events,
* driver    asks for routes and has them guarded, too,
* source    changes layers, all or those that the list names, and looks,
* operator  may do everything.

A driver for whom the list names layers is a source of these as well: a vehicle with a sensor.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal, TypeAlias

from byway import messages
from byway.errors import Forbidden

Role: TypeAlias = Literal["source", "driver", "watcher", "operator"]
ROLES: Final[tuple[Role, ...]] = ("source", "driver", "watcher", "operator")

#: What everybody may ask who is let in.
_LOOKING: Final = frozenset(
    model.kind for model in (messages.Hello, messages.Health, messages.Vehicles, messages.Site)
)
_DRIVING: Final = frozenset(
    model.kind
    for model in (
        messages.Replan,
        messages.Cancel,
        messages.Finish,
        messages.Guard,
        messages.Progress,
        messages.Release,
    )
)


@dataclass(frozen=True, slots=True)
class Rights:
    """What one key may do."""

    #: None: it is on the list no longer, and nothing is left.
    role: Role | None
    #: Of the owner, as in the list. Two keys do not have the same.
    name: str
    #: Names of layers that it may change; one that ends with * stands for all that begin so.
    layers: tuple[str, ...] = ()

    @property
    def may_change(self) -> bool:
        """Whether there can be a layer that it may change."""
        return self.role in ("source", "operator") or (self.role == "driver" and bool(self.layers))

    def may_change_layer(self, layer: str) -> bool:
        """Whether it may change this layer."""
        if not self.may_change:
            return False
        # A list that names none leaves a source all of them.
        return not self.layers or any(_fits(layer, pattern) for pattern in self.layers)

    def may_ask(self, kind: str) -> bool:
        """Whether it may send this kind of request."""
        if kind in _LOOKING:
            return self.role is not None
        if kind in _DRIVING:
            return self.role in ("driver", "operator")
        return self.role == "operator"


def _fits(layer: str, pattern: str) -> bool:
    if pattern.endswith("*"):
        return layer.startswith(pattern[:-1])
    return layer == pattern


def refusal(rights: Rights | None, message: messages.Message) -> Forbidden | None:
    """
    Return why a message must not be served; None if it may.

    Args:
        rights: Of its sender; None where no keys are in use, and everything is allowed.
    """
    if rights is None:
        return None
    kind, facts = message.kind, {"role": rights.role or "", "kind": message.kind}
    if rights.role is None:
        return Forbidden("the key is on the list no longer", facts)
    if isinstance(message, messages.Change):
        if rights.may_change_layer(message.layer):
            return None
        facts["layer"] = message.layer
        if rights.may_change:
            return Forbidden(f"{rights.name} may not change layer {message.layer}", facts)
    elif rights.may_ask(kind):
        return None
    return Forbidden(f"{rights.name} is a {rights.role}, who may not send {kind}", facts)
