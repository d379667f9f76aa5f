"""
What sources have sent, what has become visible, and what they are told about it.

Changes are taken in by number and without gaps, wait in one line for the surveyor, go to it in
batches, and are acknowledged, cumulatively for each source, when the snapshot that contains them
is current: so every replan sent after an acknowledgement sees what was acknowledged. A change
that is refused, here or by the surveyor, counts as decided like any other, and the source is told
which one and why before the acknowledgement passes it. Where a change is one of a durable layer,
the acknowledgement waits for the disk as well.

A batch whose surveyor died is handed out again as it was; changes can be applied twice.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass

from byway import frames, limits, messages
from byway.errors import SenderFault
from byway.messages import Acknowledged, Refused, Resend
from bywayd.core.changes import Changes
from bywayd.core.effects import Change
from bywayd.core.entries import Batch, Entry
from bywayd.core.events import Peer, Refusal
from bywayd.core.expiries import Expiries
from bywayd.core.freshness import Freshness
from bywayd.core.front_settings import FrontSettings
from bywayd.core.health import Health
from bywayd.core.instants import Duration, Instant
from bywayd.core.invariant import invariant, known
from bywayd.core.keepline import KeepLine
from bywayd.core.keepsakes import keepsake_of, recalled_entry
from bywayd.core.kept import Keepsake, Recollection
from bywayd.core.layers import Layer, Layers, No
from bywayd.core.outbox import Outbox
from bywayd.core.sources import Source, Sources

#: Obstacles that expire together and go to the surveyor in one change.
_DROP_IDS_MAX = 1000


@dataclass(frozen=True, slots=True)
class LedgerStatistics:
    """How much the ledger holds."""

    sources: int
    layers: int
    expiries: int
    pending: int
    pending_bytes: int


class Ledger:
    """Owned by the front."""

    def __init__(self, settings: FrontSettings, outbox: Outbox, health: Health) -> None:
        # -- fixed -----------------------------------------------------------------------------
        self._settings = settings
        self._resend_every = Duration.of_s(settings.resend_every_s)
        # -- shared with the rest of the front -------------------------------------------------
        self._outbox = outbox
        self._health = health
        # -- state -----------------------------------------------------------------------------
        self.sources = Sources(settings.sources_max, limits.refusals_kept)
        self.layers = Layers(
            settings.layers, settings.expected, settings.layers_max, self._heard_at
        )
        self.freshness = Freshness(self.layers, outbox, health)
        self._expiries = Expiries(settings.expiries_max)
        #: Visible, and not on the disk yet.
        self.keepline = KeepLine(settings.keep_pending_bytes_max)
        self._changes = Changes(
            settings, self.layers, self.freshness, self._expiries, self.keepline
        )
        #: Whether sources are listened to: not before all that is kept has been recalled.
        self.is_open = not settings.keeps
        #: Recalled, and not visible yet.
        self._recalled = 0
        #: Taken in and not handed out yet, in order of arrival over all sources.
        self._line: deque[Entry] = deque()
        #: Handed out and not decided.
        self._out: Batch | None = None
        #: Of everything undecided.
        self._pending_bytes = 0
        #: The newest, in which everything decided is visible.
        self._revision = 0

    # -- what sources send ---------------------------------------------------------------------

    def take(
        self, peer: Peer, came: frames.Received, message: messages.Change, now: Instant
    ) -> None:
        """Take in a change, or say why not."""
        size = len(came.body) + len(came.packed)
        source = self._next_in_turn(peer, came.header, size, now, message.layer)
        if source is None:
            return
        source.have = came.header.number
        made = self._changes.entry(source, message, came.packed, size, now)
        if isinstance(made, No):
            made = Entry(now, source.name, source.have, None, made)
        self._append(made)

    def take_fault(self, peer: Peer, fault: SenderFault, now: Instant) -> bool:
        """
        Refuse a change that the door would not let through; False if nobody knows whose it is.

        Its number is used up: the source would otherwise repeat it for ever.
        """
        header = fault.header
        if header is None or not header.source or not header.number:
            return False
        source = self._next_in_turn(peer, header, 0, now)
        if source is not None:
            source.have = header.number
            no = No(fault.code, fault.text, fault.facts)
            self._append(Entry(now, source.name, source.have, None, no))
        return True

    def _next_in_turn(
        self,
        peer: Peer,
        header: frames.Header,
        size_bytes: int,
        now: Instant,
        layer: str = "",
    ) -> Source | None:
        """Return the source if its next number can be taken in; otherwise it is told why not."""
        source = self.sources.heard(header.source, peer, now)
        if source is None:
            self._health.count("sources_refused_total")
            text = f"{len(self.sources)} sources have changes under way, no more can be taken"
            retry = self._settings.resend_every_s
            self._outbox.error(peer, header, "overloaded", text, retry_after_s=retry)
            return None
        if header.epoch and header.epoch != self._outbox.epoch:
            self._ask_again(source, "epoch", now)
            return None
        if header.number <= source.have:
            self._tell_again(source, header.number)
            return None
        if header.number > source.have + 1:
            self._health.count("gaps_total")
            self._ask_again(source, "gap", now)
            return None
        if not self._has_room(source, size_bytes, layer):
            self._ask_again(source, "full", now, self._settings.resend_every_s)
            return None
        return source

    def _has_room(self, source: Source, size: int, layer_name: str) -> bool:
        settings, layer = self._settings, self.layers.get(layer_name)
        if layer is not None and layer.flags.durable and not self.keepline.has_room(size):
            return False
        return (
            self.is_open
            and source.undecided < settings.source_window
            and self._pending_bytes + size <= settings.pending_bytes_max
        )

    def _ask_again(
        self, source: Source, reason: str, now: Instant, retry_after_s: float | None = None
    ) -> None:
        """Tell a source from where to go on; once for all that it has sent beyond that."""
        wanted = source.have + 1
        lately = source.asked_at is not None and now.since(source.asked_at) < self._resend_every
        if source.asked_for == wanted and lately:
            return
        source.asked_for, source.asked_at = wanted, now
        self._health.count("resends_total")
        self._reply(
            source,
            Resend(
                source=source.name, reason=reason, have=source.have, retry_after_s=retry_after_s
            ),
        )

    def _tell_again(self, source: Source, number: int) -> None:
        """A repeat: say again what has become of it, if that is decided."""
        self._health.count("repeated_changes_total")
        if number > source.decided:
            return
        refused = source.refusals.get(number)
        if refused is not None:
            self._reply(source, refused)
        self._acknowledge(source, self._revision)

    # -- to the surveyor and back --------------------------------------------------------------

    def next_batch(self) -> Batch | None:
        """
        Hand out what waits, up to a limit, if nothing is out.

        A batch without changes (all refused here) has nothing for the surveyor to do.
        """
        if self._out is not None or not self._line:
            return None
        entries: list[Entry] = []
        size = 0
        while self._line and len(entries) < self._settings.batch_changes_max:
            size += self._line[0].size_bytes
            if entries and size > self._settings.batch_bytes_max:
                break
            entries.append(self._line.popleft())
        self._out = Batch(tuple(entries))
        return self._out

    @property
    def out(self) -> Batch | None:
        """The batch that is handed out and not decided."""
        return self._out

    def decide(self, refusals: Sequence[Refusal], revision: int, now: Instant) -> None:
        """The batch that is out has become visible with this revision, but for the refused."""
        batch = known(self._out, "what is decided was handed out")
        self._out = None
        refused = {refusal.index: refusal for refusal in refusals}
        last: dict[str, int] = {}
        #: Of the last change of each source that is to be kept.
        positions: dict[str, int] = {}
        index = 0
        for entry in batch.entries:
            no = entry.no
            if entry.change is not None:
                found = refused.get(index)
                no = None if found is None else No(found.code, found.text, found.facts)
                self._settle_change(entry, entry.change, no, now)
                index += 1
                if no is None and entry.change.settings.durable and not entry.is_recalled:
                    position = self.keepline.append(
                        keepsake_of(entry, entry.change, self._layer(entry.change.layer))
                    )
                    if entry.source is not None:
                        positions[entry.source] = position
            if entry.source is not None:
                last[entry.source] = entry.number
                self._tell(entry.source, entry, no, now)
        self._revision = revision
        for name, number in last.items():
            source = self._source(name)
            if source.settle(number, positions.get(name, 0), self.keepline.kept_to):
                self._acknowledge(source, revision)

    def carried(self, revision: int) -> None:
        """Nothing was decided, but what is visible is so in a newer revision."""
        self._revision = revision

    def _settle_change(self, entry: Entry, change: Change, no: No | None, now: Instant) -> None:
        self._pending_bytes -= entry.size_bytes
        name = change.layer
        if entry.is_recalled:
            self._recalled -= 1
            if no is not None:
                self._health.count("recalls_refused_total")
                self._outbox.log(
                    "error", "keep.recall_refused", layer=name, code=no.code, text=no.text
                )
        if change.what in ("put", "replace", "track"):
            self._expiries.decided(
                name,
                entry.ids,
                replaces=change.what == "replace",
                expires_at=entry.expires_at,
                applied=no is None,
            )
        elif change.what == "drop" and no is None:
            self._expiries.dropped(name, change.ids)
        if no is None:
            layer = self._layer(name)
            layer.is_visible = True
            if change.what != "claim" and entry.source is not None:
                self.freshness.changed(layer, now)

    def kept(self) -> None:
        """More of the keep line is on the disk: some sources have waited for that."""
        for source in self.sources:
            if source.let_go(self.keepline.kept_to):
                self._acknowledge(source, self._revision)

    def _tell(self, name: str, entry: Entry, no: No | None, now: Instant) -> None:
        if no is None:
            self._health.count("changes_total")
            self._health.observe("visible_s", now.since(entry.arrived))
            return
        self._health.count("changes_refused_total")
        source = self._source(name)
        refused = Refused(
            source=name,
            number=entry.number,
            code=no.code,
            text=no.text[: limits.text_chars_max],
            facts=dict(no.facts),
        )
        source.remember_refusal(refused, limits.refusals_kept)
        self._reply(source, refused)
        self._outbox.log(
            "info", "change.refused", source=name, number=entry.number, code=no.code, text=no.text
        )

    def _acknowledge(self, source: Source, revision: int) -> None:
        told = Acknowledged(source=source.name, number=source.decided, revision=revision)
        self._reply(source, told)

    def _reply(self, source: Source, message: messages.Message) -> None:
        self._outbox.reply(source.peer, None, message)

    # -- time ----------------------------------------------------------------------------------

    def recall(self, found: Sequence[Recollection], now: Instant) -> None:
        """Take in what the clerk has kept since the last life of the daemon."""
        for recollection in found:
            change = recollection.change
            layer = self.layers.recall(change.layer, change.settings, recollection.terms)
            if change.what == "claim":
                # As always: if its source does not come back in time, that is to be known.
                self.freshness.claimed(layer, now)
            if layer.flags.durable:
                self._append(recalled_entry(recollection, layer, self._expiries, now))
                self._recalled += 1
                self._health.count("recalled_total")
            elif change.what == "claim":
                # The settings say so: what it held is not to come back some other day either.
                self._outbox.log("warning", "keep.layer_forgotten", layer=layer.name)
                self.keepline.append(Keepsake(Change("claim", layer.name, layer.flags)))

    @property
    def is_complete(self) -> bool:
        """Whether everything that was kept is visible."""
        return self.is_open and self._recalled == 0

    def settle(self, now: Instant) -> None:
        """Drop what has expired; take layers away whose owners have been silent for too long."""
        self._expire(now)
        while (layer := self.layers.pop_forfeited(now)) is not None:
            self._health.count("leases_ended_total")
            self._outbox.log(
                "warning", "layer.forfeited", layer=layer.name, source=layer.last_owner
            )
            self.freshness.tell(layer, "forfeited", now)
        self.freshness.settle(now)

    def _expire(self, now: Instant) -> None:
        for name, ids in self._expiries.pop_due(now).items():
            layer = self._layer(name)
            self._health.count("obstacles_expired_total", len(ids))
            for first in range(0, len(ids), _DROP_IDS_MAX):
                some = tuple(ids[first : first + _DROP_IDS_MAX])
                self._append(Entry(now, None, 0, Change("drop", name, layer.flags, ids=some)))

    def next_alarm(self) -> Instant | None:
        """Return when something expires, a lease may end, or a layer become stale."""
        found = (
            *(self._expiries.next_alarm(), self.layers.next_alarm()),
            self.freshness.next_alarm(),
        )
        return min((at for at in found if at is not None), default=None)

    # -- within --------------------------------------------------------------------------------

    def _append(self, entry: Entry) -> None:
        self._line.append(entry)
        self._pending_bytes += entry.size_bytes

    def _source(self, name: str) -> Source:
        return known(self.sources.get(name), "a source with changes under way is known")

    def _layer(self, name: str) -> Layer:
        return known(self.layers.get(name), "a change that was taken in has a layer")

    def _heard_at(self, name: str) -> Instant | None:
        source = self.sources.get(name)
        return None if source is None else source.heard_at

    @property
    def pending(self) -> int:
        """Changes that are not visible or refused."""
        return len(self._line) + (0 if self._out is None else len(self._out.entries))

    def statistics(self) -> LedgerStatistics:
        """Return how much is held."""
        return LedgerStatistics(
            len(self.sources),
            len(self.layers),
            len(self._expiries),
            self.pending,
            self._pending_bytes,
        )

    def check(self) -> None:
        """Stop with a `Defect` if a change could be lost, or memory is not bounded."""
        self.sources.check()
        self.layers.check()
        self.freshness.check()
        self._expiries.check()
        self.keepline.check()
        entries = [*(() if self._out is None else self._out.entries), *self._line]
        invariant(
            self._recalled == sum(entry.is_recalled for entry in entries),
            "what is recalled becomes visible",
        )
        invariant(
            self._pending_bytes == sum(entry.size_bytes for entry in entries),
            "the size of what is pending is known",
        )
        undecided: dict[str, list[int]] = {}
        for entry in entries:
            if entry.source is not None:
                undecided.setdefault(entry.source, []).append(entry.number)
        for source in self.sources:
            numbers = list(range(source.settled + 1, source.have + 1))
            invariant(
                undecided.pop(source.name, []) == numbers, "every number taken in is decided once"
            )
        invariant(not undecided, "a source with changes under way is known")
