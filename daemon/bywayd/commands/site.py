"""`byway site`: what the daemon knows of the site, as a table or a drawing."""

import itertools
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from bywayd.commands.shared import DEFAULT_ENDPOINT, AsJson, Endpoint, KeyFile, console, say_json

if TYPE_CHECKING:
    import byway

#: Names are printed on a drawing only while they can be read.
NAMED_MAX = 60


def site(
    layer: Annotated[list[str] | None, typer.Option(help="Only this layer.")] = None,
    box: Annotated[
        str | None, typer.Option(help="Only this ground: x_min,y_min,x_max,y_max in metres.")
    ] = None,
    picture: Annotated[
        Path | None, typer.Option(help="Draw the site into this file (png, svg, pdf).")
    ] = None,
    endpoint: Endpoint = DEFAULT_ENDPOINT,
    keys: KeyFile = None,
    as_json: AsJson = False,
) -> None:
    """Show layers, what moves, and guarded routes."""
    import byway

    box_m = None if box is None else _box(box)
    with byway.Client(endpoint, keys=keys) as client:
        view = client.site(layers=layer, box_m=box_m, guards=True)
    if picture is not None:
        draw(view, picture, box_m)
    if as_json:
        say_json(_as_dict(view))
    else:
        _print(view)


def _box(text: str) -> tuple[float, float, float, float]:
    try:
        x0, y0, x1, y1 = (float(part) for part in text.split(","))
    except ValueError:
        raise typer.BadParameter(f"{text!r} is not x_min,y_min,x_max,y_max in metres") from None
    if not (x0 < x1 and y0 < y1):
        raise typer.BadParameter(f"{text!r} has no ground in it: each min lies below its max")
    return x0, y0, x1, y1


def _as_dict(view: "byway.SiteView") -> dict[str, Any]:
    return {
        "revision": view.revision,
        "epoch": view.epoch,
        "limits_m": view.limits_m,
        "layers": {
            name: {
                "polygons": {each: ring.tolist() for each, ring in told.polygons.items()},
                "holes": {each: [h.tolist() for h in rings] for each, rings in told.holes.items()},
                "discs": dict(told.discs),
                "cells_occupied": sum(int((c.cells == 1).sum()) for c in told.cells),
                "unknown_blocks": told.unknown_blocks,
                "outlines_only": told.outlines_only,
                "durable": told.durable,
                "decay_s": told.decay_s,
            }
            for name, told in view.layers.items()
        },
        "tracks": [
            {
                **{name: getattr(each, name) for name in ("layer", "id", "pose", "velocity_mps")},
                **{name: getattr(each, name) for name in ("turn_rate_radps", "uncertainty_m")},
                "age_s": each.age_s,
            }
            for each in view.tracks
        ],
        "guards": [
            {
                **{name: getattr(each, name) for name in ("unit", "progress_m", "state")},
                "blocked": None if each.blocked is None else each.blocked.model_dump(),
            }
            for each in view.guards
        ],
    }


def _print(view: "byway.SiteView") -> None:
    from rich.table import Table

    table = Table(title=f"Site at revision {view.revision}", title_justify="left", box=None)
    for name in ("layer", "polygons", "discs", "occupied cells", "moving", "is"):
        table.add_column(name, justify="left" if name in ("layer", "is") else "right")
    for name, told in view.layers.items():
        words = [
            *(["outlines only"] if told.outlines_only else []),
            *(["unknown blocks"] if told.unknown_blocks else []),
            *(["durable"] if told.durable else []),
            *([f"forgets after {told.decay_s:g} s"] if told.decay_s is not None else []),
        ]
        table.add_row(
            name,
            str(len(told.polygons)),
            str(len(told.discs)),
            str(sum(int((each.cells == 1).sum()) for each in told.cells)),
            str(sum(each.layer == name for each in view.tracks)),
            ", ".join(words),
        )
    out = console()
    out.print(table)
    for guard in view.guards:
        text = f"{guard.unit} drives a guarded route, {guard.progress_m:.1f} m along it: "
        if guard.blocked is None:
            out.print(text + guard.state)
            continue
        by = guard.blocked.id or guard.blocked.layer or guard.blocked.kind
        out.print(f"{text}[bold]blocked[/bold] in {guard.blocked.distance_m:.1f} m by {by}")


