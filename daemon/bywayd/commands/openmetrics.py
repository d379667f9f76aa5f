"""
A health record as OpenMetrics text, for a scraper.

Names are promises: `byway_` in front, base units, counters end in `_total`. What the daemon counts
under a new name appears here by itself. No label ever comes from a request or a client.
"""

import itertools
import re
from collections.abc import Iterator
from typing import Final

from prometheus_client.core import (
    CounterMetricFamily,
    GaugeMetricFamily,
    HistogramMetricFamily,
    InfoMetricFamily,
    Metric,
)
from prometheus_client.openmetrics.exposition import generate_latest
from prometheus_client.registry import Collector, CollectorRegistry

from byway.messages import HealthIs

CONTENT_TYPE: Final = "application/openmetrics-text; version=1.0.0; charset=utf-8"

#: What the names of the daemon's times mean; a time that is not here is described by its name.
TIMES: Final = {
    "answer_s": "From the arrival of a replan to its answer",
    "first_s": "From the arrival of a replan to its first verified route",
    "waited_s": "From the arrival of a replan to the beginning of its first job",
    "recheck_s": "Checking a found route again on a newer revision",
    "alert_s": "From the acknowledgement of a change to the alert that it blocks a guarded route",
    "visible_s": "From the arrival of a change of the site to the snapshot that has it",
    "late_s": "By how much answers missed the end of their budget",
}


def openmetrics(health: HealthIs) -> str:
    """Return the text, with the end mark that the format wants."""
    registry = CollectorRegistry()
    registry.register(_Once(health))
    text: bytes = generate_latest(registry)  # type: ignore[no-untyped-call]
    return text.decode()


class _Once(Collector):
    """prometheus-client's question "what is there?", answered from one record."""

    def __init__(self, health: HealthIs) -> None:
        self._health = health

    def collect(self) -> Iterator[Metric]:
        yield from _gauges(self._health)
        yield from _layers(self._health)
        for name, count in sorted(self._health.counts.items()):
            words = name.removesuffix("_total").replace("_", " ")
            if name.endswith("_total"):
                counter = CounterMetricFamily(
                    f"byway_{_metric(name).removesuffix('_total')}", f"Since the start: {words}"
                )
                counter.add_metric([], count)
                yield counter
            else:
                yield _gauge(name, count)
        for name, times in sorted(self._health.histograms.items()):
            cumulative = list(itertools.accumulate(times.counts))
            bounds = [*(f"{bound}" for bound in times.bounds_s), "+Inf"]
            family = HistogramMetricFamily(
                f"byway_{_metric(name.removesuffix('_s'))}_seconds", TIMES.get(name, name)
            )
            buckets = list(zip(bounds, cumulative, strict=True))
            family.add_metric([], buckets, sum_value=times.sum_s)
            yield family


def _gauges(health: HealthIs) -> Iterator[Metric]:
    yield InfoMetricFamily("byway", "The daemon", {"state": health.state})
    ready = 1.0 if health.state == "ready" else 0.0
    yield GaugeMetricFamily("byway_ready", "Whether replans are taken in", ready)
    yield GaugeMetricFamily("byway_revision", "Revision of the site", health.revision)
    yield GaugeMetricFamily("byway_uptime_seconds", "Since the start", health.uptime_s)
    replans = GaugeMetricFamily("byway_open_replans", "Replans not yet answered", labels=["phase"])
    replans.add_metric(["waiting"], health.waiting)
    replans.add_metric(["planning"], health.planning)
    yield replans
    workers = GaugeMetricFamily("byway_workers", "Planning processes", labels=["state"])
    for state, count in sorted(health.workers.items()):
        workers.add_metric([state], count)
    yield workers
    memory = GaugeMetricFamily("byway_memory_bytes", "Memory in use", labels=["part"])
    for part, size_bytes in sorted(health.memory_bytes.items()):
        memory.add_metric([part], size_bytes)
    yield memory


def _gauge(name: str, value: float) -> Metric:
    """A value of now; times in base units, as everywhere."""
    for suffix, factor in (("_us", 1e-6), ("_ms", 1e-3), ("_s", 1.0)):
        if name.endswith(suffix):
            name, value = f"{name.removesuffix(suffix)}_seconds", value * factor
            break
    return GaugeMetricFamily(f"byway_{_metric(name)}", name.replace("_", " "), value)


def _layers(health: HealthIs) -> Iterator[Metric]:
    obstacles = GaugeMetricFamily("byway_layer_obstacles", "Obstacles", labels=["layer"])
    age = GaugeMetricFamily("byway_layer_age_seconds", "Since the last change", labels=["layer"])
    lease = GaugeMetricFamily(
        "byway_layer_lease_left_seconds", "Until a silent owner loses it", labels=["layer"]
    )
    for name, layer in sorted(health.layers.items()):
        obstacles.add_metric([name], layer.obstacles)
        if layer.age_s is not None:
            age.add_metric([name], layer.age_s)
        if layer.lease_left_s is not None:
            lease.add_metric([name], layer.lease_left_s)
    yield from (obstacles, age, lease)


def _metric(name: str) -> str:
    return re.sub(r"[^a-z0-9_]", "_", name.lower())
