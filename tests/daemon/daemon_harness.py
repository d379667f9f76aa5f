"""A whole daemon as a process of its own, and a peer that talks to it in bare frames."""

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import msgpack
import zmq

from byway import frames, messages, obstacles
from byway.frames import Header, Received

ROOT = Path(__file__).resolve().parents[2]
STANDIN = "tests.daemon.standin_skills"

RUN = """
import resource
import sys
from pathlib import Path
from bywayd.runtime import serve
from bywayd.settings import load
if sys.argv[3]:
    resource.setrlimit(resource.RLIMIT_NOFILE, (int(sys.argv[3]),) * 2)
sys.exit(serve(load(Path(sys.argv[1])), skills=sys.argv[2]))
"""

SETTINGS = """
[site]
limits_m = [-100.0, -100.0, 100.0, 100.0]
[sockets]
requests = ["ipc://{folder}/requests", "tcp://127.0.0.1:0"]
updates = ["ipc://{folder}/updates"]
events = ["ipc://{folder}/events", "tcp://127.0.0.1:0"]
[workers]
count = {workers}
[log]
form = "json"
level = "debug"
[vehicles.tug]
model = "car"
footprint_m = [[-0.6, -0.7], [2.2, -0.7], [2.2, 0.7], [-0.6, 0.7]]
turn_radius_m_min = 2.6
"""


class Daemon:
    """Started at once; `stop` or `kill` it."""

    def __init__(
        self,
        folder: Path,
        *,
        skills: str = STANDIN,
        workers: int = 2,
        environment: dict[str, str] | None = None,
        log_to: int | None = None,
        new_group: bool = False,
        descriptors_max: int | None = None,
    ) -> None:
        folder.mkdir(parents=True, exist_ok=True)
        self.folder = folder
        self.settings_file = folder / "site.toml"
        sockets = folder / "run"
        self.settings_file.write_text(SETTINGS.format(folder=sockets, workers=workers))
        self.endpoints = {n: f"ipc://{sockets}/{n}" for n in ("requests", "updates", "events")}
        self.log_file = folder / "log.json"
        command = [sys.executable, "-c", RUN]
        with self.log_file.open("ab") as log:
            self.process = subprocess.Popen(
                [*command, str(self.settings_file), skills, str(descriptors_max or "")],
                cwd=ROOT,
                process_group=0 if new_group else None,
                stderr=log if log_to is None else log_to,
                stdout=subprocess.DEVNULL,
                env={
                    **os.environ,
                    "PYTHONPATH": str(ROOT),
                    "STANDIN_ONCE": str(folder / "once"),
                    **(environment or {}),
                },
            )

    def log_lines(self, event: str | None = None) -> list[dict[str, Any]]:
        """Return the log lines so far, or those of one event."""
        # The last one may be half written.
        whole, _, _ = self.log_file.read_text().rpartition("\n")
        lines = [json.loads(line) for line in whole.splitlines()]
        return [line for line in lines if event in (None, line["event"])]

    def family(self) -> dict[str, int]:
        """Return the processes of this daemon by the name that they have given themselves."""
        found: dict[str, int] = {}
        for pid in _descendants(self.process.pid):
            try:
                found[Path(f"/proc/{pid}/comm").read_text().strip()] = pid
            except OSError:
                continue
        return found

    def stop(self, within_s: float = 10.0) -> int:
        """Ask it to end, and return its exit status."""
        self.process.send_signal(signal.SIGTERM)
        return self.process.wait(within_s)

    def end(self) -> None:
        """End it whatever its state, for the end of a test."""
        if self.process.poll() is None:
            try:
                self.stop()
            except subprocess.TimeoutExpired:
                self.process.kill()
                self.process.wait()


def _descendants(pid: int) -> list[int]:
    try:
        children = Path(f"/proc/{pid}/task/{pid}/children").read_text().split()
    except OSError:
        return []
    return [pid, *(each for child in children for each in _descendants(int(child)))]


def eventually(holds: Callable[[], Any], within_s: float = 10.0) -> Any:
    """Wait until something is true and return it; fail if that takes too long."""
    end_s = time.monotonic() + within_s
    while not (found := holds()):
        assert time.monotonic() < end_s, "it did not come to pass in time"
        time.sleep(0.005)
    return found


