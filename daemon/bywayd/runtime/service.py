"""
One life of the daemon, from the settings to the exit status.

The order matters. The template is started before the first ZeroMQ context exists, so that
nothing of a socket can get into it; the entrances are bound before anybody is told that the
daemon is there; the crew ends last, and with the front whatever happens.
"""

import contextlib
import gc
import secrets
import signal
import socket
from collections.abc import Iterator
from importlib import metadata
from pathlib import Path
from typing import Any, Final

import structlog

from byway.errors import BadValue
from byway.keys import Keys, load_keys
from byway.messages import build_all
from bywayd.core.effects import LayerFlags
from bywayd.core.front import Front
from bywayd.core.front_settings import FrontSettings, KnownVehicle
from bywayd.core.invariant import Defect
from bywayd.crew.kinship import adopt_orphans, call_oneself
from bywayd.crew.memory import SiteMemory
from bywayd.crew.skills import default_skills
from bywayd.runtime.clock import SystemClock
from bywayd.runtime.logs import start_logging
from bywayd.runtime.loop import Loop
from bywayd.runtime.outside import Outside
from bywayd.runtime.processes import signals_of_the_front
from bywayd.runtime.sockets import (
    DoorFault,
    IpcFolder,
    SocketName,
    ipc_folders,
    told_endpoints,
)
from bywayd.runtime.staff import Staff, StaffSettings, TemplateFailed
from bywayd.runtime.watch import Watch
from bywayd.settings import Settings, state_folder

#: A worker owes a sign of life every 100 ms. When the machine is full it is niced and may have to
#: wait its turn; longer than this, something is wrong with it, and most budgets are not over yet.
worker_silence_s: Final = 0.25

#: A worker that gives signs of life but is late is slow, not lost: on a full machine it may have
#: been kept waiting, and a new one would have to make all that it knows of the site once more.
worker_grace_s: Final = 0.2

#: The surveyor says nothing while it publishes, and a square kilometre with 5,000 obstacles that
#: arrives at once takes it 4 s on a full machine.
surveyor_silence_s: Final = 20.0

#: How far the site's memory may grow. Nothing of it exists before it is needed, and a full site
#: of 400 x 400 m takes some hundred megabytes.
site_memory_bytes_max: Final = 8 * 1024**3

# Exit statuses, as in sysexits.h where it has one.
ended_well: Final = 0
cannot_work: Final = 1
cannot_listen: Final = 69
broke_a_rule: Final = 70

log = structlog.get_logger()


def serve(settings: Settings, *, skills: str = default_skills) -> int:
    """
    Serve until SIGTERM or SIGINT, and return the exit status.

    Args:
        skills: Module with what surveyor and workers can do; tests name one of their own.
    """
    style = None if settings.log.form == "auto" else settings.log.form
    logs = start_logging(style=style, level=settings.log.level)
    try:
        return _serve(settings, skills, logs)
    except DoorFault as fault:
        log.error("daemon.cannot_listen", why=str(fault))
        return cannot_listen
    except TemplateFailed as fault:
        log.error("daemon.cannot_work", why=str(fault))
        return cannot_work
    except Defect as defect:
        # Whatever state this was, nobody has thought about it. The supervisor starts us again,
        # with a new epoch, and the sources send their layers.
        log.critical("daemon.defect", rule=defect.rule, story=list(defect.story))
        return broke_a_rule
    finally:
        logs.close()


