"""A desk with a clerk: durable layers, what is kept of them, what is recalled."""

from __future__ import annotations

from typing import Any

from tests.daemon.core.frontdesk import Desk, put, settings

from byway import messages
from bywayd.core import effects, kept
from bywayd.core.effects import Change, LayerFlags
from bywayd.core.instants import Duration
from bywayd.core.kept import Recollection, Stock

DURABLE = LayerFlags(durable=True)
CLAIM = messages.Claim(layer="stacks", durable=True)


def started(**told: Any) -> Desk:
    """A desk with a site and workers, whose clerk has not said anything yet."""
    return Desk(settings(keeps=True, **told)).open()


def opened(*found: Recollection, **told: Any) -> Desk:
    """A desk whose clerk has recalled something, and that is visible."""
    desk = started(**told)
    desk.hand_in(kept.ClerkReady(1, Stock(100, 0)))
    recall = desk.one(kept.RecallChanges)
    desk.hand_in(kept.Recalled(1, recall.task, found, None))
    for apply in desk.all_of(effects.ApplyChanges):
        desk.publish(apply.batch)
    return desk


def durable(**told: Any) -> Desk:
    """A desk with a durable layer "stacks" of source "s", and a live one "moving" of "m"."""
    desk = opened(**told)
    desk.change(CLAIM)
    desk.publish(1)
    done(desk)
    desk.change(messages.Claim(layer="moving"), source="m")
    desk.publish(2)
    return desk


def batch_of(desk: Desk) -> int:
    return desk.one(effects.ApplyChanges).batch


def done(desk: Desk, stock: Stock = Stock(100, 0), after_ms: float = 4.0) -> None:  # noqa: B008
    """The clerk has committed what it was given last."""
    task = desk.one(kept.KeepChanges).task
    desk.hand_in(kept.ChangesKept(1, task, stock), after_ms)


def told(desk: Desk) -> list[tuple[str, str, int]]:
    """What sources were told by the last event: kind, source, number."""
    return [
        (message.kind, message.source, message.number)
        for _, message in desk.replies()
        if isinstance(message, messages.Acknowledged | messages.Refused)
    ]


def kept_of(desk: Desk) -> list[tuple[str, str]]:
    return [
        (keepsake.change.what, keepsake.change.layer)
        for keepsake in desk.one(kept.KeepChanges).keepsakes
    ]


def recollection(obstacle: str, expires_in_s: float | None = None) -> Recollection:
    message, packed = put("stacks", obstacle)
    expires_in = None if expires_in_s is None else Duration.of_s(expires_in_s)
    return Recollection(
        Change("put", "stacks", DURABLE, message, packed), {}, (obstacle,), expires_in
    )


LAYER = Recollection(Change("claim", "stacks", DURABLE))
