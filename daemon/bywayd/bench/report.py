"""The figures of a run as tables; an asterisk marks what misses its target."""

from collections.abc import Sequence
from typing import Any

from rich.table import Table

from bywayd.bench.figures import Figures
from bywayd.bench.growth import KINDS
from bywayd.bench.targets import (
    FAMILY_TARGETS,
    IN_TIME_TARGET,
    MICRO_TARGETS,
    OVERLOADED_TARGET,
    SERVING_TARGETS,
    SITE_TARGETS,
    Target,
)


def _missed(told: str) -> str:
    return f"[bold yellow]{told}*[/bold yellow]"


def tables(found: Figures) -> list[Table | str]:
    """Return what a run came to, to be printed one after the other."""
    shown: list[Table | str] = []
    if "planning" in found:
        shown.append(_firsts(found["planning"]))
        if _with_costs(found["planning"]):
            shown += [_costs(found["planning"]), _bounds(found["planning"])]
    for part, title, targets in (
        ("micro", "Parts of planning (CPU)", MICRO_TARGETS),
        ("site", "Changes of the site (CPU)", SITE_TARGETS),
        ("serving", "The daemon (wall clock)", SERVING_TARGETS),
    ):
        if part in found:
            shown.append(_figures(title, found[part], targets))
    if "site" in found:
        shown += _growth(found["site"]["growth"])
    if "methods" in found:
        shown.append(method_table(found["methods"]))
    if found.get("serving", {}).get("load"):
        shown.append(_load(found["serving"]["load"]))
    machine = found["machine"]
    shown.append(
        f"{machine['cpu']}, {machine['cores']} cores, load {machine['load']:.1f} at the start; "
        f"salt {found['salt']}, {found['mode']} run, {found['took_s']:.0f} s"
    )
    if "digest" in found:
        shown.append(f"digest of the answers: {found['digest']}")
    shown += [f"look at: {text}" for text in sorted(set(found["anomalies"]))]
    shown += [f"[bold red]wrong[/bold red]: {text}" for text in found["faults"]]
    return shown


def _table(title: str, *columns: str) -> Table:
    table = Table(title=title, title_justify="left", box=None, pad_edge=False)
    for i, column in enumerate(columns):
        table.add_column(column, justify="left" if i == 0 else "right", no_wrap=True)
    return table


def _firsts(planning: Figures) -> Table:
    table = _table(
        "First route, ms of CPU (wanted; * misses it); fresh: nothing known of the revision",
        *("family", "cases", "100 ms", "p50", "p99", "fresh p50", "p99"),
    )
    for name, told in planning.items():
        wanted = FAMILY_TARGETS[name]
        known, fresh = told["first_known_ms"], told["first_fresh_ms"]
        solved = f"{100.0 * told['solved']:.1f} %"
        table.add_row(
            name,
            str(told["cases"]),
            solved if told["solved"] == 1.0 else _missed(solved),
            _against(known["p50"], wanted.first_p50_ms, "{:.2f}", "{:g}"),
            _against(known["p99"], wanted.first_p99_ms, "{:.2f}", "{:g}"),
            _plain(fresh["p50"], "{:.2f}"),
            _plain(fresh["p99"], "{:.2f}"),
        )
    return table


def _costs(planning: Figures) -> Table:
    any_of = next(iter(planning.values()))
    short, full = f"{any_of['short_ms']:g} ms", f"{any_of['full_ms']:g} ms"
    table = _table(
        "Cost to the best known (wanted)", "family", f"p50, {short}", "p90", f"p50, {full}", "p90"
    )
    for name, told in _with_costs(planning):
        wanted = FAMILY_TARGETS[name]
        cells = []
        for kind, goals in (("short", wanted.cost_short), ("full", wanted.cost_full)):
            for i, share in enumerate(("p50", "p90")):
                goal = None if goals is None else goals[i]
                cells.append(_against(told[f"cost_{kind}_to_best"][share], goal, "{:.3f}", "{:g}"))
        table.add_row(name, *cells)
    return table


def _bounds(planning: Figures) -> Table:
    any_of = next(iter(planning.values()))
    full = f"{any_of['full_ms']:g} ms"
    table = _table(
        "Proven bounds, medians; states checked a second; verify, us",
        *("family", "cases", f"cost at {full} / bound", "bound / best", "states/s", "verify"),
    )
    for name, told in _with_costs(planning):
        table.add_row(
            name,
            str(told["cost_cases"]),
            _plain(told["cost_full_to_bound"]["p50"], "{:.3f}"),
            _plain(told["bound_to_best"], "{:.3f}"),
            _plain(told["states_per_s"], "{:,.0f}"),
            _plain(told["verify_us"]["p50"], "{:.0f}"),
        )
    return table


