"""`byway serve`: the daemon itself."""

from pathlib import Path
from typing import Annotated

import typer

from bywayd.commands.shared import CAUTION, Status, console, fail


def serve(
    file: Annotated[
        Path | None, typer.Argument(help="Settings (TOML). Without one, those built in.")
    ] = None,
) -> None:
    """Run the daemon until SIGTERM or Ctrl-C."""
    from bywayd.settings import BadSettings, load

    try:
        settings = load(file)
    except BadSettings as bad:
        fail(Status.NO, f"the settings cannot be used:\n{bad}")
    out = console(to_stderr=True)
    out.print(f"[bold]byway[/bold] {', '.join(settings.vehicles)}", soft_wrap=True)
    out.print(f"Caution: {CAUTION}", style="yellow")

    from bywayd.runtime import serve as run

    raise typer.Exit(run(settings))
