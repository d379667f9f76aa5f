"""`byway ask`: one replan from the shell."""

import dataclasses
import math
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, Final, NoReturn

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
    from rich.console import Console

    import byway

Pose = tuple[float, float, float]


def _pose(text: str) -> Pose:
    """`x,y,heading` in metres and radians; a heading may also end in `deg`."""
    parts = [part.strip() for part in text.split(",")]
    try:
        x_m, y_m = float(parts[0]), float(parts[1])
        heading = parts[2]
        if heading.endswith("deg"):
            heading_rad = math.radians(float(heading.removesuffix("deg")))
        else:
            heading_rad = float(heading)
    except (IndexError, ValueError):
        parts = []
    if len(parts) != 3:
        raise typer.BadParameter(
            f"{text!r} is not x,y,heading, such as 2.5,-1,1.57 or 2.5,-1,90deg"
        )
    return x_m, y_m, heading_rad


def ask(
    vehicle: Annotated[str, typer.Argument(help="A vehicle that the daemon knows.")],
    start: Annotated[str, typer.Option(help="x,y,heading: metres, radians (or 90deg).")],
    goal: Annotated[str, typer.Option(help="x,y,heading.")],
    budget: Annotated[float, typer.Option(help="Seconds to plan in.")] = 0.1,
    unit: Annotated[str | None, typer.Option(help="The individual that asks.")] = None,
    method: Annotated[str, typer.Option(help="Search method.")] = "auto",
    seed: Annotated[int | None, typer.Option(help="Seed of the search.")] = None,
    clearance: Annotated[
        float | None, typer.Option(help="Metres kept around the footprint.")
    ] = None,
    leave_out: Annotated[
        list[str] | None, typer.Option(help="A layer that does not count.")
    ] = None,
    picture: Annotated[
        Path | None, typer.Option(help="Draw site and route into this file (png, svg, pdf).")
    ] = None,
    rows: Annotated[bool, typer.Option("--rows", help="Print the route's table as well.")] = False,
    endpoint: Endpoint = DEFAULT_ENDPOINT,
    keys: KeyFile = None,
    site: Annotated[
        Path | None,
        typer.Option(help="Plan here, without a daemon, on what this GeoJSON file shows."),
    ] = None,
    settings: Annotated[
        Path | None, typer.Option(help="With --site: the vehicles (TOML); else those built in.")
    ] = None,
    as_json: AsJson = False,
) -> None:
    """
    Ask for a route, and show what is answered.

    With --site no daemon is needed: does the vehicle fit there, can it turn here? The tightest
    place of the route is told, and marked on the picture.
    """
    import byway

    start_pose, goal_pose = _pose(start), _pose(goal)
    better: list[byway.Better] = []
    if site is not None:
        wishes = (budget, method, seed, clearance, picture)
        _fit(site, settings, vehicle, start_pose, goal_pose, wishes, rows=rows, as_json=as_json)
    with byway.Client(endpoint, keys=keys) as client:
        answer = client.replan(
            vehicle,
            start=start_pose,
            goal=goal_pose,
            budget_s=budget,
            unit=unit,
            method=method,
            seed=seed,
            clearance_m=clearance,
            leave_out=leave_out or (),
            on_better=better.append,
        )
        if picture is not None:
            from bywayd.commands.answer_picture import draw_answer
            from bywayd.outlines import outline_of

            known = next(one for one in client.vehicles() if one.name == vehicle)
            outline_m = outline_of(known.settings)
            view = client.site()
            draw_answer(view, vehicle, outline_m, start_pose, goal_pose, answer, picture)
    if as_json:
        say_json(_as_dict(answer, better))
    else:
        _print(console(), answer, better, rows=rows)
    raise typer.Exit(int(Status.WELL if answer.kind == "route" else Status.NO))


def _fit(
    site: Path,
    settings: Path | None,
    vehicle: str,
    start: Pose,
    goal: Pose,
    wishes: tuple[float, str, int | None, float | None, Path | None],
    *,
    rows: bool,
    as_json: bool,
) -> NoReturn:
    """Plan without a daemon, and end the command."""
    from bywayd.commands.fitting import fit

    answer, tightest = fit(site, settings, vehicle, start, goal, *wishes)
    if as_json:
        told = None if tightest is None else dataclasses.asdict(tightest)
        say_json(_as_dict(answer, []) | {"tightest": told})
    else:
        _print(console(), answer, [], rows=rows)
        if tightest is not None:
            console().print(
                f"  tightest place {tightest.at_m:.1f} m along: {tightest.clearance_m:.3f} m from "
                f"{tightest.what}"
            )
    raise typer.Exit(int(Status.WELL if answer.kind == "route" else Status.NO))


