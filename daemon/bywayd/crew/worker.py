"""
A worker: one process that takes one job at a time and sends what it finds.

Between two slices of a search it looks at its channel, so that `finish` and `cancel` take
effect within a slice, and gives a sign of life. Whatever goes wrong inside a job is told as a
failed job and the worker lives on; what ends the process (a wild kernel, the system running
out of memory) or never returns is for the front to find out.
"""

import mmap
import time
import traceback
from collections import OrderedDict, deque
from collections.abc import Mapping
from typing import Any, Final

import msgpack

from bywayd.crew.channel import Channel, ChannelFull
from bywayd.crew.memory import SiteMemory
from bywayd.crew.skills import Found, Refused, Skills

#: From the end of the planner's time to the deadline of the job: a slice in progress (2 ms at
#: most) and making and sending the last message; but of a short job no more than this share.
closing_time_ns: Final = 3_000_000
closing_ratio_max: Final = 0.25

#: How often the channel is looked at while a job runs. A look costs about 2 microseconds.
look_every_ns: Final = 500_000

#: How often a busy worker says that it is alive; it owes a sign every 100 ms.
alive_every_ns: Final = 40_000_000

snapshots_kept: Final = 2
vehicles_kept: Final = 64


class Worker:
    """The life of one worker process; `run` does not return."""

    def __init__(self, channel: Channel, memory: SiteMemory, skills: Skills) -> None:
        self._channel = channel
        self._memory: mmap.mmap = memory.map_readable()
        self._skills = skills
        #: The newest snapshots that were asked for, and vehicles, by what they were made from.
        self._snapshots: OrderedDict[bytes, object] = OrderedDict()
        self._vehicles: OrderedDict[bytes, object] = OrderedDict()
        #: Arrived while a job ran, to be done after it.
        self._waiting: deque[dict[str, Any]] = deque()
        # The job that runs:
        self._job = 0
        self._stop_ns = 0
        self._look_ns = 0
        self._alive_ns = 0

    def run(self) -> None:
        """Say ready, then do what comes, until the front closes the channel (ChannelClosed)."""
        self._channel.wait_put({"say": "ready"})
        while True:
            for message in self._channel.wait_take():
                self._waiting.append(message)
            while self._waiting:
                self._do(self._waiting.popleft())

    def _do(self, message: Mapping[str, Any]) -> None:
        what = message["do"]
        if what == "ping":
            self._channel.wait_put({"say": "alive"})
        elif what == "plan":
            self._at_job(message, self._plan)
        elif what == "check":
            self._at_job(message, self._check)
        # "finish" and "cancel" of a job that has just ended: nothing to do.

    def _at_job(self, job: Mapping[str, Any], do: Any) -> None:
        now_ns = time.monotonic_ns()
        self._job = job["job"]
        left_ns = max(0, job["deadline_ns"] - now_ns)
        self._stop_ns = job["deadline_ns"] - min(closing_time_ns, int(left_ns * closing_ratio_max))
        self._look_ns = now_ns
        self._alive_ns = now_ns + alive_every_ns
        try:
            answer = do(job)
        except Refused as fault:
            answer = _failed(fault.code, fault.text, fault.facts)
        except Exception as fault:
            # Nobody expected this, and nothing in it is a reason to die: the job's state is gone
            # with the job. The story goes to the log, a short text to the asker.
            self._channel.wait_put({"say": "trouble", "text": traceback.format_exc()})
            answer = _failed("internal", f"the planner failed: {type(fault).__name__}: {fault}", {})
        finally:
            self._job = 0
        self._channel.wait_put({**answer, "job": job["job"]})

    def _plan(self, job: Mapping[str, Any]) -> dict[str, Any]:
        snapshot, vehicle = self._snapshot(job), self._vehicle(job)
        found = self._skills.plan(snapshot, vehicle, job, self._time_left_s, self._send_better)
        return {"say": "done", "outcome": found}

    def _check(self, job: Mapping[str, Any]) -> dict[str, Any]:
        snapshot, vehicle = self._snapshot(job), self._vehicle(job)
        wrong = self._skills.check(snapshot, vehicle, job, job["outcome"])
        return {"say": "checked", "good": not wrong, "text": wrong}

    def _send_better(self, found: Found) -> None:
        try:
            self._channel.put({"say": "better", "job": self._job, "outcome": found})
        except ChannelFull:
            # The front stands still. The last message repeats the best route, so this one may go.
            return

    def _time_left_s(self) -> float:
        now_ns = time.monotonic_ns()
        if now_ns >= self._look_ns:
            self._look_ns = now_ns + look_every_ns
            self._look(now_ns)
        return (self._stop_ns - now_ns) * 1e-9

    def _look(self, now_ns: int) -> None:
        if self._channel.wants_to_send:
            self._channel.flush()
        for message in self._channel.take():
            what = message["do"]
            if what in ("finish", "cancel"):
                if message["job"] == self._job:
                    self._stop_ns = min(self._stop_ns, now_ns)
            elif what == "ping":
                self._channel.put({"say": "alive"})
            else:
                self._waiting.append(message)
        if now_ns >= self._alive_ns:
            self._alive_ns = now_ns + alive_every_ns
            self._channel.put({"say": "alive"})

    def _snapshot(self, job: Mapping[str, Any]) -> object:
        key = msgpack.packb([job["revision"], job["handle"]])
        if key not in self._snapshots:
            _make_room(self._snapshots, snapshots_kept)
            self._snapshots[key] = self._skills.attach(self._memory, job["handle"])
        return self._snapshots[key]

    def _vehicle(self, job: Mapping[str, Any]) -> object:
        key = msgpack.packb(job["vehicle"])
        if key not in self._vehicles:
            _make_room(self._vehicles, vehicles_kept)
            self._vehicles[key] = self._skills.vehicle(job["vehicle"])
        return self._vehicles[key]


def _make_room(kept: OrderedDict[bytes, object], count_max: int) -> None:
    while len(kept) >= count_max:
        kept.popitem(last=False)


def _failed(code: str, text: str, facts: Mapping[str, Any]) -> dict[str, Any]:
    return {"say": "failed", "code": code, "text": text[:500], "facts": dict(facts)}


def work(channel: Channel, memory: SiteMemory, skills: Skills) -> None:
    """Be a worker until the front closes the channel."""
    # When memory runs out, one job and a retry are the cheapest thing to lose here.
    with open("/proc/self/oom_score_adj", "w") as score:
        score.write("500")
    Worker(channel, memory, skills).run()
