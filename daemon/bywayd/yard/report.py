"""What a run of the yard came to: numbers, verdict, table and picture."""

import math
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any, Final

import numpy as np

from bywayd.yard.fork_truck import NAME as FORK_TRUCK
from bywayd.yard.scene import BUILDINGS, LIMITS_M, STACKS
from bywayd.yard.shapes import discs_of, polygons_of
from bywayd.yard.world import World

if TYPE_CHECKING:
    from rich.table import Table

#: The three vehicles need about twelve seconds a delivery between them, and on a bad day, with
#: a stand-off, fifteen; much more says that they did not get on.
SECONDS_PER_DELIVERY_MAX: Final = 30.0
#: A daemon that says so does what it should; the vehicle asks again.
NO_FAULTS: Final = frozenset({"error:overloaded", "error:superseded", "error:cancelled"})


@dataclass(frozen=True)
class Asked:
    """One question to the daemon and what it took. Times in seconds; nan where there was none."""

    kind: str  # of the answer, or "error:" and a code
    budget_s: float
    round_trip_s: float
    first_s: float = math.nan
    total_s: float = math.nan
    better: int = 0  # better routes that were published before the answer

    @property
    def is_late(self) -> bool:
        """Whether the answer left the daemon after its budget."""
        return self.total_s > self.budget_s


@dataclass(frozen=True)
class Heard:
    """What the daemon published about guarded routes, and how soon. Times in seconds."""

    alerts: Sequence[tuple[str, str]] = ()  # layer and kind of what was in the way
    told_s: Sequence[float] = ()  # from putting something down to the alert
    scanned_s: Sequence[float] = ()  # from the scan that saw something to the alert
    scans: int = 0
    missed: int = 0  # events that were lost on the way


NOTHING_HEARD: Final = Heard()


@dataclass(frozen=True)
class Report:
    """All that can be said of a run, as plain numbers and texts."""

    seconds: float
    deliveries: int
    replans: int
    answers: dict[str, int]
    better_routes: int
    first_ms: tuple[float, float]  # p50, p99
    answer_ms: tuple[float, float]
    of_budget: tuple[float, float]
    deadline_misses: int
    taken_over: int
    alerts: dict[str, int]
    cleared: int
    rerouted: int
    rerouted_taken: int
    not_rerouted: int
    told_to_alert_ms: tuple[float, float]  # p50, the longest
    scan_to_alert_ms: tuple[float, float]
    scans: int
    pallets: int
    nearest: dict[str, Any]
    nearest_units: dict[str, Any]
    collisions: list[dict[str, Any]]
    packs: int
    revision: int
    errors: dict[str, int]
    faults: list[str]
    late_steps_s: float
    units: dict[str, dict[str, Any]] = field(default_factory=dict)

    def went_wrong(self) -> list[str]:
        """Return what was not well, a sentence each; empty when all was."""
        wrong = []
        if self.collisions:
            wrong.append(f"{len(self.collisions)} collisions")
        wanted = max(1, int(self.seconds / SECONDS_PER_DELIVERY_MAX))
        if self.seconds >= SECONDS_PER_DELIVERY_MAX and self.deliveries < wanted:
            wrong.append(f"{self.deliveries} deliveries, expected at least {wanted}")
        for kind, count in self.errors.items():
            if kind not in NO_FAULTS:
                wrong.append(f"{count} replans ended with {kind.partition(':')[2]}")
        wrong.extend(self.faults)
        return wrong


def make_report(
    world: World,
    asked: Sequence[Asked],
    *,
    revision: int,
    faults: Iterable[str],
    late_steps_s: float,
    heard: Heard = NOTHING_HEARD,
) -> Report:
    """Gather the numbers of a run."""
    kinds = Counter(one.kind for one in asked)
    tallies = {name: unit.tally for name, unit in world.units.items()}
    return Report(
        seconds=round(world.now_s, 2),
        deliveries=world.deliveries,
        replans=len(asked),
        answers={kind: n for kind, n in kinds.items() if not kind.startswith("error:")},
        better_routes=sum(one.better for one in asked),
        first_ms=_percentiles([1e3 * one.first_s for one in asked]),
        answer_ms=_percentiles([1e3 * one.total_s for one in asked]),
        of_budget=_percentiles([one.total_s / one.budget_s for one in asked]),
        deadline_misses=sum(one.is_late for one in asked),
        taken_over=sum(tally.taken_over for tally in tallies.values()),
        alerts=_by_layer(heard.alerts),
        cleared=sum(tally.cleared for tally in tallies.values()),
        rerouted=sum(tally.rerouted for tally in tallies.values()),
        rerouted_taken=sum(tally.rerouted_taken for tally in tallies.values()),
        not_rerouted=sum(tally.not_rerouted for tally in tallies.values()),
        told_to_alert_ms=_half_and_most(heard.told_s),
        scan_to_alert_ms=_half_and_most(heard.scanned_s),
        scans=heard.scans,
        pallets=world.crane.pallets,
        nearest=asdict(world.referee.nearest),
        nearest_units=asdict(world.referee.nearest_units),
        collisions=[asdict(near) for near in world.referee.collisions],
        packs=world.crane.put_down,
        revision=revision,
        errors={kind: n for kind, n in kinds.items() if kind.startswith("error:")},
        faults=list(faults),
        late_steps_s=round(late_steps_s, 3),
        units={
            name: {**asdict(tally), "driven_m": round(world.units[name].driver.driven_m, 1)}
            for name, tally in tallies.items()
        },
    )


