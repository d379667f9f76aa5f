"""Which snapshots must stay: pins, releases, and what a successor is told."""

from __future__ import annotations

import pytest

from bywayd.core.invariant import Defect
from bywayd.core.snapshots import Snapshot, Snapshots


@pytest.fixture
def snapshots() -> Snapshots:
    snapshots = Snapshots()
    assert snapshots.current is None
    assert snapshots.publish(1, "one")
    return snapshots


def test_nothing_can_be_pinned_before_there_is_a_snapshot() -> None:
    snapshots = Snapshots()
    assert snapshots.revision == 0
    with pytest.raises(Defect, match="before one is pinned"):
        snapshots.pin()


def test_revisions_never_go_back(snapshots: Snapshots) -> None:
    assert snapshots.publish(3, "three")
    assert not snapshots.publish(2, "two")
    assert snapshots.current == Snapshot(3, "three")
    assert snapshots.publish(3, "three again")
    snapshots.check()


def test_what_is_read_is_not_given_back(snapshots: Snapshots) -> None:
    assert snapshots.maybe_release() == 1
    assert snapshots.pin() == Snapshot(1, "one")
    assert snapshots.pin() == Snapshot(1, "one")
    snapshots.publish(2, "two")
    assert snapshots.maybe_release() is None
    snapshots.unpin(1)
    assert snapshots.maybe_release() is None
    snapshots.unpin(1)
    assert snapshots.maybe_release() == 2
    assert snapshots.maybe_release() is None
    snapshots.check()


def test_a_successor_keeps_all_that_is_read_and_the_current_one(snapshots: Snapshots) -> None:
    snapshots.pin()
    snapshots.publish(2, "two")
    snapshots.publish(3, "three")
    assert snapshots.hand_over() == ("one", "three")
    snapshots.unpin(1)
    assert snapshots.hand_over() == ("three",)
    assert snapshots.maybe_release() is None  # that is what it was told
    snapshots.check()


def test_a_pin_is_ended_once(snapshots: Snapshots) -> None:
    snapshots.pin()
    snapshots.unpin(1)
    with pytest.raises(Defect, match="no more often than pinned"):
        snapshots.unpin(1)
