"""One run of the benchmark: which parts, how large, and what they found wrong."""

import hashlib
import os
import platform
import time
from collections.abc import Callable, Sequence
from dataclasses import replace
from importlib import metadata
from pathlib import Path
from typing import Final, Literal, TypeVar

from byway_planning import warm
from bywayd.bench import methods, micro, planning, serving, site
from bywayd.bench.families_tight import FAMILIES
from bywayd.bench.figures import Figures, Findings, Progress

Part = Literal["planning", "micro", "site", "serving", "methods"]
PARTS: Final[tuple[Part, ...]] = ("planning", "micro", "site", "serving", "methods")
#: Methods side by side take minutes, and only when they are asked for.
USUAL: Final[tuple[Part, ...]] = ("planning", "micro", "site", "serving")
LONG_S: Final = 3.0
Name = TypeVar("Name", bound=str)


def measure(
    *,
    small: bool = False,
    long: bool = False,
    parts: Sequence[str] = (),
    families: Sequence[str] = (),
    salt: int = 1,
    seeds: int | None = None,
    progress: Progress = lambda text: None,
) -> Figures:
    """
    Run the benchmark.

    Args:
        small: A few seconds; only to see that everything works.
        long: Also 3 s runs with another seed for a better idea of the best route, and a site of
            a square kilometre.
        parts: Some of PARTS; all but "methods" if empty.
        families: Some of FAMILIES; all if empty.
        salt: Of all cases and questions; those of another salt are others.
        seeds: Cases of each family for first routes.
        progress: Is told what is done.

    Returns:
        All figures, as JSON has them; `faults` lists promises that were broken, and is empty in a
        good run; `digest` is the same as long as planning answers the same.

    Raises:
        ValueError: For a name that there is not.
    """
    chosen = _known("part", parts or USUAL, PARTS)
    names = _known("family", families, tuple(FAMILIES))
    if seeds is not None and seeds < 1:
        raise ValueError(f"seeds must be at least 1, got {seeds}")
    began_s = time.perf_counter()
    progress("loading or compiling the kernels")
    warm()
    findings = Findings()
    found: Figures = {"mode": "small" if small else "full", "salt": salt, "machine": _machine()}
    runs: dict[str, Callable[[], Figures]] = {
        "planning": lambda: _planning(names, salt, small, long, seeds, findings, progress),
        "micro": lambda: micro.measure_micro(
            salt, micro.MICRO_SMALL if small else micro.MicroSizes(), findings
        ),
        "site": lambda: site.measure_site(
            salt, site.SITE_SMALL if small else site.SiteSizes(huge=long), findings, progress
        ),
        "serving": lambda: serving.measure_serving(
            salt, serving.SERVING_SMALL if small else serving.ServingSizes(), findings, progress
        ),
    }
    runs["methods"] = lambda: methods.measure_methods(
        names, salt, methods.METHODS_SMALL if small else methods.METHODS_FULL, progress
    )
    for part in chosen:
        before_s = time.perf_counter()
        found[part] = runs[part]()
        progress(f"{part}: {time.perf_counter() - before_s:.1f} s in all")
    if "planning" in found:
        digests = [found["planning"][name]["digest"] for name in names]
        found["digest"] = hashlib.sha256(" ".join(digests).encode()).hexdigest()[:16]
    return found | findings.told() | {"took_s": time.perf_counter() - began_s}


def _planning(
    names: Sequence[str],
    salt: int,
    small: bool,
    long: bool,
    seeds: int | None,
    findings: Findings,
    progress: Progress,
) -> Figures:
    sizes = planning.SMALL if small else planning.Sizes()
    if seeds is not None:
        sizes = replace(sizes, firsts=seeds, costs=min(sizes.costs, seeds))
    if long:
        sizes = replace(sizes, long_s=LONG_S)
    return planning.measure_planning(names, salt, sizes, findings, progress)


def _known(what: str, wanted: Sequence[str], known: tuple[Name, ...]) -> tuple[Name, ...]:
    for name in wanted:
        if name not in known:
            raise ValueError(f"there is no {what} {name!r}; known: {', '.join(known)}")
    return tuple(name for name in known if not wanted or name in wanted)


def _machine() -> Figures:
    """Return what figures depend on beside the code."""
    model = next(
        (
            line.partition(":")[2].strip()
            for line in Path("/proc/cpuinfo").read_text().splitlines()
            if line.startswith("model name")
        ),
        platform.machine(),
    )
    return {
        "cpu": model,
        "cores": len(os.sched_getaffinity(0)),
        "load": os.getloadavg()[0],
        "python": platform.python_version(),
        **{name: metadata.version(name) for name in ("byway", "numba", "numpy", "scipy")},
    }
