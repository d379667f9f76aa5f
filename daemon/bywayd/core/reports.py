"""What the front tells about itself: the welcome to a client, and the health record."""

from typing import Protocol

from byway import limits
from byway.messages import ErrorMessage, HealthIs, Hello, LayerHealth, Welcome
from bywayd.core.answering import Answering
from bywayd.core.dispatch import Dispatch
from bywayd.core.events import Vitals
from bywayd.core.front_settings import FrontSettings
from bywayd.core.guards import Guards
from bywayd.core.health import Health
from bywayd.core.instants import Instant
from bywayd.core.keeping import Keeping
from bywayd.core.ledger import Ledger
from bywayd.core.outbox import error_of
from bywayd.core.rerouting import Rerouting
from bywayd.core.roster import Roster
from bywayd.core.snapshots import Snapshots
from bywayd.core.surveying import Surveying


class Reported(Protocol):
    """What is told about: the front, as far as it is looked at here."""

    health: Health
    snapshots: Snapshots
    workers: Roster
    surveyors: Roster
    ledger: Ledger
    keeping: Keeping
    surveying: Surveying
    answering: Answering
    dispatch: Dispatch
    guards: Guards
    rerouting: Rerouting
    vitals: Vitals | None
    wall: tuple[float, Instant] | None
    began: Instant | None

    @property
    def settings(self) -> FrontSettings: ...

    @property
    def state(self) -> str: ...


def welcome(front: Reported, hello: Hello, now: Instant) -> Welcome | ErrorMessage:
    """Return the reply to a hello: who we are, or that we have no version in common."""
    spoken = limits.spec_version
    if spoken not in hello.versions:
        text = f"{hello.client} speaks {hello.versions}; this daemon speaks {spoken}"
        return error_of("unsupported_version", text, {"versions": [spoken]})
    settings = front.settings
    return Welcome(
        version=spoken,
        software=settings.software,
        state=front.state,
        updates_endpoints=list(settings.updates_endpoints),
        events_endpoints=list(settings.events_endpoints),
        vehicles=sorted(settings.vehicles),
        revision=front.snapshots.revision,
        wall_s=wall_s(front, now),
        limits={name: float(value) for name, value in limits.told().items()},
    )


def wall_s(front: Reported, now: Instant) -> float:
    """Return the wall clock's reading, carried on by ours from the last time it was told."""
    if front.wall is None:
        return 0.0
    told_s, at = front.wall
    return told_s + now.since(at).s


def health(front: Reported, now: Instant) -> HealthIs:
    """Return the health record."""
    workers = front.workers.statistics()
    ledger = front.ledger.statistics()
    vitals = front.vitals
    counts = {
        **front.health.counts(),
        "workers_spawned_total": workers.spawned_total,
        "surveyors_spawned_total": front.surveyors.statistics().spawned_total,
        "surveyor_ready": int(front.surveying.is_ready),
        "sources": ledger.sources,
        "changes_pending": ledger.pending,
        "expiries": ledger.expiries,
        "answers_kept": len(front.answering.answers),
        "guards": len(front.guards),
        "guards_blocked": sum(guard.told is not None for guard in front.guards),
        "reroutes": len(front.rerouting),
        "revisions_pinned": len(front.snapshots.pins()),
        **front.keeping.counts(),
        **({} if vitals is None else vitals.facts),
    }
    memory = {
        "site": front.surveying.memory_bytes,
        "changes_pending": ledger.pending_bytes,
        "answers_kept": front.answering.answers.size_bytes,
        "guards": front.guards.size_bytes,
        "keep_pending": front.ledger.keepline.size_bytes,
        "kept": front.ledger.keepline.stock.size_bytes,
        **({} if vitals is None else vitals.memory_bytes),
    }
    waiting = len(front.dispatch.room)
    return HealthIs(
        state=front.state,
        revision=front.snapshots.revision,
        uptime_s=0.0 if front.began is None else now.since(front.began).s,
        waiting=waiting,
        planning=len(front.answering.open) - waiting,
        workers={
            "starting": workers.starting,
            "idle": workers.idle,
            "busy": workers.busy,
            "killed": workers.killed,
            "vacant": workers.vacant,
        },
        layers={
            layer.name: LayerHealth(
                source=layer.owner,
                age_s=None if layer.changed_at is None else now.since(layer.changed_at).s,
                lease_left_s=front.ledger.layers.lease_left_s(layer, now),
                obstacles=front.surveying.obstacles.get(layer.name, 0),
                tracks=front.surveying.tracks.get(layer.name, 0),
                durable=layer.flags.durable,
                expected_period_s=(
                    None if layer.expected_period is None else layer.expected_period.s
                ),
                stale=layer.is_stale,
            )
            for layer in front.ledger.layers
        },
        counts=counts,
        histograms=front.health.histograms(),
        memory_bytes=memory,
    )
