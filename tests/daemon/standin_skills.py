"""
Skills for tests of everything around planning: what a crew does is told by the job itself.

The site is a map of obstacle ids by layer, kept as msgpack in the shared memory. The method of
a replan says how the worker behaves; `METHODS` lists them.
"""

import contextlib
import ctypes
import os
import signal
import stat
import time
from collections.abc import Callable, Iterator, Mapping
from mmap import mmap
from typing import Any

import msgpack

from bywayd.crew.skills import Found, Progress, Published, Refused

KERNELS = ("clearance", "floods", "lattice")


def warm(progress: Progress) -> None:
    for done, name in enumerate(KERNELS):
        progress(done, len(KERNELS), name)
        time.sleep(float(os.environ.get("STANDIN_WARM_S", "0")) / len(KERNELS))
    if os.environ.get("STANDIN_WARM_FAILS"):
        raise RuntimeError("the compiler is out of order")


BLOCK: dict[str, Any] = {
    "at_m": 10.0, "t_s": 5.0, "x_m": 1.0, "y_m": 2.0, "heading_rad": 0.0, "kind": "polygon",
    "layer": "way", "id": "0", "depth_m": 0.3,
}  # fmt: skip

# -- the site ---------------------------------------------------------------------------------


class Site:
    def __init__(self, memory: mmap, grow: Callable[[int], None], handle: Mapping[str, Any] | None):
        self._memory, self._grow = memory, grow
        self._layers: dict[str, list[str]] = {}
        self._revision, self._top = 0, 0
        self._published: Published | None = None
        self._watched: dict[int, float] = {}
        if handle is not None:
            self._layers = _read(memory, handle)
            self._revision, self._top = handle["revision"], handle["at"] + handle["bytes"]
            self._published = Published(handle["revision"], dict(handle))

    def apply(self, change: Mapping[str, Any]) -> Iterator[None]:
        what, layer = change["what"], change["layer"]
        yield
        name = layer.partition("-")[0]
        if name == "refused":
            raise Refused("bad_geometry", "no such shape", {"layer": layer})
        if name == "full":
            raise MemoryError("no room")
        if name == "broken":
            self._layers[layer] = ["half of it"]
            raise RuntimeError("a mistake in the site")
        if name == "killer":
            os.kill(os.getpid(), signal.SIGKILL)
        if name == "slow":
            for _ in range(5):
                time.sleep(0.06)
                yield
        self._published = None
        held = self._layers.setdefault(layer, [])
        if what == "drop":
            held[:] = [each for each in held if each not in change["ids"]]
        elif what == "put":
            held.append(f"{len(held)}")

    def publish(self) -> Published:
        if self._published is None:
            if any(layer.startswith("bursting") for layer in self._layers):
                raise MemoryError("no room to publish")
            self._revision += 1
            blob = msgpack.packb(self._layers)
            at, self._top = self._top, self._top + len(blob)
            self._grow(self._top)
            self._memory[at : self._top] = blob
            handle = {"revision": self._revision, "at": at, "bytes": len(blob)}
            self._published = Published(self._revision, handle)
        return self._published

    def release_before(self, revision: int) -> None:
        return

    def obstacles(self) -> dict[str, int]:
        return {layer: len(held) for layer, held in self._layers.items()}

    def tracks(self) -> dict[str, int]:
        return {layer: len(held) for layer, held in self._layers.items() if layer == "moving"}

    def carry(self, at_s: float) -> None:
        self.carried_s = at_s

    def next_carry_s(self, at_s: float) -> float | None:
        return at_s + 0.05 if "moving" in self._layers else None

    def watch(self, order: Mapping[str, Any]) -> None:
        if order["unit"] == "hopeless":
            raise Refused("bad_value", "no route at all")
        self._watched[order["guard"]] = order["progress_m"]

    def move(self, guard: int, progress_m: float) -> None:
        if guard in self._watched:
            self._watched[guard] = progress_m

    def unwatch(self, guard: int) -> None:
        self._watched.pop(guard, None)

    def look(self) -> Iterator[tuple[int, dict[str, Any] | None]]:
        """Blocked at 10 m by whatever the layer "way" holds."""
        for guard, progress_m in self._watched.items():
            blocked = self._layers.get("way") and progress_m < 10.0
            yield guard, dict(BLOCK) if blocked else None

    def describe(self, question: Mapping[str, Any], at_s: float) -> tuple[dict[str, Any], bytes]:
        layers = [{"layer": n, "polygons": len(h), "discs": 0} for n, h in self._layers.items()]
        return {"revision": self._revision, "layers": layers, "columns": {}}, b""


def _read(memory: mmap, handle: Mapping[str, Any]) -> dict[str, list[str]]:
    return msgpack.unpackb(memory[handle["at"] : handle["at"] + handle["bytes"]])


