"""`byway demo`: a daemon, a simulated yard beside it, and a report."""

import contextlib
import json
import os
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path
from typing import IO, TYPE_CHECKING, Annotated, Any, Final

import typer

from bywayd.commands.shared import CAUTION, AsJson, Status, console, fail, say_json

if TYPE_CHECKING:
    from rich.console import Console

#: The first start compiles all kernels.
READY_S_MAX: Final = 300.0
STOP_S_MAX: Final = 5.0


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
        **{name: text for name, text in os.environ.items() if not name.startswith("BYWAY_S")},
        **{
            f"BYWAY_SOCKETS__{name.upper()}": json.dumps([f"ipc://{folder}/{name}"])
            for name in ("requests", "updates", "events")
        },
        "BYWAY_SITE__LIMITS_M": json.dumps(LIMITS_M),
        "BYWAY_LOG__FORM": "json",
    }
    with (folder / "daemon.log").open("wb") as log:
        process = subprocess.Popen(
            [sys.executable, "-m", "bywayd", "serve"], env=environment, stdout=log, stderr=log
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
        assert_pipe: IO[bytes] | None = yard.stdout
        for line in assert_pipe or ():
            told = json.loads(line)
            if "progress" in told:
                _show_progress(told["progress"], out)
            else:
                report = told["report"]
    finally:
        with contextlib.suppress(subprocess.TimeoutExpired):
            yard.wait(STOP_S_MAX)
        if yard.poll() is None:
            yard.kill()
            yard.wait()
    if report is None:
        fail(Status.NO, f"the simulated yard ended with status {yard.returncode}, without a report")
    return report


def _show_progress(progress: dict[str, Any], out: "Console") -> None:
    first = "" if progress["first_ms"] is None else f", first route {progress['first_ms']:.1f} ms"
    out.print(
        f"{progress['seconds']:6.1f} s  {progress['deliveries']:2d} deliveries  "
        f"{progress['replans']:4d} replans{first}  {progress['packs']} packs in the way  "
        f"{progress['collisions']} collisions"
    )
    for name, doing in progress["units"].items():
        out.print(f"          {name:10s} {doing}", style="dim")


def _conclude(report: dict[str, Any], picture: Path, out: "Console") -> None:
    from bywayd.yard.report import Report, table_of

    wrong = report.pop("went_wrong")
    out.print(table_of(Report(**report)))
    out.print(f"Picture: {picture}")
    if wrong:
        out.print("Not well: " + "; ".join(wrong), style="bold red")
        raise typer.Exit(int(Status.NO))
    out.print("All was well.", style="bold green")