class Peer:
    """A client that says what it is told to, and hears everything."""

    def __init__(self, daemon: Daemon) -> None:
        self._context = zmq.Context()
        self._sockets: dict[str, zmq.Socket] = {}
        self._endpoints = daemon.endpoints
        self._number = 0
        self._serial = 0
        self.epoch = ""

    def _socket(self, name: str) -> zmq.Socket:
        if name not in self._sockets:
            sock = self._context.socket(zmq.SUB if name == "events" else zmq.DEALER)
            sock.setsockopt(zmq.LINGER, 0)
            sock.setsockopt(zmq.RECONNECT_IVL, 10)
            sock.connect(self._endpoints[name])
            self._sockets[name] = sock
        return self._sockets[name]

    # -- requests

    def send(self, message: messages.Request, id: str = "", packed: bytes = b"") -> str:
        self._serial += 1
        id = id or f"r-{self._serial}"
        parts = frames.encode(Header(message.kind, id), message, packed)
        self._socket("requests").send_multipart(parts)
        return id

    def hear(self, within_s: float = 10.0, name: str = "requests") -> Received:
        sock = self._socket(name)
        assert sock.poll(int(within_s * 1000)), "nothing came"
        parts = sock.recv_multipart()
        if name == "events":
            return frames.decode(parts[1:], frames.EVENTS)
        return frames.decode(parts, frames.REPLIES)

    def ask(
        self, message: messages.Request, within_s: float = 10.0, packed: bytes = b""
    ) -> messages.Message:
        """Send a request and return its first reply."""
        id = self.send(message, packed=packed)
        while (came := self.hear(within_s)).header.id != id:
            pass
        return came.message

    def hello(self, within_s: float = 10.0) -> messages.Welcome:
        id = self.send(messages.Hello(versions=[1], client="peer"))
        while (came := self.hear(within_s)).header.id != id:
            pass
        assert isinstance(came.message, messages.Welcome)
        self.epoch = came.header.epoch
        return came.message

    def when_ready(self, within_s: float = 20.0) -> messages.Welcome:
        """Wait until the daemon has warmed up."""
        end_s = time.monotonic() + within_s
        while (welcome := self.hello()).state != "ready":
            assert time.monotonic() < end_s, welcome
            time.sleep(0.01)
        return welcome

    def send_replan(self, method: str, budget_s: float, **more: Any) -> str:
        more.setdefault("unit", f"unit-{self._serial}")
        return self.send(
            messages.Replan(
                vehicle="tug",
                start=(0.0, 0.0, 0.0),
                goal=(5.0, 0.0, 0.0),
                budget_s=budget_s,
                method=method,
                **more,
            )
        )

    def answer_to(self, id: str, within_s: float = 10.0) -> messages.Message:
        """Return the one message that ends a replan."""
        while True:
            came = self.hear(within_s)
            if came.header.id == id and not isinstance(came.message, messages.Accepted):
                return came.message

    def replan(self, method: str, budget_s: float, **more: Any) -> messages.Message:
        return self.answer_to(self.send_replan(method, budget_s, **more))

    # -- changes

    def change(self, message: messages.Change, packed: bytes = b"") -> int:
        self._number += 1
        header = Header(message.kind, source="peer", number=self._number, epoch=self.epoch)
        self._socket("updates").send_multipart(frames.encode(header, message, packed))
        return self._number

    def put(self, layer: str, **discs: tuple[float, float, float]) -> int:
        fields, packed = obstacles.pack_shapes(obstacles.shapes({}, discs))
        return self.change(messages.ReplaceLayer(layer=layer, **fields), packed)

    def decided(self, number: int, within_s: float = 10.0) -> messages.Message:
        """Return the acknowledgement that covers this change, or its refusal."""
        while True:
            message = self.hear(within_s, "updates").message
            if isinstance(message, messages.Acknowledged) and message.number >= number:
                return message
            if isinstance(message, messages.Refused) and message.number == number:
                return message

    # -- events

    def subscribe(self, topic: str) -> None:
        sock = self._socket("events")
        sock.setsockopt(zmq.SUBSCRIBE, topic.encode())
        while not isinstance(self.hear(name="events").message, messages.Listening):
            pass

    def close(self) -> None:
        for sock in self._sockets.values():
            sock.close()
        self._context.term()


@contextmanager
def running(folder: Path, **options: Any) -> Iterator[tuple[Daemon, Peer]]:
    """A daemon that is ready, with a peer that has said hello."""
    daemon = Daemon(folder, **options)
    peer = Peer(daemon)
    try:
        peer.when_ready()
        yield daemon, peer
    finally:
        peer.close()
        daemon.end()


def outcome_of(answer: messages.Message) -> dict[str, Any]:
    """Return the outcome inside an answer."""
    assert isinstance(answer, messages.AnswerMessage), answer
    return msgpack.unpackb(answer.outcome)
