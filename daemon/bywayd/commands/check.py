"""`byway check`: are these settings good?"""

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from bywayd.commands.shared import AsJson, Status, console, say_json

if TYPE_CHECKING:
    from bywayd.settings import Settings


def check(
    file: Annotated[
        Path | None, typer.Argument(help="Settings (TOML). Without one, those built in.")
    ] = None,
    example: Annotated[
        bool, typer.Option("--example", help="Print the built-in settings, to start from.")
    ] = False,
    as_json: AsJson = False,
) -> None:
    """Check a settings file, and tell every mistake with its place."""
    from bywayd.settings import DEFAULT_FILE, BadSettings, load

    if example:
        typer.echo(DEFAULT_FILE.read_text(), nl=False)
        return
    try:
        settings = load(file)
        vehicles = {name: _made(name, section) for name, section in settings.vehicles.items()}
    except BadSettings as bad:
        if as_json:
            found = [{"place": m.place, "key": m.key, "text": m.text} for m in bad.mistakes]
            say_json({"good": False, "mistakes": found})
        else:
            typer.echo(str(bad), err=True)
        raise typer.Exit(int(Status.NO)) from None
    if as_json:
        say_json({"good": True, "settings": settings.model_dump(mode="json")})
    else:
        _print_settings(settings, vehicles)


def _made(name: str, section: Any) -> Any:
    """Make the vehicle as the planner will; it checks more than a file's reader can."""
    from byway_planning.vehicles import vehicle_from_settings
    from bywayd.settings import BadSettings, Mistake

    try:
        return vehicle_from_settings({"model": section.model, **section.arguments()})
    except ValueError as fault:
        raise BadSettings([Mistake("settings", f"vehicles.{name}", str(fault))]) from None


def _print_settings(settings: "Settings", vehicles: dict[str, Any]) -> None:
    from rich.table import Table

    out = console()
    table = Table(title="Vehicles", title_justify="left", header_style="bold")
    table.add_column("vehicle")
    table.add_column("model")
    for title in ("length m", "width m", "turns within m", "clearance m"):
        table.add_column(title, justify="right")
    for name, vehicle in vehicles.items():
        section = settings.vehicles[name]
        radius_m = getattr(vehicle, "turn_radius_m", None)
        if radius_m is None:
            size_m = (2 * vehicle.radius_m, 2 * vehicle.radius_m)
        else:
            outline_m = vehicle.outline_at((0.0, 0.0, 0.0))
            size_m = outline_m.max(axis=0) - outline_m.min(axis=0)
        table.add_row(
            *(name, section.model, f"{size_m[0]:.2f}", f"{size_m[1]:.2f}"),
            "on the spot" if radius_m is None else f"{radius_m:.2f}",
            f"{vehicle.clearance_m:.2f}",
        )
    out.print(table)
    limits_m = settings.site.limits_m
    ground = "250 m around its origin" if limits_m is None else f"limits {list(limits_m)} m"
    out.print(f"site: cells of {settings.site.cell_m} m, {ground}")
    for name, layer in settings.layers.items():
        told = layer.model_dump(exclude_defaults=True)
        what = ", ".join(f"{key} {str(value).lower()}" for key, value in told.items())
        out.print(f"layer {name}: {what or 'as layers are'}")
    out.print(f"workers: {settings.workers.count}, sockets: {', '.join(settings.sockets.requests)}")
    out.print("The settings are good.")
