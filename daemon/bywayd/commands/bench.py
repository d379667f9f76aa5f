"""`byway bench`: measure planning and serving on this machine."""

from typing import Annotated

import typer

from bywayd.commands.shared import AsJson, console, say_json


def bench(
    small: Annotated[
        bool, typer.Option("--small", help="A short run; its figures are rough.")
    ] = False,
    only: Annotated[list[str] | None, typer.Option(help="Only families beginning so.")] = None,
    seed: Annotated[int, typer.Option(help="Of the scenarios.")] = 1,
    as_json: AsJson = False,
) -> None:
    """Run the seeded scenario families and the daemon's own figures, and print them."""
    from bywayd.bench import measure, tables  # type: ignore[attr-defined]

    out = console(to_stderr=True)
    result = measure(
        small=small,
        only=tuple(only or ()),
        seed=seed,
        progress=lambda text: out.print(text, style="dim"),
    )
    if as_json:
        say_json(result)
        return
    for table in tables(result):
        console().print(table)
