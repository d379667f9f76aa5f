"""`byway listen`: what the daemon publishes."""

from typing import TYPE_CHECKING, Annotated, Any

import typer

from bywayd.commands.shared import DEFAULT_ENDPOINT, AsJson, Endpoint, say_json

if TYPE_CHECKING:
    import byway


def listen(
    topic: Annotated[
        list[str] | None,
        typer.Option("--topic", help="Beginning of a topic: better, better.tug-3, health."),
    ] = None,
    seconds: Annotated[float | None, typer.Option(help="End after so long.")] = None,
    endpoint: Endpoint = DEFAULT_ENDPOINT,
    as_json: AsJson = False,
) -> None:
    """Show better routes and health records as they are published, a line each."""
    import byway

    topics = topic or ["better", "health"]
    with byway.Client(endpoint) as client:
        for event in client.listen(topics, timeout_s=seconds):
            if as_json:
                say_json(_as_dict(event))
            else:
                typer.echo(_line(event))


def _as_dict(event: "byway.Event") -> dict[str, Any]:
    import byway

    told: dict[str, Any] = {
        name: getattr(event, name) for name in ("topic", "epoch", "number", "missed")
    }
    content = event.content
    if isinstance(content, byway.Better):
        names = ("unit", "replan", "revision", "elapsed_s", "kind", "cost", "bound", "gap")
        told |= {name: getattr(content, name) for name in names}
        told["length_m"] = content.route.length_m if content.route else None
    else:
        told["health"] = content.model_dump(mode="json")
    return told


def _line(event: "byway.Event") -> str:
    import byway

    missed = f"  ({event.missed} missed)" if event.missed else ""
    content = event.content
    if isinstance(content, byway.Better):
        return (
            f"{event.topic:24s} #{event.number:<6d} {1e3 * content.elapsed_s:8.2f} ms  "
            f"cost {content.cost:9.3f} {content.cost_unit}  gap {100 * content.gap:5.1f} %  "
            f"revision {content.revision}{missed}"
        )
    crew = sorted(content.workers.items())
    workers = ", ".join(f"{count} {state}" for state, count in crew if count)
    return (
        f"{event.topic:24s} #{event.number:<6d} {content.state}, revision {content.revision}, "
        f"{content.planning} planning, {content.waiting} waiting, workers: {workers}{missed}"
    )