def draw(
    view: "byway.SiteView", file: Path, box_m: tuple[float, float, float, float] | None = None
) -> None:
    """
    Draw a site as it is.

    Args:
        box_m: The ground to show; by default all that stands on it, moves or is guarded.
    """
    from bywayd.picture import INKS, Plan, box_around

    notes = [_summary(view)]
    plan = Plan("The site", box_m or box_around(_places(view), 5.0, view.limits_m), notes)
    count = sum(len(told.polygons) + len(told.discs) for told in view.layers.values())
    named = count <= NAMED_MAX
    prints = itertools.cycle(("building", "stack", "pack", "other"))
    for name, told in view.layers.items():
        for patch in told.cells:
            plan.cells(patch.corner_m, patch.cell_m, patch.cells)
        if any((patch.cells == 1).any() for patch in told.cells):
            plan.key(f"{name}, occupied cells", "cells")
        if not told.polygons and not told.discs:
            continue
        kind = "outline" if told.outlines_only else next(prints)
        # Outlines of units would be named by their pieces, and there is one such layer a unit.
        label = "outlines that may be left out" if told.outlines_only else name
        plan.key(label, kind)
        plan.polygons(told.polygons, kind, named=named and kind != "outline", holes=told.holes)
        plan.discs(told.discs, kind, named=named and kind != "outline")
    for track in view.tracks:
        for ring in track.sweep_m:
            plan.sweep(ring)
    for track in view.tracks:
        plan.mover(track.id, track.outline_m, track.pose, track.velocity_mps)
    for guard, ink in zip(view.guards, itertools.cycle(INKS), strict=False):
        plan.guarded(guard.unit, guard.poses, guard.progress_m, guard.blocked, ink)
    if view.limits_m is not None:
        plan.limits(view.limits_m)
    plan.save(file)


def _summary(view: "byway.SiteView") -> str:
    blocked = sum(guard.blocked is not None for guard in view.guards)
    routes = f"{_count(len(view.guards), 'guarded route')}, {blocked} of them blocked"
    return (
        f"Revision {view.revision}: {_count(len(view.layers), 'layer')}, "
        f"{_count(len(view.tracks), 'track')}, {routes if view.guards else 'no guarded routes'}"
    )


def _count(number: int, what: str) -> str:
    return f"{number} {what}{'' if number == 1 else 's'}"


def _places(view: "byway.SiteView") -> list[tuple[float, float]]:
    """Corners of all there is to see; those of the limits where there is nothing."""
    found: list[tuple[float, float]] = []
    for told in view.layers.values():
        for ring in told.polygons.values():
            found += [(float(x), float(y)) for x, y in ring]
        for x, y, r in told.discs.values():
            found += [(x - r, y - r), (x + r, y + r)]
        for patch in told.cells:
            rows, columns = (patch.cells == 1).nonzero()
            if len(rows):
                (x, y), side = patch.corner_m, patch.cell_m
                found += [
                    (x + columns.min() * side, y + rows.min() * side),
                    (x + (columns.max() + 1) * side, y + (rows.max() + 1) * side),
                ]
    for track in view.tracks:
        found += [(float(x), float(y)) for ring in track.sweep_m for x, y in ring]
    for guard in view.guards:
        found += [(float(x), float(y)) for x, y, _ in guard.poses]
    if not found:
        x0, y0, x1, y1 = view.limits_m or (-10.0, -10.0, 10.0, 10.0)
        found = [(x0, y0), (x1, y1)]
    return found
