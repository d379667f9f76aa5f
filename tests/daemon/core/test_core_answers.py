"""What is remembered of answers, counts and times, and how messages leave."""

from __future__ import annotations

import pytest
from tests.daemon.core.frontdesk import START, ms

from byway.frames import Header
from byway.limits import text_chars_max
from byway.messages import Noted, Vehicles
from bywayd.core import effects
from bywayd.core.answers import Answers
from bywayd.core.events import Peer
from bywayd.core.health import BOUNDS_S, TIMED, Health, Histogram
from bywayd.core.instants import Duration, Instant
from bywayd.core.invariant import Defect
from bywayd.core.outbox import Outbox

MESSAGE = Noted(replans=[])
PEER = Peer("requests", b"c")


def keep(answers: Answers, id: str, now: Instant = START, size: int = 0) -> None:
    answers.keep(id, b"body", MESSAGE, size, b"", now)
    answers.check()


def test_an_answer_is_found_again_as_it_was() -> None:
    answers = Answers(10, 10**6, ms(1000))
    answers.keep("a", b"body", MESSAGE, 3, b"columns", START)
    found = answers.get("a")
    assert found is not None
    assert (found.body, found.message, found.packed) == (b"body", MESSAGE, b"columns")
    assert answers.get("b") is None
    with pytest.raises(Defect, match="answered once"):
        keep(answers, "a")


def test_the_oldest_answers_are_forgotten_when_there_are_too_many() -> None:
    answers = Answers(3, 10**6, ms(1000))
    for id in "abcde":
        keep(answers, id)
    assert [id for id in "abcde" if answers.get(id)] == ["c", "d", "e"]
    assert len(answers) == 3


def test_the_oldest_answers_are_forgotten_when_they_are_too_large() -> None:
    answers = Answers(100, 10_000, ms(1000))
    for id in "abc":
        keep(answers, id, size=3_500)
    assert [id for id in "abc" if answers.get(id)] == ["b", "c"]
    keep(answers, "huge", size=50_000)
    assert len(answers) == 1
    assert answers.size_bytes > 50_000


def test_answers_are_forgotten_after_a_while() -> None:
    answers = Answers(100, 10**6, ms(1000))
    keep(answers, "a")
    keep(answers, "b", START + ms(900))
    keep(answers, "c", START + ms(1001))
    assert [id for id in "abc" if answers.get(id)] == ["b", "c"]


@pytest.mark.parametrize(
    ("duration_s", "place"),
    [(0.0, 0), (0.001, 0), (0.0010001, 1), (0.05, 5), (2.5, 10), (2.6, 11), (100.0, 11)],
)
def test_a_time_is_counted_below_the_first_bound_that_it_does_not_exceed(
    duration_s: float, place: int
) -> None:
    histogram = Histogram()
    histogram.observe(Duration.of_s(duration_s))
    assert histogram.counts.index(1) == place
    assert histogram.message().sum_s == pytest.approx(duration_s)
    assert len(histogram.message().counts) == len(BOUNDS_S) + 1


def test_health_counts_and_tells() -> None:
    health = Health()
    health.count("this_total")
    health.count("this_total", 2)
    health.observe("answer_s", ms(3))
    found = health.statistics()
    assert found.counts == {"this_total": 3}
    assert found.observed["answer_s"] == 1
    assert set(health.histograms()) == set(TIMED)
    health.check()


def test_names_of_counts_are_bounded() -> None:
    health = Health()
    for serial in range(500):
        health.count(f"made_up_{serial}")
    with pytest.raises(Defect, match="come from code"):
        health.check()


def test_a_reply_repeats_the_id_and_trace_of_what_it_answers_and_names_the_epoch() -> None:
    outbox = Outbox("now", 10)
    outbox.reply(PEER, Header("noted", "a", traceparent="t", epoch="before"), MESSAGE, b"columns")
    outbox.reply(PEER, None, MESSAGE)
    first, second = outbox.take()
    assert first == effects.Reply(
        PEER, Header("noted", "a", traceparent="t", epoch="now"), MESSAGE, b"columns"
    )
    assert second == effects.Reply(PEER, Header("noted", epoch="now"), MESSAGE)
    assert outbox.take() == []


def test_a_text_too_long_for_the_wire_is_cut() -> None:
    outbox = Outbox("now", 10)
    outbox.error(PEER, None, "internal", "x" * 5000, {"a": 1}, retry_after_s=0.5)
    (reply,) = outbox.take()
    assert isinstance(reply, effects.Reply)
    assert len(reply.message.text) == text_chars_max  # type: ignore[attr-defined]


def test_every_topic_is_numbered_by_itself_and_topics_are_bounded() -> None:
    outbox = Outbox("now", 2)
    for topic in ("a", "b", "a", "c", "b", "a"):
        outbox.publish(topic, Vehicles(), id="x")
    told = [(e.topic, e.header.number) for e in outbox.take() if isinstance(e, effects.Publish)]
    # b was forgotten when c came, a when b came again: their numbers begin anew.
    assert told == [("a", 1), ("b", 1), ("a", 2), ("c", 1), ("b", 1), ("a", 1)]
    assert outbox.stream_count == 2
