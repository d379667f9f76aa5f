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
    connect: Annotated[
        str | None,
        typer.Option(
            help="Requests socket of a daemon that is there for the demo, and for nothing else.",
            show_default=False,
        ),
    ] = None,
    keys: Annotated[
        Path | None,
        typer.Option(
            help="With --connect: a key file, or a folder with one for each: yard.key (source) "
            "and the vehicles' (driver).",
            show_default=False,
        ),
    ] = None,
    as_json: AsJson = False,
) -> None:
    """Let three vehicles work in a brick and timber yard, driven by nothing but the daemon."""
    if keys is not None and connect is None:
        raise typer.BadParameter("the demo's own daemon has no keys", param_hint="--keys")
    out = console(to_stderr=as_json)
    out.print("[bold]Byway demo:[/bold] a brick and timber yard: vehicles, people, one daemon.")
    out.print(f"Caution: {CAUTION}", style="yellow")
    if connect is None:
        report = _with_own_daemon(seconds, seed, picture, out)
    else:
        _wait_until_ready(connect, out, keys=keys)
        _check_purpose(connect, keys)
        report = _run_yard(connect, seconds, seed, picture, out, keys=keys)
    if as_json:
        say_json(report)
    _conclude(report, picture, out)


def _with_own_daemon(seconds: float, seed: int, picture: Path, out: "Console") -> dict[str, Any]:
    with tempfile.TemporaryDirectory(prefix="byway-") as folder:
        endpoint = f"ipc://{folder}/requests"
        with _daemon(Path(folder)) as process:
            _wait_until_ready(endpoint, out, process, Path(folder) / "daemon.log")
            report = _run_yard(endpoint, seconds, seed, picture, out)
        if process.returncode != 0:
            report["went_wrong"].append(f"the daemon ended with status {process.returncode}")
    return report


def _check_purpose(endpoint: str, keys: Path | None) -> None:
    """Refuse a daemon with a site of its own: an invented yard has no place in it."""
    import byway
    from bywayd.yard.desk import LAYERS, SITE, key_of, layer_of
    from bywayd.yard.scene import LIMITS_M, ROUNDS

    with byway.Client(endpoint, keys=key_of(keys, SITE)) as client:
        site = client.site(box_m=(0.0, 0.0, 0.1, 0.1), cells=False)
        others = set(client.health().layers) - {*LAYERS, *(layer_of(each.unit) for each in ROUNDS)}
    if site.limits_m is None or tuple(site.limits_m) != LIMITS_M or others:
        fail(
            Status.NO,
            f"the daemon at {endpoint} is not there for the demo, which would replace what stands "
            f"on its site. One for the demo has [site] limits_m = {list(LIMITS_M)}, and no layers "
            "but the demo's.",
        )


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
    endpoint: str,
    out: "Console",
    process: subprocess.Popen[bytes] | None = None,
    log: Path | None = None,
    keys: Path | None = None,
) -> None:
    """Wait for the daemon of a process of ours, or for one that somebody else has started."""
    import byway
    from bywayd.yard.desk import SITE, key_of

    began_s = time.monotonic()
    told = False
    while time.monotonic() - began_s < READY_S_MAX:
        if process is not None and process.poll() is not None:
            break
        try:
            with byway.Client(endpoint, keys=key_of(keys, SITE)) as client:
                if client.hello().state == "ready":
                    return
        except byway.SenderFault as fault:  # no key, or none that is any good
            fail(Status.REFUSED, fault.text)
        except byway.BywayError:
            pass
        if not told and time.monotonic() - began_s > 3.0:
            told = True
            if process is None:
                out.print(f"Waiting for the daemon at {endpoint}.")
            else:
                out.print("The daemon compiles its planning kernels; the first time takes a while.")
        time.sleep(0.1)
    if log is None:
        fail(Status.UNREACHABLE, f"no daemon at {endpoint} has got ready")
    last = log.read_text(errors="replace").splitlines()[-12:]
    fail(Status.NO, "the daemon did not get ready. Its last lines:\n" + "\n".join(last))


def _run_yard(
    endpoint: str,
    seconds: float,
    seed: int,
    picture: Path,
    out: "Console",
    *,
    keys: Path | None = None,
) -> dict[str, Any]:
    arguments = [endpoint, str(seconds), str(seed), str(picture), str(keys or "")]
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
