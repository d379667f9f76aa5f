"""
A hundred thousand events of simulated days, and a broken core for every promise.

The seed is printed, and a failure names it: `python -m tests.simulation.run --seed N` replays it.
`BYWAY_SIMULATION_SEED` chooses other days.
"""

from __future__ import annotations

import os

import pytest
from tests.simulation.canaries import CANARIES, Canary
from tests.simulation.checkers import BrokenPromise
from tests.simulation.odds import FAULTS, RATES, Odds
from tests.simulation.world import World

from bywayd.core.invariant import Defect

SEED = int(os.environ.get("BYWAY_SIMULATION_SEED", "1"))
DAYS = 10
EVENTS_PER_DAY = 10_000


@pytest.mark.parametrize("day", range(DAYS))
def test_no_promise_is_broken_whatever_goes_wrong(day: int) -> None:
    seed = SEED * 1000 + day
    print(f"simulated day: seed={seed} events={EVENTS_PER_DAY}")
    world = World(seed)
    world.run(EVENTS_PER_DAY, calm=day % 3 != 0)


def test_on_a_quiet_day_nobody_is_killed_and_nobody_waits_in_vain() -> None:
    rates = {name: low for name, (low, _) in RATES.items()}
    odds = Odds(dict.fromkeys(FAULTS, 0.0), rates, durable=1)
    world = World(5, odds)
    while world.event_count < 5_000:
        world.step()
    world.calm_down()
    counts = dict(world.front.health.counts())
    world.drain()  # asks for more than the workers can do
    assert counts["answers_route_total"] > 100
    assert counts["changes_kept_total"] > 10
    for name in (
        *("workers_lost_total", "surveyors_lost_total", "clerks_lost_total"),
        "answers_late_total",
    ):
        assert counts.get(name, 0) == 0
    assert counts.get("refused_overloaded_total", 0) == 0


def test_on_the_worst_days_everything_happens_and_nothing_breaks() -> None:
    rates = {name: high / 2 for name, (_, high) in RATES.items()}
    happened: set[str] = set()
    for seed in range(3, 7):  # some faults are too rare for each to happen every day
        world = World(seed, Odds(dict(FAULTS), dict(rates), workers=3, durable=2))
        world.run(10_000)
        happened |= world.counts.keys()
    assert set(FAULTS) - happened == set()


def test_the_same_seed_gives_the_same_day() -> None:
    digests = []
    for _ in range(2):
        world = World(5)
        world.keep_digest = True
        world.run(2_000)
        digests.append((world.digest.hexdigest(), world.now_ns, world.event_count))
    assert digests[0] == digests[1]


@pytest.mark.parametrize("name", CANARIES)
def test_a_core_that_is_broken_on_purpose_is_caught(
    name: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    canary = CANARIES[name]
    monkeypatch.setattr(canary.owner, canary.method, canary.broken)
    world, event_count = world_of(canary)
    with pytest.raises((BrokenPromise, Defect), match=canary.caught):
        world.run(event_count)


def world_of(canary: Canary) -> tuple[World, int]:
    """Return a world in which a canary does harm, and within how many events."""
    rates = {name: high / 2 for name, (_, high) in RATES.items()}
    odds = Odds(dict(FAULTS), rates, workers=3, durable=int(canary.is_durable))
    odds.faults["restart"] = 0.002 if canary.needs_restarts else 0.0
    if canary.is_durable:
        rates |= {"replans": 20.0, "drives": 5.0, "changes": 300.0}
        return World(8, odds), 20_000
    if canary.is_about_sources:
        # There is time between changes to carry forward what moves.
        rates |= {"replans": 20.0, "drives": 5.0, "changes": 60.0}
        odds.faults = {name: odds.faults[name] / 5 for name in FAULTS}
        odds.faults |= {"expectant": 1.0, "trespass": 0.2}
        odds.when_stale = "refuse"
        return World(8, odds), 10_000
    return World(7, odds), 10_000