def _as_dict(answer: "byway.Answer", better: "list[byway.Better]") -> dict[str, Any]:
    names = ["kind", "unit", "cost", "cost_unit", "bound", "gap", "revision", "seed", "left_out"]
    names += ["first_s", "waited_s", "total_s", "attempts", "statistics"]
    told: dict[str, Any] = {name: getattr(answer, name) for name in names}
    told["blocked_by"] = [
        {"layer": one.layer, "obstacle": one.obstacle, "depth_m": one.depth_m}
        for one in answer.blocked_by
    ]
    if answer.remedy is not None:
        told["remedy"] = {
            "movables": [
                {"layer": one.layer, "obstacle": one.obstacle, "x_m": one.x_m, "y_m": one.y_m}
                for one in answer.remedy.movables
            ],
            "way_m": answer.remedy.way_m.tolist(),
            "disc_radius_m": answer.remedy.disc_radius_m,
            "proved": answer.remedy.proved,
        }
    told["better"] = [{"elapsed_s": one.elapsed_s, "cost": one.cost} for one in better]
    if answer.route is not None:
        table = answer.route.table
        told["length_m"] = answer.route.length_m
        told["duration_s"] = answer.route.duration_s
        told["route"] = {name: table[name].tolist() for name in table.dtype.names or ()}
    return told


#: What an answer without a route means, in a sentence.
_MEANING: Final = {
    "start_blocked": "The vehicle cannot stand where it starts.",
    "goal_blocked": "The vehicle cannot stand at the goal.",
    "start_too_fast": "At this speed it cannot stop before something is in its way.",
    "no_route": "There is no route: not even the largest disc inside the vehicle gets through.",
    "not_found": "No route was found in the time given; whether there is one is not known.",
}


def _print(
    out: "Console", answer: "byway.Answer", better: "list[byway.Better]", *, rows: bool
) -> None:
    unit = answer.cost_unit
    if answer.route is None:
        out.print(f"[bold]{answer.kind}[/bold]: {_MEANING.get(answer.kind, '')}")
        for one in answer.blocked_by:
            out.print(f"  {one.obstacle} of layer {one.layer}, {one.depth_m:.3f} m deep")
        if answer.remedy is not None:
            out.print(_remedy(answer.remedy))
    else:
        route = answer.route
        out.print(
            f"[bold]route[/bold] of {route.length_m:.2f} m in {route.duration_s:.1f} s, "
            f"{route.direction_changes} changes of direction"
        )
        out.print(
            f"  cost {answer.cost:.3f} {unit}, bound {answer.bound:.3f} {unit}, "
            f"gap {100 * answer.gap:.1f} %"
        )
        for leg in route.legs:
            way = "forward" if leg.gear > 0 else "reverse"
            out.print(f"  {way:8s} {leg.length_m:8.2f} m  rows {leg.first_row} to {leg.last_row}")
    first = "" if answer.first_s is None else f"first route after {1e3 * answer.first_s:.2f} ms, "
    out.print(
        f"  {first}answer after {1e3 * answer.total_s:.2f} ms, {len(better)} better ones heard, "
        f"revision {answer.revision}, seed {answer.seed}"
    )
    if rows and answer.route is not None:
        names = answer.route.table.dtype.names or ()
        out.print("  ".join(f"{name:>15s}" for name in names))
        for row in answer.route.table.tolist():
            out.print("  ".join(f"{value:15.4f}" for value in row))


def _remedy(remedy: "byway.Remedy") -> str:
    """What would have to move, in a sentence that claims no more than is known."""
    if not remedy.movables:
        return "  A disc of that size gets through; it is the vehicle that finds no way."
    names = ", ".join(f"{one.obstacle} of layer {one.layer}" for one in remedy.movables)
    sure = "" if remedy.proved else " probably"
    return (
        f"  Without {names} a disc of {remedy.disc_radius_m:.2f} m would{sure} get through (there "
        "may be less to move, and the whole vehicle may need more room)."
    )
