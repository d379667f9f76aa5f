"""
Cores that are broken on purpose, one for each promise: the simulated world must catch them all.

A checker that nobody has seen fail may be one that cannot.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from types import ModuleType
from typing import Any

from byway.messages import Acknowledged, Cleared, Message
from bywayd.core import changes
from bywayd.core.answers import Answers
from bywayd.core.dispatch import Dispatch
from bywayd.core.docket import Docket, Held
from bywayd.core.effects import Change
from bywayd.core.events import Outcome
from bywayd.core.expiries import Expiries
from bywayd.core.freshness import Freshness
from bywayd.core.guards import Guard, Guards
from bywayd.core.instants import Instant
from bywayd.core.keeping import Keeping
from bywayd.core.keepline import KeepLine
from bywayd.core.kept import Keepsake
from bywayd.core.layers import Layer, Layers
from bywayd.core.ledger import Entry, Ledger
from bywayd.core.outbox import Outbox
from bywayd.core.rerouting import Rerouting
from bywayd.core.snapshots import Snapshot, Snapshots
from bywayd.core.sources import Source
from bywayd.core.surveying import Surveying

true_append = Ledger._append
true_ended = Docket.ended
true_decide = Ledger.decide
true_publish = Outbox.publish
true_forsake = Surveying._forsake
true_hand_out = Surveying._hand_out
true_guards_publish = Guards.publish
true_move = Guards.move
true_change_over = Rerouting._change_over
true_clerk_forsake = Keeping._forsake
true_keep = KeepLine.append
true_pop_due = Expiries.pop_due
true_claimed = Freshness.claimed
true_claim = Layers.claim


@dataclass(frozen=True)
class Canary:
    """One method or function replaced by a broken one, and what must be said about it."""

    owner: type | ModuleType
    method: str
    broken: Callable[..., Any]
    caught: str
    #: It can do harm where there are durable layers only, ...
    is_durable: bool = False
    #: ... and to a daemon that was started again.
    needs_restarts: bool = False
    #: It is seen in what sources do, on a day on which they do much.
    is_about_sources: bool = False


def acknowledge_at_once(ledger: Ledger, entry: Entry) -> None:
    true_append(ledger, entry)
    source = None if entry.source is None else ledger.sources.get(entry.source)
    if source is not None:
        told = Acknowledged(
            source=source.name, number=entry.number, revision=max(1, ledger._revision)
        )
        ledger._outbox.reply(source.peer, None, told)


def publish_anything(snapshots: Snapshots, revision: int, handle: object) -> bool:
    # Every fifth revision is announced as an older one.
    snapshots._current = Snapshot(revision - 3 * (revision % 5 == 0), handle)
    return True


def hold_anything(docket: Docket, outcome: Outcome, revision: int, now: Instant) -> bool:
    docket.best = Held(outcome, revision)
    docket.first_at = docket.first_at or now
    return True


def pass_off_as_new(docket: Docket, outcome: Outcome, revision: int, now: Instant) -> None:
    true_ended(docket, outcome, revision + 1, now)


def never_look_at_the_clock(dispatch: Dispatch, now: Instant) -> None:
    dispatch._begin_jobs(now)


def decide_without_refusals(ledger: Ledger, refusals: object, revision: int, now: Instant) -> None:
    true_decide(ledger, (), revision, now)


def number_nothing(outbox: Outbox, topic: str, *args: Any, **more: Any) -> None:
    outbox._streams.clear()
    true_publish(outbox, topic, *args, **more)


def take_up_no_guards(guards: Guards, surveyor: int) -> None:
    guards._surveyor = surveyor


def move_without_hearing(
    guards: Guards, guard: Guard, progress_m: float, speed_mps: float | None, now: Instant
) -> None:
    alarm = guards._alarms.at(guard.number)
    true_move(guards, guard, progress_m, speed_mps, now)
    if alarm is not None:
        guards._alarms.set(guard.number, alarm)


def publish_no_good_news(guards: Guards, guard: Guard, message: Message, *more: Any) -> None:
    if not isinstance(message, Cleared):
        true_guards_publish(guards, guard, message, *more)


def publish_first(rerouting: Rerouting, *args: Any) -> None:
    effects = rerouting._outbox._effects
    first = len(effects)
    true_change_over(rerouting, *args)
    effects[first:] = reversed(effects[first:])


def take_gaps(
    ledger: Ledger, peer: Any, header: Any, size: int, now: Instant, layer: str = ""
) -> Any:
    source = ledger.sources.heard(header.source, peer, now)
    return source if source is not None and header.number > source.have else None


def lose_the_batch(surveying: Surveying, number: int) -> None:
    surveying._ledger._out = None
    true_forsake(surveying, number)


def forget_what_expired(expiries: Expiries, now: Instant) -> dict[str, list[str]]:
    true_pop_due(expiries, now)
    return {}


def settle_without_the_disk(source: Source, number: int, position: int, kept_to: int) -> bool:
    source.decided = number
    return True


def lose_with_the_clerk(keeping: Keeping, number: int) -> None:
    if keeping._line.out:
        keeping._line.kept(keeping._line.stock)
        keeping._ledger.kept()
    true_clerk_forsake(keeping, number)


def keep_for_sources_only(line: KeepLine, keepsake: Keepsake) -> int:
    return line._end if keepsake.arrived is None else true_keep(line, keepsake)


def drop_what_is_put_again(expiries: Expiries, now: Instant) -> dict[str, list[str]]:
    due: dict[str, list[str]] = {}
    while (key := expiries._alarms.pop_due(now)) is not None:
        due.setdefault(key[0], []).append(key[1])
    for layer, ids in due.items():
        expiries.dropped(layer, ids)
    return due


def begin_anew_with_every_claim(freshness: Freshness, layer: Layer, now: Instant) -> None:
    layer.expected_since = None
    true_claimed(freshness, layer, now)


def hand_out_what_sources_sent_only(
    surveying: Surveying, number: int, changes: tuple[Change, ...], now: Instant
) -> None:
    if changes:
        true_hand_out(surveying, number, changes, now)


def let_claims_change_what_layers_are(
    layers: Layers, source: str, name: str, wanted: Any, now: Instant
) -> Any:
    layer = layers.get(name)
    if layer is not None and wanted.decay_s is not None:
        layer.flags = replace(layer.flags, decay_s=wanted.decay_s)
    return true_claim(layers, source, name, wanted, now)


def take_layers_from_whoever_has_them(layers: Layers, now: Instant) -> Layer | None:
    name = layers._alarms.pop_due(now)
    layer = None if name is None else layers.get(name)
    if layer is not None:
        layer.owner = None
    return layer


CANARIES = {
    "a batch is lost with its surveyor": Canary(
        *(Surveying, "_forsake", lose_the_batch),
        "decided once|what is pending is known|what is acknowledged is visible|not settled",
    ),
    "obstacles never expire": Canary(
        Expiries, "pop_due", forget_what_expired, "nothing outlasts its expiry"
    ),
    "an obstacle that is put again is dropped": Canary(
        Expiries,
        "pop_due",
        drop_what_is_put_again,
        "nothing is dropped before it expires",
        is_about_sources=True,
    ),
    "what was seen is taken for what is": Canary(
        changes,
        "_seen",
        lambda message, now: now,
        "what was seen keeps its moment",
        is_about_sources=True,
    ),
    "what moves stays where it was seen": Canary(
        *(Surveying, "_hand_out", hand_out_what_sources_sent_only),
        "what moves is carried forward in time",
        is_about_sources=True,
    ),
    "nobody is woken to carry what moves": Canary(
        *(Surveying, "next_alarm", lambda self: None),
        "there is somebody awake to have it carried forward",
        is_about_sources=True,
    ),
    "later claims change what a layer is": Canary(
        *(Layers, "claim", let_claims_change_what_layers_are),
        "what a layer is never changes",
        is_about_sources=True,
    ),
    "layers of outlines take scans and tracks": Canary(
        changes,
        "_NOT_AMONG_OUTLINES",
        (),
        "what is seen goes to layers that take it",
        is_about_sources=True,
    ),
    "every claim keeps its layer fresh": Canary(
        Freshness,
        "claimed",
        begin_anew_with_every_claim,
        "is stale is told|no replan is taken in",
        is_about_sources=True,
    ),
    "nobody hears of stale layers": Canary(
        Freshness,
        "tell",
        lambda self, layer, state, now: None,
        "a layer that is stale is told",
        is_about_sources=True,
    ),
    "stale layers refuse nothing": Canary(
        *(Freshness, "why_not", lambda self, left_out, now: None),
        "no replan is taken in while a layer is stale",
        is_about_sources=True,
    ),
    "layers are taken from owners that speak": Canary(
        *(Layers, "pop_forfeited", take_layers_from_whoever_has_them),
        "a layer is taken from who was silent",
        is_about_sources=True,
    ),
    "changes are acknowledged before they are visible": Canary(
        Ledger, "_append", acknowledge_at_once, "what is acknowledged is visible"
    ),
    "changes that the surveyor refused count as visible": Canary(
        Ledger, "decide", decide_without_refusals, "what is acknowledged is visible"
    ),
    "changes are taken in across gaps": Canary(
        Ledger, "_next_in_turn", take_gaps, "what is acknowledged is visible|decided once"
    ),
    "snapshots are given back while they are read": Canary(
        *(Snapshots, "maybe_release", lambda self: self.revision),
        "no snapshot is given back while it is read",
    ),
    "successors are told of the current snapshot only": Canary(
        *(Snapshots, "hand_over", lambda self: (self.current.handle,)),
        "a successor keeps every snapshot that is read",
    ),
    "revisions go back": Canary(
        Snapshots,
        "publish",
        publish_anything,
        "revisions never go back|not older|not given back|acknowledged",
    ),
    "deadlines are not kept": Canary(
        *(Dispatch, "settle", never_look_at_the_clock),
        "an answer leaves within its budget|not settled",
    ),
    "worse routes are published": Canary(
        Docket, "hold", hold_anything, "costs never rise within a stream|repeats the best"
    ),
    "answers are forgotten at once": Canary(
        *(Answers, "get", lambda self, id: None),
        "taken in once|nothing is taken in after its end|same answer again|answered once",
    ),
    "routes on old revisions pass for new ones": Canary(
        *(Docket, "ended", pass_off_as_new),
        "was verified at the revision that its answer names",
    ),
    "routes are forgotten with the surveyor that watched them": Canary(
        *(Guards, "surveyor_ready", take_up_no_guards),
        "what stands is watched|what is unwatched was watched",
    ),
    "every look at a blocked route is told": Canary(
        *(Guards, "_is_news", lambda self, told, seen: True),
        "nothing is said without a reason",
    ),
    "that a route is free again is kept back": Canary(
        *(Guards, "publish", publish_no_good_news), "what the surveyor sees is told"
    ),
    "vehicles may be silent for ever": Canary(
        Guards, "settle", lambda self, now: None, "no silence is without end|time goes on"
    ),
    "guards are lost before their time": Canary(
        *(Guards, "move", move_without_hearing), "a guard is lost after the silence"
    ),
    "a new guard stands beside the old one": Canary(
        *(Guards, "_end", lambda self, guard: None), "one guard stands a unit|known|is bounded"
    ),
    "routes are watched after they are published": Canary(
        *(Rerouting, "_change_over", publish_first),
        "a new route is watched first|only guards that stand are spoken of",
    ),
    "nobody waits for the disk": Canary(
        *(Source, "settle", settle_without_the_disk),
        "durable layer is on the disk",
        is_durable=True,
    ),
    "a batch is lost with its clerk": Canary(
        *(Keeping, "_forsake", lose_with_the_clerk),
        "durable layer is on the disk|site and disk agree",
        is_durable=True,
    ),
    "expired obstacles are left on the disk": Canary(
        *(KeepLine, "append", keep_for_sources_only), "site and disk agree", is_durable=True
    ),
    "replans do not wait for what is kept": Canary(
        *(Ledger, "is_complete", property(lambda self: True)),
        "no replan before what is kept is there",
        is_durable=True,
        needs_restarts=True,
    ),
    "sources do not wait for what is kept": Canary(
        *(Ledger, "_has_room", lambda self, source, size, layer: source.undecided < 16),
        "before sources change it",
        is_durable=True,
        needs_restarts=True,
    ),
    "events are not numbered": Canary(Outbox, "publish", number_nothing, "streams are numbered"),
}
