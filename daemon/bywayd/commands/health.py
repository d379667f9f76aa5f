"""`byway health`: how the daemon is, once."""

from typing import TYPE_CHECKING, Annotated

import typer

from bywayd.commands.shared import (
    DEFAULT_ENDPOINT,
    AsJson,
    Endpoint,
    KeyFile,
    Status,
    console,
    say_json,
)

if TYPE_CHECKING:
    from byway.messages import HealthIs


def health(
    openmetrics: Annotated[
        bool, typer.Option("--openmetrics", help="Print OpenMetrics text for a scraper.")
    ] = False,
    endpoint: Endpoint = DEFAULT_ENDPOINT,
    keys: KeyFile = None,
    as_json: AsJson = False,
) -> None:
    """Show how the daemon is; exit status 1 when it does not take replans."""
    import byway

    with byway.Client(endpoint, keys=keys) as client:
        record = client.health()
    if openmetrics:
        from bywayd.commands.openmetrics import openmetrics as text_of

        typer.echo(text_of(record), nl=False)
    elif as_json:
        say_json(record.model_dump(mode="json"))
    else:
        _print(record)
    raise typer.Exit(int(Status.WELL if record.state == "ready" else Status.NO))


def _print(record: "HealthIs") -> None:
    from rich.table import Table

    out = console()
    crew = sorted(record.workers.items())
    workers = ", ".join(f"{count} {state}" for state, count in crew if count)
    out.print(
        f"[bold]{record.state}[/bold], up {record.uptime_s:.0f} s, revision {record.revision}, "
        f"{record.planning} planning, {record.waiting} waiting, workers: {workers}"
    )
    times = Table("time", "count", "mean ms", "half below ms", "99 % below ms", box=None)
    for name, found in record.histograms.items():
        total = sum(found.counts)
        if total:
            half, most = (_below(found.bounds_s, found.counts, share) for share in (0.5, 0.99))
            times.add_row(name, str(total), f"{1e3 * found.sum_s / total:.2f}", half, most)
    out.print(times)
    layers = Table(
        "layer", "obstacles", "moving", "age s", "lease left s", "source", "is", box=None
    )
    for name, layer in record.layers.items():
        age, lease = (
            "" if value is None else f"{value:.1f}" for value in (layer.age_s, layer.lease_left_s)
        )
        words = [
            *(["[bold]stale[/bold]"] if layer.stale else []),
            *(["durable"] if layer.durable else []),
        ]
        layers.add_row(
            *(name, str(layer.obstacles), str(layer.tracks), age, lease),
            *(layer.source or "", ", ".join(words)),
        )
    out.print(layers)
    counts = Table("count", "", "", box=None)
    for name, count in sorted(record.counts.items()):
        since = "since the start" if name.endswith("_total") else "now"
        if count:
            counts.add_row(name.removesuffix("_total").replace("_", " "), str(count), since)
    out.print(counts)
    for part, size_bytes in sorted(record.memory_bytes.items()):
        out.print(f"memory of {part}: {size_bytes / 1e6:.1f} MB")


def _below(bounds_s: list[float], counts: list[int], share: float) -> str:
    """Return the bound below which this share of the times lies."""
    seen = 0
    for bound_s, count in zip(bounds_s, counts, strict=False):
        seen += count
        if seen >= share * sum(counts):
            return f"{1e3 * bound_s:g}"
    return f"over {1e3 * bounds_s[-1]:g}"
