"""
Who has to stop improving, so that somebody who waits gets a worker.

When more is asked than the workers can do, quality gives way before anybody is left without a
route: a replan that holds a verified route is told to end when another has waited for longer than
its patience. And what a unit asked before is of little use to it once it has asked again: its
older replan ends as soon as it has a route, or when half of the newer one's budget has gone.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from bywayd.core.docket import Docket, Hurry
from bywayd.core.instants import Duration, Instant
from bywayd.core.waiting import WaitingRoom

#: A replan whose unit has asked again gets no more than this share of the newer one's budget.
_NEWER_WAITS_RATIO = 0.5


@dataclass(slots=True)
class Pressure:
    """Whom to tell to end, and why; and when to look again, if nothing else happens before."""

    hasten: list[tuple[Docket, Hurry]] = field(default_factory=list)
    look_again_at: Instant | None = None

    def wake_by(self, at: Instant) -> None:
        """Look again at this instant at the latest."""
        if self.look_again_at is None or at < self.look_again_at:
            self.look_again_at = at


def pressure(
    room: WaitingRoom, at_work: Mapping[str, Docket], coming_free: int, now: Instant
) -> Pressure:
    """
    Return what those who wait demand of those who are at work.

    Args:
        room: Who waits; nobody of them could be given a worker.
        at_work: By unit, who has a worker, or had one and waits again.
        coming_free: Workers that will be idle soon without any pressure.
    """
    found = Pressure()
    impatient = 0
    for docket in room:
        older = at_work.get(docket.slot)
        if older is docket or docket.guard is not None:
            impatient += 1  # it had a worker, and lost it; or a vehicle drives towards something
        elif older is not None:
            _make_way(found, older, docket, now)
        else:
            impatient += _is_impatient(found, room, docket, now)
    wanted = impatient - coming_free - len(found.hasten)
    leaving = {id(docket) for docket, _ in found.hasten}
    for docket in improving(at_work):
        if wanted <= 0:
            break
        if id(docket) not in leaving:
            found.hasten.append((docket, "shorten"))
            wanted -= 1
    return found


def improving(at_work: Mapping[str, Docket]) -> list[Docket]:
    """Return who has a route and a worker that tries to better it, the longest first."""
    found = [
        (docket.first_at.ns, docket.id, docket)
        for docket in at_work.values()
        if docket.phase == "planning" and docket.best is not None and docket.first_at is not None
    ]
    return [docket for _, _, docket in sorted(found, key=lambda entry: entry[:2])]


def _is_impatient(found: Pressure, room: WaitingRoom, docket: Docket, now: Instant) -> bool:
    ends = room.patience_ends(docket, Duration.of_s(docket.ask.budget_s))
    if ends > now:
        found.wake_by(ends)
    return ends <= now


def _make_way(found: Pressure, older: Docket, newer: Docket, now: Instant) -> None:
    if older.phase != "planning":
        return
    budget = Duration.of_s(newer.ask.budget_s)
    limit = newer.times.arrived + budget.times(_NEWER_WAITS_RATIO)
    if older.best is not None or limit <= now:
        found.hasten.append((older, "newer"))
    else:
        found.wake_by(limit)
