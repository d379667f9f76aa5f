"""`byway listen`: what the daemon publishes."""

from typing import TYPE_CHECKING, Annotated, Any

import typer

from bywayd.commands.shared import DEFAULT_ENDPOINT, AsJson, Endpoint, KeyFile, say_json

if TYPE_CHECKING:
    import byway


def listen(
    topic: Annotated[
        list[str] | None,
        typer.Option("--topic", help="Beginning of a topic: better, better.tug-3, health."),
    ] = None,
    seconds: Annotated[float | None, typer.Option(help="End after so long.")] = None,
    endpoint: Endpoint = DEFAULT_ENDPOINT,
    keys: KeyFile = None,
    as_json: AsJson = False,
) -> None:
    """Show better routes and health records as they are published, a line each."""
    import byway

    topics = topic or ["better", "health", "guard", "layers"]
    with byway.Client(endpoint, keys=keys) as client:
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
    elif isinstance(content, byway.Rerouted):
        told_of = ("unit", "guard", "was", "from_m", "in_s", "revision", "cost")
        told |= {"kind": "rerouted", **{name: getattr(content, name) for name in told_of}}
    elif content.kind == "health_is":
        told["health"] = content.model_dump(mode="json")
    else:
        told |= {"kind": content.kind, **content.model_dump(mode="json")}
    return told


def _line(event: "byway.Event") -> str:

    missed = f"  ({event.missed} missed)" if event.missed else ""
    return f"{event.topic:24s} #{event.number:<6d} {_told(event.content)}{missed}"


def _told(content: Any) -> str:
    import byway
    from byway import messages

    match content:
        case byway.Better():
            return (
                f"{1e3 * content.elapsed_s:8.2f} ms  cost {content.cost:9.3f} "
                f"{content.cost_unit}  gap {100 * content.gap:5.1f} %  "
                f"revision {content.revision}"
            )
        case byway.Rerouted():
            return f"new route from {content.from_m:.1f} m on, in {content.in_s:.2f} s"
        case messages.Alert():
            block = content.blocked
            by = f"{block.layer}/{block.id}" if block.id else block.layer or block.kind
            return (
                f"BLOCKED in {block.distance_m:.1f} m, {block.time_s:.1f} s, by {by}, "
                f"{block.depth_m:.2f} m deep, revision {content.revision}"
            )
        case messages.Cleared():
            return f"free again, revision {content.revision}"
        case messages.GuardLost():
            return f"guard lost: {content.text or f'silent for {content.silent_s:.1f} s'}"
        case messages.RerouteFailed():
            return f"no new route: {content.reason} {content.text}".rstrip()
        case messages.LayerState():
            age = "" if content.age_s is None else f", changed {content.age_s:.1f} s ago"
            return f"{content.state}, source {content.source or 'none'}{age}"
        case _:
            crew = sorted(content.workers.items())
            workers = ", ".join(f"{count} {state}" for state, count in crew if count)
            return (
                f"{content.state}, revision {content.revision}, {content.planning} planning, "
                f"{content.waiting} waiting, workers: {workers}"
            )
