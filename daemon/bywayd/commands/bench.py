"""`byway bench`: measure planning and serving on this machine."""

from typing import Annotated

import typer

from bywayd.commands.shared import AsJson, Status, console, fail, say_json


def bench(
    small: Annotated[
        bool, typer.Option("--small", help="A few seconds; its figures are rough.")
    ] = False,
    long: Annotated[
        bool,
        typer.Option("--long", help="Also 3 s runs for the best known, and a square kilometre."),
    ] = False,
    only: Annotated[
        list[str] | None, typer.Option(help="Only this part: planning, micro, site or serving.")
    ] = None,
    family: Annotated[list[str] | None, typer.Option(help="Only this family of cases.")] = None,
    seed: Annotated[int, typer.Option(help="Salt of all cases.", min=0)] = 1,
    seeds: Annotated[
        int | None, typer.Option(help="Cases of each family for first routes.", min=1)
    ] = None,
    as_json: AsJson = False,
) -> None:
    """
    Run the seeded scenario families and the daemon's own figures, and print them.

    Exit status 1 when a promise was broken: a route that does not stand the check, one where
    there is none, or a cost that grew with more time.
    """
    from bywayd.bench import measure, tables

    log = console(to_stderr=True)
    try:
        result = measure(
            small=small,
            long=long,
            only=only or (),
            families=family or (),
            salt=seed,
            seeds=seeds,
            progress=lambda text: log.print(text, style="dim"),
        )
    except ValueError as fault:
        fail(Status.USAGE, str(fault))
    if as_json:
        say_json(result)
    else:
        out = console()
        for shown in tables(result):
            out.print(shown)
    raise typer.Exit(int(Status.NO if result["faults"] else Status.WELL))
