"""`byway bench`: measure planning and serving on this machine."""

from pathlib import Path
from typing import Annotated

import typer

from bywayd.commands.shared import AsJson, Status, console, fail, say_json


def bench(
    parts: Annotated[
        list[str] | None,
        typer.Argument(
            help="planning, micro, site, serving (these if none is named), methods.",
            show_default=False,
        ),
    ] = None,
    small: Annotated[
        bool, typer.Option("--small", help="A few seconds; its figures are rough.")
    ] = False,
    long: Annotated[
        bool,
        typer.Option("--long", help="Also 3 s runs for the best known, and a square kilometre."),
    ] = False,
    family: Annotated[list[str] | None, typer.Option(help="Only this family of cases.")] = None,
    seed: Annotated[int, typer.Option(help="Salt of all cases.", min=0)] = 1,
    seeds: Annotated[
        int | None, typer.Option(help="Cases of each family for first routes.", min=1)
    ] = None,
    plot: Annotated[
        Path | None,
        typer.Option(help="Draw growth (site) or convergence (methods) into this .png or .svg."),
    ] = None,
    as_json: AsJson = False,
) -> None:
    """
    Run the seeded scenario families and the daemon's own figures, and print them.

    Exit status 1 when a promise was broken: a route that does not stand the check, one where
    there is none, or a cost that grew with more time.
    """
    from bywayd.bench import measure, tables
    from bywayd.bench.plots import plot_growth, plot_methods

    drawn = [part for part in (parts or ("site",)) if part in ("site", "methods")]
    if plot is not None and len(drawn) != 1:
        fail(Status.USAGE, "--plot draws one of the parts site and methods: measure just that one")
    log = console(to_stderr=True)
    try:
        result = measure(
            small=small,
            long=long,
            parts=parts or (),
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
    if plot is not None:
        try:
            if drawn == ["site"]:
                plot_growth(result["site"]["growth"], plot)
            else:
                plot_methods(result["methods"], plot)
        except (OSError, ValueError) as fault:
            fail(Status.USAGE, f"{plot}: {fault}")
        log.print(f"drawn: {plot}")
    raise typer.Exit(int(Status.NO if result["faults"] else Status.WELL))
