"""The health record as a scraper reads it."""

import pytest
from prometheus_client.openmetrics.parser import text_string_to_metric_families

from byway.messages import HealthIs, Histogram, LayerHealth
from bywayd.commands.openmetrics import openmetrics

HEALTH = HealthIs(
    state="ready",
    revision=17,
    uptime_s=12.5,
    waiting=1,
    planning=2,
    workers={"idle": 1, "busy": 2},
    layers={
        "fixed": LayerHealth(source="a", age_s=3.0, obstacles=12),
        "lidar": LayerHealth(source="b", age_s=0.1, lease_left_s=9.9),
        "unit.tug-1": LayerHealth(),
    },
    counts={
        "replans_total": 40,
        "answers_route_total": 38,
        "deadline_missed_total": 1,
        "peers": 3,
        "turn_longest_us": 2500,
    },
    histograms={"answer_s": Histogram(bounds_s=[0.01, 0.1, 1.0], counts=[3, 4, 2, 1], sum_s=4.5)},
    memory_bytes={"front": 50_000_000},
)


@pytest.fixture(scope="module")
def samples() -> dict[tuple[str, tuple[tuple[str, str], ...]], float]:
    found = {}
    for family in text_string_to_metric_families(openmetrics(HEALTH)):
        for sample in family.samples:
            found[sample.name, tuple(sorted(sample.labels.items()))] = sample.value
    return found


def test_counts_are_counters(samples: dict[object, float]) -> None:
    assert samples["byway_replans_total", ()] == 40
    assert samples["byway_deadline_missed_total", ()] == 1


def test_what_is_no_count_since_the_start_is_a_gauge_in_base_units(
    samples: dict[object, float],
) -> None:
    assert samples["byway_peers", ()] == 3
    assert samples["byway_turn_longest_seconds", ()] == pytest.approx(0.0025)


def test_times_are_histograms_in_seconds_that_add_up(samples: dict[object, float]) -> None:
    buckets = [
        samples["byway_answer_seconds_bucket", (("le", le),)] for le in ("0.01", "0.1", "1.0")
    ]
    assert buckets == [3, 7, 9]
    assert samples["byway_answer_seconds_bucket", (("le", "+Inf"),)] == 10
    assert samples["byway_answer_seconds_count", ()] == 10
    assert samples["byway_answer_seconds_sum", ()] == 4.5


def test_states_are_gauges(samples: dict[object, float]) -> None:
    assert samples["byway_ready", ()] == 1
    assert samples["byway_revision", ()] == 17
    assert samples["byway_workers", (("state", "busy"),)] == 2
    assert samples["byway_open_replans", (("phase", "waiting"),)] == 1
    assert samples["byway_memory_bytes", (("part", "front"),)] == 50_000_000


def test_a_layer_says_only_what_is_known_of_it(samples: dict[object, float]) -> None:
    assert samples["byway_layer_obstacles", (("layer", "fixed"),)] == 12
    assert samples["byway_layer_lease_left_seconds", (("layer", "lidar"),)] == 9.9
    assert ("byway_layer_age_seconds", (("layer", "unit.tug-1"),)) not in samples


def test_a_daemon_that_warms_is_not_ready() -> None:
    text = openmetrics(HEALTH.model_copy(update={"state": "warming"}))
    assert "byway_ready 0.0\n" in text
    assert text.endswith("# EOF\n")