def _with_costs(planning: Figures) -> list[tuple[str, Figures]]:
    return [(name, told) for name, told in planning.items() if told["cost_cases"]]


def _figures(title: str, found: Figures, targets: Sequence[Target]) -> Table:
    table = _table(title, "", "is", "wanted")
    for target in targets:
        value: Any = found
        for name in target.name.split("."):
            value = value.get(name) if isinstance(value, dict) else None
        if value is None and target.name.split(".")[0] not in found:
            continue  # not measured in this run
        told = _plain(value, "{:.4g}")
        missed = value is not None and not target.is_met(value)
        wanted = ""
        if target.most is not None:
            wanted = f"at most {target.most:g}"
        if target.least is not None:
            wanted = f"at least {target.least:g}"
        table.add_row(target.text, _missed(told) if missed else told, wanted)
    return table


def _growth(growth: Figures) -> list[Table | str]:
    """How costs grow; an update should cost what it touches, so these columns should be flat."""
    shown: list[Table | str] = []
    for across, title in (
        ("obstacles", "Changes of a site, CPU ms p50 (p90), as obstacles grow in number"),
        ("sides", "The same as the site grows, with as many obstacles a hectare"),
    ):
        table = _table(title, "stacks", "side, m", *KINDS)
        for row in growth[across]:
            table.add_row(
                str(row["stacks"]), f"{row['side_m']:g}", *(_median(row[f"{k}_ms"]) for k in KINDS)
            )
        shown.append(table)
    table = _table(
        "Checking guarded routes of 100 m, CPU ms p50 (p90)",
        *("routes", "after a small change", "everything anew"),
    )
    for row in growth["guards"]:
        table.add_row(str(row["guards"]), _median(row["small_ms"]), _median(row["whole_ms"]))
    return [*shown, table]


def method_table(methods: Figures) -> Table:
    """Return the methods side by side."""
    moments = [f"{moment:g} ms" for moment in methods["moments_ms"]]
    table = _table(
        f"Methods on {methods['cases']} cases: first route, CPU ms; cost to the best known, median",
        *("method", "solved", "first p50", "p90", *moments),
    )
    for name, told in methods["methods"].items():
        table.add_row(
            name,
            f"{100.0 * told['solved']:.0f} %",
            _plain(told["first_ms"]["p50"], "{:.1f}"),
            _plain(told["first_ms"]["p90"], "{:.1f}"),
            *(_plain(cost, "{:.3f}") for cost in told["cost_to_best"]),
        )
    return table


def _median(told: Figures) -> str:
    return f"{_plain(told['p50'], '{:.3g}')} ({_plain(told['p90'], '{:.3g}')})"


def _load(stages: Sequence[Figures]) -> Table:
    table = _table(
        "Replans with 50 ms each, for a share of the capacity (wanted)",
        *("share", "asked/s", "in time", "of capacity", "refused", "late", "ms p50", "p99"),
    )
    for told in stages:
        over = told["share"] > 1.0
        table.add_row(
            f"{told['share']:g}",
            f"{told['asked_per_s']:.0f}",
            _share(told["in_time"], None if over else IN_TIME_TARGET),
            _share(told["in_time_to_capacity"], OVERLOADED_TARGET if over else None),
            str(told["became"].get("overloaded", 0)),
            str(told["late"]),
            _plain(told["answer_ms"]["p50"], "{:.1f}"),
            _plain(told["answer_ms"]["p99"], "{:.1f}"),
        )
    return table


def _share(value: float, least: float | None) -> str:
    told = f"{100.0 * value:.1f} %"
    if least is None:
        return told
    wanted = f" ({100.0 * least:g} %)"
    return (told if value >= least else _missed(told)) + wanted


def _plain(value: float | None, form: str) -> str:
    return "-" if value is None else form.format(value)


def _against(value: float | None, most: float | None, form: str, wanted_form: str) -> str:
    """A value with what is wanted behind it, marked when it is more; "-" for nothing in time."""
    told = _plain(value, form)
    if most is None:
        return told
    missed = value is None or float(form.format(value)) > most
    wanted = f" ({wanted_form.format(most)})"
    return (_missed(told) if missed else told) + wanted
