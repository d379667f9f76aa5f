"""What is heard of guarded routes, and how long it took."""

import pytest
from tests.daemon.yard.lines import table

from byway import messages
from byway.answer import Rerouted, Route
from bywayd.yard.hearing import Alerted, news_of, reactions_s
from bywayd.yard.telling import Change
from bywayd.yard.unit import Block, News

BLOCKED = messages.BlockedIs(
    distance_m=7.5, time_s=3.0, at_m=11.5, x_m=41.5, y_m=25.0, heading_rad=0.0,
    kind="disc", layer="packs", id="pack-3", depth_m=0.2,
)  # fmt: skip


@pytest.mark.parametrize(
    ("told", "news"),
    [
        (
            messages.Alert(unit="tug-3", guard="g-1", revision=7, blocked=BLOCKED),
            News("tug-3", "alert", "g-1", Block(11.5, "packs", "pack-3", "disc")),
        ),
        (
            messages.Cleared(unit="tug-3", guard="g-1", revision=7),
            News("tug-3", "cleared", "g-1"),
        ),
        (
            messages.GuardLost(unit="tug-3", guard="g-1", silent_s=3.0),
            News("tug-3", "guard_lost", "g-1"),
        ),
        (
            messages.RerouteFailed(unit="tug-3", guard="g-1", reason="not_found"),
            News("tug-3", "reroute_failed", "g-1"),
        ),
        (messages.LayerState(layer="lidar", state="stale"), None),
    ],
)
def test_events_are_passed_on(told: object, news: News | None) -> None:
    assert news_of(told) == news


def test_a_new_route_is_a_line_from_its_place_on_the_old_one() -> None:
    route = Route(table((0.0, 5.0)), (), 5.0, 3.0)
    told = Rerouted(
        kind="route", route=route, cost=5.0, cost_unit="m", bound=5.0, gap=0.0, blocked_by=(),
        seed=1, left_out=(), statistics={}, revision=9, epoch="e", unit="tug-3", replan="~1",
        guard="g-2", was="g-1", from_m=4.5, in_s=0.3,
    )  # fmt: skip
    news = news_of(told)
    assert news is not None
    assert (news.kind, news.guard, news.was, news.from_m) == ("rerouted", "g-2", "g-1", 4.5)
    assert news.line is not None
    assert news.line.found is told
    assert news.line.length_m == pytest.approx(5.0)


def alerted(layer: str, name: str, at_s: float, revision: int, kind: str = "polygon") -> Alerted:
    return Alerted("tug-3", Block(1.0, layer, name, kind), revision, at_s)


def test_reactions_are_from_a_change_to_the_first_alert_of_its_revision() -> None:
    changes = [
        Change("packs", ("pack-1",), 10.0, 5),
        Change("packs", ("pack-2",), 11.0, 8),
        Change("lidar", ("pallet-3",), 12.0, 9),
        Change("packs", ("pack-4",), 13.0, 12),
    ]
    alerts = [
        alerted("packs", "pack-1", 9.0, 4),  # of one with the same name, before
        alerted("packs", "pack-1", 10.012, 5),
        alerted("packs", "pack-1", 10.5, 6),  # again, for another vehicle
        alerted("packs", "pack-2", 11.4, 9),  # found there by a guard that was set later
        alerted("lidar", "", 12.006, 9, "cell"),
    ]
    assert reactions_s(changes, alerts) == pytest.approx([0.012, 0.006])
