"""A daemon as a child process: started, looked at, ended."""

import contextlib
import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any, Final

import byway
from bywayd.bench.vehicles import VEHICLES

#: Kernels may have to be compiled first.
READY_S_MAX: Final = 200.0
STOP_S_MAX: Final = 10.0
LOOK_EVERY_S: Final = 0.01
#: A benchmark that is killed must not leave a daemon behind.
_SERVE: Final = """
import sys
from bywayd.crew.kinship import die_with
die_with(int(sys.argv.pop(1)))
from bywayd.commands import main
main()
"""


class Child:
    """One life of a daemon of our own, in a folder of its own."""

    def __init__(
        self, folder: Path, workers: int, limits_m: tuple[float, float, float, float]
    ) -> None:
        self._log = folder / "log"
        file = folder / "site.toml"
        file.write_text(_settings(folder, workers, limits_m))
        self.endpoint = f"ipc://{folder}/run/requests"
        self._began_s = time.perf_counter()
        # What is set for a daemon of the user is not meant for this one.
        environment = {k: v for k, v in os.environ.items() if not k.startswith("BYWAY_")}
        if "BYWAY_CACHE_DIR" in os.environ:
            environment["BYWAY_CACHE_DIR"] = os.environ["BYWAY_CACHE_DIR"]
        with self._log.open("wb") as log:
            self._process = subprocess.Popen(
                [sys.executable, "-c", _SERVE, str(os.getpid()), "serve", str(file)],
                stdout=log,
                stderr=log,
                env=environment,
            )

    def wait_ready(self) -> float:
        """
        Wait until it takes replans; return the seconds since its start.

        Raises:
            RuntimeError: It does not; the text has its last words.
        """
        while time.perf_counter() - self._began_s < READY_S_MAX and self._process.poll() is None:
            with contextlib.suppress(byway.BywayError), byway.Client(self.endpoint) as client:
                while client.hello().state != "ready":
                    time.sleep(LOOK_EVERY_S)
                return time.perf_counter() - self._began_s
            time.sleep(LOOK_EVERY_S)
        last = self._log.read_text(errors="replace").splitlines()[-8:]
        raise RuntimeError("the daemon does not get ready: " + " | ".join(last))

    def tcp_endpoint(self) -> str:
        """Return where its requests socket listens on TCP."""
        for line in self._log.read_text(errors="replace").splitlines():
            told = json.loads(line) if line.startswith("{") else {}
            if told.get("event") == "daemon.listening":
                return next(str(each) for each in told["requests"] if each.startswith("tcp:"))
        raise RuntimeError("the daemon does not say where it listens")

    def processes(self, prefix: str) -> list[int]:
        """Return those of its processes whose names for themselves begin so."""
        return [pid for pid in _descendants(self._process.pid) if _name_of(pid).startswith(prefix)]

    def stop(self) -> None:
        """End it."""
        if self._process.poll() is None:
            self._process.send_signal(signal.SIGTERM)
        try:
            self._process.wait(STOP_S_MAX)
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.wait()


@contextmanager
def child(
    folder: Path, workers: int, limits_m: tuple[float, float, float, float]
) -> Iterator[Child]:
    """Run a daemon with the vehicles of the benchmark."""
    made = Child(folder, workers, limits_m)
    try:
        yield made
    finally:
        made.stop()


def memory_mb(pid: int, *, private: bool) -> float:
    """Return the memory of a process: all that is resident, or only what nobody shares with it."""
    wanted = ("Private_Clean:", "Private_Dirty:") if private else ("Rss:",)
    total_kb = 0
    for line in Path(f"/proc/{pid}/smaps_rollup").read_text().splitlines():
        if line.startswith(wanted):
            total_kb += int(line.split()[1])
    return total_kb / 1024.0


def _settings(folder: Path, workers: int, limits_m: tuple[float, float, float, float]) -> str:
    ipc = {name: f"ipc://{folder}/run/{name}" for name in ("requests", "updates", "events")}
    lines = [
        "[site]",
        f"limits_m = {list(limits_m)}",
        "[sockets]",
        f'requests = ["{ipc["requests"]}", "tcp://127.0.0.1:0"]',
        f'updates = ["{ipc["updates"]}"]',
        f'events = ["{ipc["events"]}"]',
        "[keep]",
        f'file = "{folder}/kept.sqlite"',
        "[workers]",
        f"count = {workers}",
        "[log]",
        'form = "json"',
    ]
    for name, vehicle in VEHICLES.items():
        lines.append(f"[vehicles.{name}]")
        lines += [f"{key} = {_toml(value)}" for key, value in vehicle.settings().items()]
    return "\n".join(lines) + "\n"


def _toml(value: Any) -> str:
    # What vehicles are made of (texts, numbers, lists of lists) TOML writes as JSON does.
    return json.dumps(value)


def _descendants(pid: int) -> list[int]:
    try:
        children = Path(f"/proc/{pid}/task/{pid}/children").read_text().split()
    except OSError:
        return []
    return [pid, *(each for one in children for each in _descendants(int(one)))]


def _name_of(pid: int) -> str:
    try:
        return Path(f"/proc/{pid}/comm").read_text().strip()
    except OSError:
        return ""
