"""`byway put`: what stands on a site, from a drawing."""

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from bywayd.commands.shared import (
    DEFAULT_ENDPOINT,
    AsJson,
    Endpoint,
    KeyFile,
    Status,
    console,
    fail,
    say_json,
)

if TYPE_CHECKING:
    import byway
    from bywayd.geojson import Shapes


def put(
    file: Annotated[Path, typer.Argument(help="GeoJSON (RFC 7946); its positions in metres.")],
    layer: Annotated[str, typer.Option(help="The layer to put it into.")] = "fixed",
    replace: Annotated[
        bool, typer.Option("--replace", help="The layer holds this and nothing else.")
    ] = False,
    durable: Annotated[
        bool | None, typer.Option("--durable/--live", help="Should it outlast the daemon?")
    ] = None,
    outlines: Annotated[
        bool | None,
        typer.Option("--outlines/--solid", help="A layer that replans may leave out."),
    ] = None,
    id_property: Annotated[
        str, typer.Option(help="Property that names an obstacle, where it has no id.")
    ] = "id",
    expires: Annotated[float | None, typer.Option(help="Seconds until it is gone.")] = None,
    endpoint: Endpoint = DEFAULT_ENDPOINT,
    keys: KeyFile = None,
    as_json: AsJson = False,
) -> None:
    """
    Put the shapes of a GeoJSON file onto the site.

    Polygons with holes, points with a property radius_m, lines with a property width_m. The
    obstacles stay when the command has ended, until they are replaced or dropped.
    """
    import byway
    from bywayd.geojson import GeoJsonFault, read_shapes

    try:
        shapes = read_shapes(file, id_property)
    except OSError as fault:
        fail(Status.USAGE, f"{file}: {fault.strerror}")
    except GeoJsonFault as fault:
        fail(Status.NO, str(fault))
    with byway.Client(endpoint, keys=keys) as client:
        revision = _send(
            client, layer, shapes, durable, outlines, replace=replace, expires_in_s=expires
        )
    told = {
        "layer": layer,
        "polygons": len(shapes.polygons),
        "discs": len(shapes.discs),
        "boxes": len(shapes.boxes),
        "revision": revision,
    }
    if as_json:
        say_json(told)
    else:
        console().print(
            f"layer [bold]{layer}[/bold]: {len(shapes.polygons)} polygons, {len(shapes.discs)} "
            f"discs and {len(shapes.boxes)} boxes are visible at revision {revision}"
        )


def _send(
    client: "byway.Client",
    layer: str,
    shapes: "Shapes",
    durable: bool | None,
    outlines_only: bool | None,
    *,
    replace: bool,
    expires_in_s: float | None,
) -> int:
    """Send everything, in as many changes as it needs; return the last revision."""
    first, *rest = shapes.pieces()
    if replace:
        revision = client.replace_layer(
            layer, *_told(first), boxes=first.boxes, expires_in_s=expires_in_s,
            durable=durable, outlines_only=outlines_only,
        )  # fmt: skip
    else:
        client.claim(layer, durable=durable, outlines_only=outlines_only)
        rest = [first, *rest]
    for piece in rest:
        revision = client.put(layer, *_told(piece), expires_in_s, boxes=piece.boxes)
    return revision


def _told(shapes: "Shapes") -> tuple[dict[str, Any], dict[str, tuple[float, float, float]]]:
    """Return polygons and discs as the client takes them."""
    polygons = {
        name: {"outline": outline, "holes": holes} if holes else outline
        for name, (outline, holes) in shapes.polygons.items()
    }
    return polygons, shapes.discs
