"""
The command line. One module a command, or a few that belong together.

Modules here import nothing heavy at their head: a command that only talks to a daemon starts in
a fraction of a second, and loads neither a compiler nor anything that draws.
"""

import sys

import typer

from bywayd.commands.ask import ask
from bywayd.commands.bench import bench
from bywayd.commands.check import check
from bywayd.commands.demo import demo
from bywayd.commands.health import health
from bywayd.commands.keys import app as keys
from bywayd.commands.listen import listen
from bywayd.commands.put import put
from bywayd.commands.serve import serve
from bywayd.commands.shared import Status
from bywayd.commands.site import site
from bywayd.commands.warm import warm

app = typer.Typer(
    name="byway",
    help="Plan routes for wheeled vehicles on a site where things move. "
    "Not a safety function: routes are proposals to a vehicle controller.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
)
for _command in (serve, demo, ask, put, site, listen, health, check, bench, warm):
    app.command()(_command)

app.add_typer(keys, name="keys")


def main() -> None:
    """Run a command; what went wrong on purpose becomes one sentence and an exit status."""
    from byway.errors import BywayError, LinkFault, SenderFault, Unavailable

    try:
        app()
    except SenderFault as fault:
        _end(Status.REFUSED, str(fault))
    except (Unavailable, LinkFault) as fault:
        _end(Status.UNREACHABLE, str(fault))
    except BywayError as fault:
        _end(Status.FAILED, str(fault))
    except KeyboardInterrupt:
        _end(Status.INTERRUPTED, "interrupted")


def _end(status: Status, text: str) -> None:
    sys.stderr.write(f"byway: {text}\n")
    sys.exit(int(status))
