"""What the commands have in common: options, exit statuses, and how they speak."""

import json
import sys
from enum import IntEnum
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, Final, NoReturn

import typer

if TYPE_CHECKING:
    from rich.console import Console

DEFAULT_ENDPOINT: Final = "tcp://127.0.0.1:7461"

CAUTION: Final = (
    "Byway is not a safety function. Its routes are proposals to a vehicle controller; protecting "
    "people is the task of safety-rated devices and of the site's own risk assessment."
)


class Status(IntEnum):
    """What a command's exit status says."""

    WELL = 0
    NO = 1  # it worked, and the result is a no: no route, settings with mistakes, a demo gone wrong
    USAGE = 2  # the command line was not understood
    UNREACHABLE = 3  # no daemon, or not now
    REFUSED = 4  # the daemon refuses this, and asking again changes nothing
    FAILED = 5  # the daemon took it in and then failed at it, or it was withdrawn
    INTERRUPTED = 130


Endpoint = Annotated[
    str,
    typer.Option(
        "--endpoint", "-e", envvar="BYWAY_ENDPOINT", help="Requests socket of the daemon."
    ),
]
KeyFile = Annotated[
    Path | None,
    typer.Option(
        "--keys",
        envvar="BYWAY_KEY_FILE",
        help="Key file for a daemon that uses keys (byway keys).",
        show_default=False,
    ),
]
AsJson = Annotated[bool, typer.Option("--json", help="Print JSON for a program to read.")]
Timeout = Annotated[float, typer.Option("--timeout", help="Seconds to wait for the daemon.")]


def say_json(value: Any) -> None:
    """Print one JSON value on a line of its own, at once."""
    sys.stdout.write(json.dumps(value, default=_plain) + "\n")
    sys.stdout.flush()


def console(*, to_stderr: bool = False) -> "Console":
    """Return a console; rich loads only when something is printed with it."""
    from rich.console import Console

    return Console(stderr=to_stderr, highlight=False, soft_wrap=True)


def fail(status: Status, text: str) -> NoReturn:
    """End the command with a sentence on stderr."""
    sys.stderr.write(f"byway: {text}\n")
    raise typer.Exit(int(status))


def _plain(value: Any) -> Any:
    """numpy's numbers and arrays, sets and tuples, as JSON has them."""
    if hasattr(value, "tolist"):
        return value.tolist()
    if isinstance(value, set | frozenset):
        return sorted(value)
    return str(value)
