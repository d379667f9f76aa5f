"""`byway demo`: a daemon, a simulated yard beside it, and a report."""

import contextlib
import json
import os
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, Final

import typer

from bywayd.commands.shared import CAUTION, AsJson, Status, console, fail, say_json

if TYPE_CHECKING:
    from rich.console import Console

#: The first start compiles all kernels.
READY_S_MAX: Final = 300.0
STOP_S_MAX: Final = 5.0
WORKERS_MIN: Final = 2
LINE_EVERY_S: Final = 5.0


def demo(
    seconds: Annotated[float, typer.Option(min=1.0, help="How long the yard is open.")] = 30.0,
    seed: Annotated[int, typer.Option(help="Another seed is another day.")] = 1,
    picture: Annotated[Path, typer.Option(help="Where the drawing goes.")] = Path("yard.png"),
    as_json: AsJson = False,
) -> None:
    """Let three vehicles work in a brick and timber yard, driven by nothing but the daemon."""
    out = console(to_stderr=as_json)
    out.print("[bold]Byway demo:[/bold] a brick and timber yard, three vehicles, one daemon.")
    out.print(f"Caution: {CAUTION}", style="yellow")
    with tempfile.TemporaryDirectory(prefix="byway-") as folder:
        endpoint = f"ipc://{folder}/requests"
        with _daemon(Path(folder)) as process:
            _wait_until_ready(endpoint, process, Path(folder), out)
            report = _run_yard(endpoint, seconds, seed, picture, out)
        if process.returncode != 0:
            report["went_wrong"].append(f"the daemon ended with status {process.returncode}")
    if as_json:
        say_json(report)
    _conclude(report, picture, out)


@contextlib.contextmanager
def _daemon(folder: Path) -> Iterator[subprocess.Popen[bytes]]:
    """Run a daemon on sockets of its own, which nobody else can take or has taken."""
    from bywayd.yard.scene import LIMITS_M

    environment = {
        # Settings of another daemon on this machine are not meant for this one.
        **{n: t for n, t in os.environ.items() if not n.startswith("BYWAY_") or "__" not in n},
        **{
            f"BYWAY_SOCKETS__{name.upper()}": json.dumps([f"ipc://{folder}/{name}"])
            for name in ("requests", "updates", "events")
        },
        "BYWAY_SITE__LIMITS_M": json.dumps(LIMITS_M),
        "BYWAY_LOG__FORM": "json",
        # Three vehicles ask at the same time; workers give way to everything else.
        # A busy demonstration machine is late by milliseconds; the vehicles have them to spare.
        "BYWAY_ANSWERS__MARGIN_S": "0.006",
        "BYWAY_WORKERS__COUNT": str(max(WORKERS_MIN, len(os.sched_getaffinity(0)) - 1)),
    }
    with (folder / "daemon.log").open("wb") as log:
        # Ctrl-C goes to a whole process group; the daemon has to outlive the yard.
        process = subprocess.Popen(
            [sys.executable, "-m", "bywayd", "serve"],
            env=environment,
            stdout=log,
            stderr=log,
            start_new_session=True,
        )
    try:
        yield process
    finally:
        process.terminate()
        try:
            process.wait(STOP_S_MAX)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait()


def _wait_until_ready(
    endpoint: str, process: subprocess.Popen[bytes], folder: Path, out: "Console"
) -> None:
    import byway

    began_s = time.monotonic()
    told = False
    while time.monotonic() - began_s < READY_S_MAX:
        if process.poll() is not None:
            break
        with contextlib.suppress(byway.BywayError), byway.Client(endpoint) as client:
            if client.hello().state == "ready":
                return
        if not told and time.monotonic() - began_s > 3.0:
            told = True
            out.print("The daemon compiles its planning kernels; the first time takes a while.")
        time.sleep(0.1)
    last = (folder / "daemon.log").read_text(errors="replace").splitlines()[-12:]
    fail(Status.NO, "the daemon did not get ready. Its last lines:\n" + "\n".join(last))


def _run_yard(
    endpoint: str, seconds: float, seed: int, picture: Path, out: "Console"
) -> dict[str, Any]:
    arguments = [endpoint, str(seconds), str(seed), str(picture)]
    yard = subprocess.Popen(
        [sys.executable, "-m", "bywayd.yard.simulate", *arguments], stdout=subprocess.PIPE
    )
    report: dict[str, Any] | None = None
    try:
        with _cutting_short(yard), _Progress(out, seconds) as progress:
            for line in _lines_of(yard):
                if "progress" in line:
                    progress.show(line["progress"])
                else:
                    report = line["report"]
    finally:
        with contextlib.suppress(subprocess.TimeoutExpired):
            yard.wait(STOP_S_MAX)
        if yard.poll() is None:
            yard.kill()
            yard.wait()
    if report is None:
        fail(Status.NO, f"the simulated yard ended with status {yard.returncode}, without a report")
    return report


@contextlib.contextmanager
def _cutting_short(yard: subprocess.Popen[bytes]) -> Iterator[None]:
    """Pass SIGINT and SIGTERM on to the yard, which then reports what there is."""

    def forward(number: int, _: object) -> None:
        yard.send_signal(number)

    before = {n: signal.signal(n, forward) for n in (signal.SIGINT, signal.SIGTERM)}
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def _lines_of(yard: subprocess.Popen[bytes]) -> Iterator[dict[str, Any]]:
    if yard.stdout is not None:
        for line in yard.stdout:
            yield json.loads(line)


class _Progress:
    """What goes on in the yard: a live display on a terminal, otherwise a line now and then."""

    def __init__(self, out: "Console", seconds: float) -> None:
        from rich.live import Live

        self._out, self._seconds = out, seconds
        self._live = Live(console=out, auto_refresh=False) if out.is_terminal else None
        self._next_s = 0.0

    def __enter__(self) -> "_Progress":
        if self._live is not None:
            self._live.start()
        return self

    def __exit__(self, *_: object) -> None:
        if self._live is not None:
            self._live.stop()

    def show(self, now: dict[str, Any]) -> None:
        """Show the yard as it is now."""
        first = "" if now["first_ms"] is None else f", first route {now['first_ms']:.1f} ms"
        line = (
            f"{now['seconds']:5.0f} of {self._seconds:.0f} s: {now['deliveries']} deliveries, "
            f"{now['replans']} replans{first}, {now['packs']} packs in the way, "
            f"{now['collisions']} collisions"
        )
        units = [f"        {name:10s} {doing}" for name, doing in now["units"].items()]
        if self._live is not None:
            self._live.update("\n".join([line, *units]), refresh=True)
        elif now["seconds"] >= self._next_s:
            self._next_s = now["seconds"] + LINE_EVERY_S
            self._out.print(line)


def _conclude(report: dict[str, Any], picture: Path, out: "Console") -> None:
    from bywayd.yard.report import Report, table_of

    wrong = report.pop("went_wrong")
    out.print(table_of(Report(**report)))
    out.print(f"Picture: {picture}")
    if wrong:
        out.print("Not well: " + "; ".join(wrong), style="bold red")
        raise typer.Exit(int(Status.NO))
    out.print("All was well.", style="bold green")
