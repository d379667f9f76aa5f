"""
Between the core's events and effects and what travels on the channels of the crew.

Plain maps on the one side, the core's records on the other; nothing is decided here. What the
core calls opaque passes through as it is.
"""

import math
from collections.abc import Callable, Mapping
from typing import Any, Final, TypeAlias, get_args

from byway import frames, messages
from byway.errors import BywayError
from bywayd.core import effects, events
from bywayd.core.instants import SECOND_NS, Instant
from bywayd.runtime.clerking import CLERK_SAYS
from bywayd.runtime.staff import Role

Message: TypeAlias = dict[str, Any]


class Nonsense(Exception):
    """A message that no healthy process of the crew would send."""


# -- what the crew says --------------------------------------------------------------------------


def event_of(role: Role, number: int, message: Message) -> events.Event:
    """
    Return the core's event for a message of the crew.

    Raises:
        Nonsense: If it is not one; a wild write in a kernel can do that.
    """
    make = _SAYS[role].get(str(message.get("say")))
    if make is None:
        raise Nonsense(f"said {str(message.get('say'))[:40]!r}")
    try:
        return make(number, message)
    except (KeyError, TypeError, ValueError, BywayError) as fault:
        said = f"said {message['say']!r} in a way that makes no sense"
        raise Nonsense(f"{said}: {fault!r}") from fault


def _outcome(found: Mapping[str, Any]) -> events.Outcome:
    if found["kind"] not in get_args(events.OutcomeKind):
        raise ValueError(f"no outcome is called {found['kind']!r}")
    return events.Outcome(
        kind=found["kind"],
        cost=float(found["cost"]),
        body=_bytes(found["body"]),
        packed=_bytes(found["packed"]),
        path=found["path"],
    )


def _bytes(value: object) -> bytes:
    if not isinstance(value, bytes):
        raise TypeError(f"bytes were due, not {type(value).__name__}")
    return value


def _snapshot_ready(number: int, message: Message) -> events.Event:
    return events.SnapshotReady(
        number,
        int(message["batch"]),
        int(message["revision"]),
        message["handle"],
        tuple(
            events.Refusal(int(r["index"]), str(r["code"]), str(r["text"]), dict(r["facts"]))
            for r in message["refusals"]
        ),
        int(message["memory_bytes"]),
        {str(layer): int(count) for layer, count in message["obstacles"].items()},
        {str(layer): int(count) for layer, count in message["tracks"].items()},
        _duration_s(message["next_in_s"]),
    )


def _duration_s(told: object) -> float | None:
    if told is None:
        return None
    seconds = float(told)  # type: ignore[arg-type]
    if not 0.0 <= seconds < math.inf:
        raise ValueError(f"no time to wait: {seconds}")
    return seconds


def _site_described(number: int, message: Message) -> events.Event:
    ticket = int(message["ticket"])
    if "refusal" in message:
        told = message["refusal"]
        error = messages.ErrorMessage(
            code=str(told["code"]), text=str(told["text"]), facts=dict(told["facts"])
        )
        return events.SiteDescribed(number, ticket, error, b"")
    described = frames.build(messages.SiteIs, message["fields"])
    return events.SiteDescribed(number, ticket, described, _bytes(message["packed"]))


def _guard_seen(number: int, message: Message) -> events.Event:
    told = message["blocked"]
    block = None
    if told is not None:
        if told["kind"] not in get_args(events.BlockKind):
            raise ValueError(f"nothing on a site is called {told['kind']!r}")
        reals = {name: float(told[name]) for name in _BLOCK_REALS}
        if not all(map(math.isfinite, reals.values())):
            raise ValueError(f"a place that is nowhere: {reals}")
        block = events.Block(
            **reals, kind=told["kind"], layer=str(told["layer"]), id=str(told["id"])
        )
    return events.GuardSeen(
        number, int(message["guard"]), int(message["revision"]), block, str(message["fault"])
    )


_BLOCK_REALS: Final = ("at_m", "t_s", "x_m", "y_m", "heading_rad", "depth_m")

_Maker: TypeAlias = Callable[[int, Message], events.Event]

_WORKER_SAYS: Final[Mapping[str, _Maker]] = {
    "ready": lambda number, _: events.WorkerReady(number),
    "alive": lambda number, _: events.WorkerAlive(number),
    "better": lambda number, m: events.WorkerBetter(number, int(m["job"]), _outcome(m["outcome"])),
    "done": lambda number, m: events.WorkerDone(number, int(m["job"]), _outcome(m["outcome"])),
    "failed": lambda number, m: events.WorkerFailed(
        number, int(m["job"]), str(m["code"]), str(m["text"]), dict(m["facts"])
    ),
    "checked": lambda number, m: events.WorkerChecked(
        number, int(m["job"]), bool(m["good"]), str(m["text"])
    ),
}

_SURVEYOR_SAYS: Final[Mapping[str, _Maker]] = {
    "ready": lambda number, m: events.SurveyorReady(
        number,
        int(m["revision"]),
        m["handle"],
        int(m["memory_bytes"]),
        _duration_s(m["next_in_s"]),
    ),
    "alive": lambda number, _: events.SurveyorAlive(number),
    "snapshot": _snapshot_ready,
    "site": _site_described,
    "guard": _guard_seen,
}

_SAYS: Final[Mapping[Role, Mapping[str, _Maker]]] = {
    "worker": _WORKER_SAYS,
    "surveyor": _SURVEYOR_SAYS,
    "clerk": CLERK_SAYS,
}


# -- what the crew is told -----------------------------------------------------------------------


def job_message(job: effects.Job, host_ns: Callable[[Instant], int]) -> Message:
    """Return a job for a worker; the deadline becomes one of the host's own clock."""
    return {
        "job": job.job,
        "vehicle": job.vehicle,
        "start": job.start,
        "goal": job.goal,
        "deadline_ns": host_ns(job.deadline),
        "seed": job.seed,
        "method": job.method,
        "left_out": job.left_out,
        "clearance_m": job.clearance_m,
        "start_speed_mps": job.start_speed_mps,
        "start_curvature_per_m": job.start_curvature_per_m,
        "gap_wanted": job.gap_wanted,
        "revision": job.revision,
        "handle": job.handle,
    }


def outcome_message(outcome: events.Outcome) -> Message:
    """Return an outcome as a worker sent it."""
    return {
        "kind": outcome.kind,
        "cost": outcome.cost,
        "body": outcome.body,
        "packed": bytes(outcome.packed),
        "path": outcome.path,
    }


def change_message(change: effects.Change, host_ns: Callable[[Instant], int]) -> Message:
    """Return a change for the surveyor; its geometry is not looked at."""
    told = change.message
    return {
        "what": change.what,
        "layer": change.layer,
        "settings": {
            "unknown_blocks": change.settings.unknown_blocks,
            "outlines_only": change.settings.outlines_only,
            "decay_s": change.settings.decay_s,
        },
        "as_of_s": None if change.as_of is None else host_ns(change.as_of) / SECOND_NS,
        "message": None if told is None else told.model_dump(),
        "packed": bytes(change.packed),
        "ids": change.ids,
    }


def watch_message(watch: effects.WatchRoute) -> Message:
    """Return a route to watch for the surveyor; its numbers are not looked at."""
    return {
        "guard": watch.guard,
        "unit": watch.unit,
        "name": watch.name,
        "vehicle": watch.vehicle,
        "columns": {name: column.model_dump() for name, column in watch.columns.items()},
        "packed": bytes(watch.packed),
        "left_out": watch.left_out,
        "clearance_m": watch.clearance_m,
        "progress_m": watch.progress_m,
    }