def _percentiles(values: Sequence[float]) -> tuple[float, float]:
    known = [value for value in values if math.isfinite(value)]
    if not known:
        return math.nan, math.nan
    return float(np.percentile(known, 50)), float(np.percentile(known, 99))


def _by_layer(alerts: Iterable[tuple[str, str]]) -> dict[str, int]:
    """Count alerts by layer; the ground of all vehicles is one."""
    names = ("vehicles" if layer.startswith("unit.") else layer or kind for layer, kind in alerts)
    return dict(Counter(names).most_common())


def _half_and_most(seconds: Sequence[float]) -> tuple[float, float]:
    if not seconds:
        return math.nan, math.nan
    return 1e3 * float(np.median(seconds)), 1e3 * max(seconds)


def table_of(report: Report) -> "Table":
    """Return the closing table."""
    from rich.table import Table

    table = Table(show_header=False, title="The yard", title_justify="left")
    table.add_column("what")
    table.add_column("figure", justify="right")
    table.add_column("of which")
    loads = ", ".join(f"{name} {unit['deliveries']}" for name, unit in report.units.items())
    table.add_row("deliveries", str(report.deliveries), loads)
    answers = ", ".join(f"{kind} {count}" for kind, count in sorted(report.answers.items()))
    table.add_row("replans", str(report.replans), answers)
    table.add_row("better routes published", str(report.better_routes), "")
    table.add_row("taken over on the move", str(report.taken_over), "")
    alerts = ", ".join(f"{layer} {count}" for layer, count in report.alerts.items())
    table.add_row("alerts for guarded routes", str(sum(report.alerts.values())), alerts)
    routes = f"{report.rerouted_taken} taken over, {report.not_rerouted} times none was found"
    table.add_row("new routes after alerts", str(report.rerouted), routes)
    for name, (half, most) in (
        ("put down to alert", report.told_to_alert_ms),
        ("scan to alert", report.scan_to_alert_ms),
    ):
        if math.isfinite(half):
            table.add_row(name, f"p50 {half:.1f} ms", f"at most {most:.1f} ms")
    for name, pair, unit in (
        ("first route", report.first_ms, "ms"),
        ("answer", report.answer_ms, "ms"),
        ("answer, share of its budget", report.of_budget, ""),
    ):
        p50, p99 = (f"{value:.2f}" if unit == "" else f"{value:.1f}" for value in pair)
        table.add_row(name, f"p50 {p50} {unit}".strip(), f"p99 {p99} {unit}".strip())
    table.add_row("deadline misses", str(report.deadline_misses), "")
    table.add_row("smallest clearance", _metres(report.nearest), _between(report.nearest))
    apart = report.nearest_units
    table.add_row("between vehicles", _metres(apart), _between(apart))
    seen = f"{report.pallets} of them told by nobody, only seen in {report.scans} scans"
    table.add_row("put in the way", str(report.packs), seen)
    errors = ", ".join(f"{kind.partition(':')[2]} {n}" for kind, n in report.errors.items())
    table.add_row("errors", str(sum(report.errors.values())), errors)
    table.add_row(
        "collisions", str(len(report.collisions)), "; ".join(map(_between, report.collisions))
    )
    return table


def _metres(near: Mapping[str, Any]) -> str:
    away_m = near["distance_m"]
    return f"{away_m:.2f} m" if math.isfinite(away_m) else "none near"


def _between(near: Mapping[str, Any]) -> str:
    return f"{near['unit']}, {near['other']} at {near['at_s']:.1f} s" if near["unit"] else ""


def draw(world: World, report: Report, file: Path) -> None:
    """Draw the yard, the paths driven, and where everything stands at the end."""
    from bywayd.picture import ALARM, INKS, Plan

    first = f"{report.seconds:.0f} s, {report.deliveries} deliveries, {report.replans} replans, "
    first += f"first route p50 {report.first_ms[0]:.1f} ms, p99 {report.first_ms[1]:.1f} ms"
    second = f"smallest clearance {_metres(report.nearest)} ({_between(report.nearest)}), "
    second += f"{len(report.collisions)} collisions"
    plan = Plan("Brick and timber yard: paths driven", LIMITS_M, [first, second])
    plan.limits(LIMITS_M)
    for masses, kind in ((BUILDINGS, "building"), (STACKS, "stack")):
        plan.polygons(polygons_of(masses), kind, named=True)
        plan.discs(discs_of(masses), kind)
    plan.polygons(polygons_of(pack.mass for pack in world.crane.packs), "pack")
    truck = world.truck.driver
    plan.path([pose[:2] for pose in world.traces[FORK_TRUCK]], ALARM, f"{FORK_TRUCK}, by hand")
    plan.vehicle(truck.outline_m, truck.pose, ALARM)
    for ink, (name, unit) in zip(INKS, world.units.items(), strict=False):
        for station in unit.stations:
            plan.goal(unit.driver.outline_m, station.pose, ink)
        plan.path([pose[:2] for pose in world.traces[name]], ink, name)
        plan.vehicle(unit.driver.outline_m, unit.driver.pose, ink)
    plan.save(file)
