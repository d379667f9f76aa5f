"""Log lines arrive whole, and a reader that does not read costs lines, never time."""

import json
import os
import time

import pytest
import structlog
from structlog.contextvars import bound_contextvars

from bywayd.runtime import logs
from bywayd.runtime.logs import start_logging


@pytest.fixture
def pipe():
    ends = os.pipe()
    yield ends
    for end in ends:
        os.close(end)
    structlog.reset_defaults()


def _lines(descriptor: int) -> list[dict]:
    return [json.loads(line) for line in os.read(descriptor, 1 << 20).splitlines()]


def test_a_line_has_its_facts_its_level_and_the_request_it_is_about(pipe):
    writer = start_logging(pipe[1])
    log = structlog.get_logger()
    with bound_contextvars(request_id="r-17"):
        log.info("replan.answered", waited_ms=1.5)
    log.debug("not.wanted")
    writer.close()
    (line,) = _lines(pipe[0])
    assert line.pop("timestamp")
    assert line == {
        "event": "replan.answered",
        "level": "info",
        "request_id": "r-17",
        "waited_ms": 1.5,
    }


def test_what_is_not_json_is_written_as_text(pipe):
    writer = start_logging(pipe[1])
    structlog.get_logger().info("odd", value=object, bytes=b"\xff")
    writer.close()
    assert _lines(pipe[0])[0]["value"] == "<class 'object'>"


def test_people_get_lines_without_braces(pipe):
    writer = start_logging(pipe[1], style="human")
    structlog.get_logger().warning("doors.closed", peers=12)
    writer.close()
    text = os.read(pipe[0], 10_000).decode()
    assert "doors.closed" in text
    assert "peers=12" in text
    assert "{" not in text


def test_a_pipe_that_nobody_reads_does_not_stop_who_logs(pipe, monkeypatch):
    monkeypatch.setattr(logs, "lines_waiting_max", 50)
    monkeypatch.setattr(logs, "last_lines_wait_s", 5.0)
    writer = start_logging(pipe[1])
    log = structlog.get_logger()
    began_s = time.monotonic()
    for number in range(2000):  # far more than the pipe and the queue hold
        log.info("busy", number=number, ballast="x" * 200)
    assert time.monotonic() - began_s < 2.0
    assert writer.dropped > 0
    # Somebody begins to read: what is left comes, newest last, and how much was lost.
    numbers: list[int] = []
    lost = 0
    text = b""
    while len(numbers) + lost < 2000:
        text += os.read(pipe[0], 1 << 16)
        whole, _, text = text.rpartition(b"\n")
        for line in map(json.loads, whole.splitlines()):
            if line["event"] == "busy":
                numbers.append(line["number"])
            else:
                assert line["event"] == "logs.dropped"
                lost += line["lines"]
    assert numbers == sorted(set(numbers))
    assert numbers[-1] == 1999
    assert lost == writer.dropped
    writer.close()


def test_a_reader_that_is_gone_ends_writing_and_nothing_else():
    read_end, write_end = os.pipe()
    writer = start_logging(write_end)
    os.close(read_end)
    log = structlog.get_logger()
    for number in range(10):
        log.info("into.the.void", number=number)
    writer.close()
    os.close(write_end)
    structlog.reset_defaults()
