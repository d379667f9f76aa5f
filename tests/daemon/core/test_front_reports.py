"""What the health record tells of sources, layers, and what is pinned."""

from __future__ import annotations

from tests.daemon.core.frontdesk import Desk, put
from tests.daemon.core.movingdesk import batch, track

from byway import messages, obstacles
from bywayd.core import effects


def record(desk: Desk) -> messages.HealthIs:
    desk.say(messages.Health())
    found = desk.answer("q")
    assert isinstance(found, messages.HealthIs)
    return found


def test_what_is_pending_and_what_expires_is_counted() -> None:
    desk = Desk().open()
    desk.change(*put("stacks", "a", "b", expires_in_s=9.0))
    out = batch(desk)
    desk.change(*track("lidar", "cart"), source="other")
    counts = record(desk).counts
    # What is to expire takes its room from the moment that it is taken in.
    assert (counts["sources"], counts["changes_pending"], counts["expiries"]) == (2, 2, 3)
    desk.publish(out)
    counts = record(desk).counts
    assert (counts["changes_pending"], counts["expiries"]) == (1, 3)


def test_every_shape_counts_that_expires() -> None:
    """The ids of polygons, discs and boxes are one column."""
    square = [(0.0, 0.0), (1.0, 0.0), (1.0, 1.0)]
    shapes = obstacles.shapes(
        {"p": square}, {"d": (0.0, 0.0, 1.0)}, {"b": (5.0, 5.0, 0.0, 2.0, 1.0)}
    )
    fields, packed = obstacles.pack_shapes(shapes)
    desk = Desk().open()
    desk.change(messages.Put(layer="stacks", expires_in_s=0.5, **fields), packed)
    desk.publish(1)
    assert record(desk).counts["expiries"] == 3
    desk.tick(500)
    assert set(desk.one(effects.ApplyChanges).changes[0].ids) == {"p", "d", "b"}


def test_revisions_that_are_read_are_counted() -> None:
    desk = Desk().open()
    assert record(desk).counts["revisions_pinned"] == 0
    desk.ask("a", budget_s=5.0)
    assert record(desk).counts["revisions_pinned"] == 1


def test_what_is_expected_of_layers_is_told() -> None:
    desk = Desk().open()
    desk.change(messages.Claim(layer="lidar", expected_period_s=0.5))
    desk.publish(batch(desk))
    layers = record(desk).layers
    assert layers["lidar"].expected_period_s == 0.5
    assert (layers["lidar"].stale, layers["lidar"].durable) == (False, False)
    assert (layers["fixed"].expected_period_s, layers["fixed"].stale) == (None, False)
    desk.tick(500)
    assert record(desk).layers["lidar"].stale