def _serve(settings: Settings, skills: str, logs: Any) -> int:
    call_oneself("byway-front")
    adopt_orphans()
    clock, watch = SystemClock(), Watch()
    epoch = secrets.token_hex(8)
    endpoints: dict[SocketName, tuple[str, ...]] = {
        "requests": settings.sockets.requests,
        "updates": settings.sockets.updates,
        "events": settings.sockets.events,
    }
    with contextlib.ExitStack() as closing:
        for folder in sorted(ipc_folders([e for each in endpoints.values() for e in each])):
            closing.callback(_hold(folder).release)
        signals = closing.enter_context(_signals())
        memory = SiteMemory.create(site_memory_bytes_max)
        closing.callback(memory.close)
        keep_file = settings.keep.file or ""
        if keep_file and Path(keep_file).parent == state_folder():
            # Only this one: another that is missing may be a disk that is not there yet, and
            # must not be taken for a site without anything in it.
            state_folder().mkdir(mode=0o700, parents=True, exist_ok=True)
        loop = Loop(clock, watch, _site_settings(settings), logs, keep_file)
        staff_settings = StaffSettings(skills, settings.workers.nice, settings.workers.cores)
        staff = Staff(staff_settings, memory, watch, loop.reports())
        closing.callback(staff.end)
        staff.start()
        outside = Outside(
            endpoints,
            epoch,
            keys=_keys(settings),
            list_file=Path(settings.keys.allowed or ""),
            peers_max=settings.sockets.connections_max,
            tell=log.warning,
        )
        closing.callback(outside.close)
        core = Front(_front_settings(settings, outside), epoch, secrets.randbits(63))
        allowed = None if outside.admission is None else len(outside.admission)
        log.info("daemon.listening", epoch=epoch, allowed=allowed, **outside.endpoints)
        build_all()  # otherwise the first message of each kind would cost some milliseconds
        # What exists now stays; the collector need not go through it in the middle of a turn.
        gc.collect()
        gc.freeze()
        why = loop.run(core, outside, staff, signals)
        log.info("daemon.ended", why=why)
    return cannot_work if loop.has_failed else ended_well


def _keys(settings: Settings) -> Keys | None:
    if settings.keys.file is None:
        return None
    try:
        return load_keys(settings.keys.file)
    except BadValue as fault:
        raise DoorFault(fault.text) from fault


def _hold(folder: Path) -> IpcFolder:
    return IpcFolder(folder)


@contextlib.contextmanager
def _signals() -> Iterator[int]:
    """Return a descriptor from which the numbers of arrived signals can be read."""
    ours, systems = socket.socketpair()
    ours.setblocking(False)
    systems.setblocking(False)
    before = signal.set_wakeup_fd(systems.fileno(), warn_on_full_buffer=False)
    handlers = {number: signal.signal(number, _do_nothing) for number in signals_of_the_front}
    try:
        yield ours.fileno()
    finally:
        for number, handler in handlers.items():
            signal.signal(number, handler)
        signal.set_wakeup_fd(before)
        ours.close()
        systems.close()


def _do_nothing(_number: int, _frame: object) -> None:
    # A handler must exist for the system to tell us; the loop reads the number.
    return


def _site_settings(settings: Settings) -> dict[str, Any]:
    return {
        "site": settings.site.model_dump(mode="json"),
        "layers": {
            name: {
                "unknown_blocks": layer.unknown_blocks,
                "outlines_only": layer.outlines_only,
                "decay_s": layer.decay_s,
            }
            for name, layer in settings.layers.items()
        },
    }


def _front_settings(settings: Settings, outside: Outside) -> FrontSettings:
    return FrontSettings(
        vehicles={
            name: KnownVehicle(
                section.model, {"model": section.model, **_plain(section.arguments())}
            )
            for name, section in settings.vehicles.items()
        },
        layers={
            name: LayerFlags(
                layer.unknown_blocks, layer.outlines_only, layer.durable, layer.decay_s
            )
            for name, layer in settings.layers.items()
        },
        expected={
            name: (layer.expected_period_s, layer.when_stale)
            for name, layer in settings.layers.items()
            if layer.expected_period_s is not None
        },
        track_expires_s=settings.site.track_expires_s,
        updates_endpoints=told_endpoints(
            settings.sockets.tell_updates, outside.endpoints["updates"]
        ),
        events_endpoints=told_endpoints(settings.sockets.tell_events, outside.endpoints["events"]),
        software=f"bywayd {metadata.version('byway')}",
        workers=settings.workers.count,
        margin_s=settings.answers.margin_s,
        budget_max_s=settings.answers.budget_s_max,
        keeps=settings.keep.file is not None,
        keep_bytes_max=settings.keep.bytes_max,
        guards_max=settings.guards.count_max,
        guard_silence_s=settings.guards.silence_s,
        guard_budget_s=settings.guards.budget_s,
        worker_silence_s=worker_silence_s,
        worker_grace_s=worker_grace_s,
        surveyor_silence_s=surveyor_silence_s,
    )


def _plain(arguments: dict[str, Any]) -> dict[str, Any]:
    return {
        name: [list(point) for point in value] if isinstance(value, tuple) else value
        for name, value in arguments.items()
    }