def new_site(settings: Mapping[str, Any], memory: mmap, grow: Callable[[int], None]) -> Site:
    return Site(memory, grow, None)


def recover_site(
    settings: Mapping[str, Any],
    memory: mmap,
    grow: Callable[[int], None],
    handle: Mapping[str, Any],
    in_use: list[Mapping[str, Any]],
) -> Site:
    return Site(memory, grow, handle)


# -- the planner ------------------------------------------------------------------------------


def attach(memory: mmap, handle: Mapping[str, Any]) -> object:
    return _read(memory, handle)


def vehicle(definition: Mapping[str, Any]) -> object:
    return dict(definition)


def _route(job: Mapping[str, Any], snapshot: Any, cost: float) -> Found:
    body = {
        "kind": "route",
        "cost": cost,
        "cost_unit": "m",
        "bound": 1.0,
        "gap": (cost - 1.0) / cost,
        "seed": job["seed"],
        "left_out": job["left_out"],
        "statistics": {"obstacles": sum(map(len, snapshot.values())), "process": os.getpid()},
    }
    return {
        "kind": "route",
        "cost": cost,
        "body": msgpack.packb(body),
        "packed": b"",
        "path": {"crosses": job["goal"][0]},
    }


def _until_the_end(job: Any, snapshot: Any, time_left_s: Any, on_better: Any) -> Found:
    on_better(_route(job, snapshot, 3.0))
    while time_left_s() > 0.0:
        time.sleep(0.001)
    return _route(job, snapshot, 2.0)


def _at_once(job: Any, snapshot: Any, time_left_s: Any, on_better: Any) -> Found:
    return _route(job, snapshot, 2.0)


def _hang(job: Any, snapshot: Any, time_left_s: Any, on_better: Any) -> Found:
    while True:
        pass


def _hang_with_a_route(job: Any, snapshot: Any, time_left_s: Any, on_better: Any) -> Found:
    on_better(_route(job, snapshot, 3.0))
    while True:
        pass


def _once(job: Mapping[str, Any]) -> bool:
    """Whether this seed is met for the first time by any worker, as told by a file."""
    try:
        mark = f"{os.environ['STANDIN_ONCE']}-{job['method']}-{job['seed']}"
        os.close(os.open(mark, os.O_CREAT | os.O_EXCL))
    except FileExistsError:
        return False
    return True


def _killed(job: Any, snapshot: Any, time_left_s: Any, on_better: Any) -> Found:
    if _once(job):
        os.kill(os.getpid(), signal.SIGKILL)
    return _route(job, snapshot, 2.0)


def _stopped(job: Any, snapshot: Any, time_left_s: Any, on_better: Any) -> Found:
    if _once(job):
        os.kill(os.getpid(), signal.SIGSTOP)
    return _route(job, snapshot, 2.0)


def _wild(job: Any, snapshot: Any, time_left_s: Any, on_better: Any) -> Found:
    if _once(job):
        ctypes.string_at(8)
    return _route(job, snapshot, 2.0)


def _garbles(job: Any, snapshot: Any, time_left_s: Any, on_better: Any) -> Found:
    for number in os.listdir("/proc/self/fd") if _once(job) else ():
        with contextlib.suppress(OSError):
            if stat.S_ISSOCK(os.fstat(int(number)).st_mode):
                os.write(int(number), b"\xff" * 8)
    return _route(job, snapshot, 2.0)


def _raises(job: Any, snapshot: Any, time_left_s: Any, on_better: Any) -> Found:
    raise ZeroDivisionError("in the middle of a search")


def _senseless(job: Any, snapshot: Any, time_left_s: Any, on_better: Any) -> Found:
    raise Refused("bad_value", "no vehicle could mean that", {"field": "start"})


METHODS: Mapping[str, Callable[[Any, Any, Any, Any], Found]] = {
    "auto": _until_the_end,
    "at_once": _at_once,
    "hang": _hang,
    "hang_with_a_route": _hang_with_a_route,
    "killed": _killed,
    "stopped": _stopped,
    "wild": _wild,
    "garbles": _garbles,
    "raises": _raises,
    "senseless": _senseless,
}


def plan(
    snapshot: object,
    vehicle: object,
    job: Mapping[str, Any],
    time_left_s: Callable[[], float],
    on_better: Callable[[Found], None],
) -> Found:
    return METHODS[job["method"]](job, snapshot, time_left_s, on_better)


def check(
    snapshot: object, vehicle: object, job: Mapping[str, Any], outcome: Mapping[str, Any]
) -> str:
    return "it is blocked" if "block" in snapshot else ""  # type: ignore[operator]
