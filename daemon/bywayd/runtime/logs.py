"""
Log lines: for people on a terminal, JSON otherwise, and never in the way of the front.

The front only appends to a bounded queue; a thread of its own makes the text and writes it.
A pipe that nobody reads stops that thread and nothing else: the oldest lines are dropped, and
as soon as there is room again a line says how many were lost.

Events have fixed dotted names, facts are keys with units, and `request_id` is bound for as
long as one request is being handled, so that it stands on every line about it.
"""

import os
import select
import threading
import time
from collections import deque
from collections.abc import MutableMapping
from datetime import UTC, datetime
from typing import Any, Final, Literal

import structlog
from structlog.typing import Processor

#: Lines that wait for the writer. A busy second makes some hundred, so this is several seconds.
lines_waiting_max: Final = 4096

#: How long a process that ends waits for its last lines to be written.
last_lines_wait_s: Final = 0.3

Style = Literal["human", "json"]
Line = MutableMapping[str, Any]


class LogWriter:
    """Owns the queue and the thread that empties it into one file descriptor."""

    def __init__(self, descriptor: int, style: Style) -> None:
        self._descriptor = descriptor
        self._render: Processor = (
            structlog.dev.ConsoleRenderer(colors=os.isatty(descriptor))
            if style == "human"
            else structlog.processors.JSONRenderer(default=str)
        )
        self._waiting: deque[Line] = deque(maxlen=lines_waiting_max)
        self._wake = threading.Event()
        self._ending = False
        #: Counted by the thread that logs; what the writer has reported is its own.
        self._dropped = 0
        self._reported = 0
        self._thread = threading.Thread(target=self._write_for_ever, name="logs", daemon=True)
        self._thread.start()

    @property
    def dropped(self) -> int:
        """How many lines were lost since the start because nobody took them."""
        return self._dropped

    def put(self, line: Line) -> None:
        """Take a line; never waits. The oldest one goes when there is no room."""
        if len(self._waiting) == lines_waiting_max:
            self._dropped += 1
        self._waiting.append(line)
        self._wake.set()

    def close(self) -> None:
        """Give the last lines a moment to be written, then leave the rest."""
        self._ending = True
        self._wake.set()
        self._thread.join(last_lines_wait_s)

    def _write_for_ever(self) -> None:
        while True:
            self._wake.wait()
            self._wake.clear()
            while self._waiting:
                if not self._write(self._waiting.popleft()):
                    return
            if self._dropped > self._reported:
                lost, self._reported = self._dropped - self._reported, self._dropped
                if not self._write(_line_about_lost_lines(lost)):
                    return
            if self._ending:
                return

    def _write(self, line: Line) -> bool:
        moment = datetime.fromtimestamp(line["timestamp"] * 1e-9, UTC)
        line["timestamp"] = moment.strftime("%Y-%m-%dT%H:%M:%S.%fZ")
        rest = memoryview(f"{self._render(None, '', line)!s}\n".encode())
        while rest:
            try:
                rest = rest[os.write(self._descriptor, rest) :]
            except BlockingIOError:  # somebody made the pipe non-blocking; it is shared
                select.select([], [self._descriptor], [])
            except OSError:  # the reader is gone for good; lines are dropped from now on
                return False
        return True


def _line_about_lost_lines(count: int) -> Line:
    return _note_time(
        None, "warning", {"event": "logs.dropped", "level": "warning", "lines": count}
    )


class _Queue:
    """What structlog calls a logger: every method hands the finished line to the writer."""

    def __init__(self, writer: LogWriter) -> None:
        self._put = writer.put

    def _log(self, line: Line) -> None:
        self._put(line)

    debug = info = warning = error = critical = _log


def start_logging(
    descriptor: int = 2, *, style: Style | None = None, level: str = "info"
) -> LogWriter:
    """
    Send all log lines of this process to a file descriptor, through the queue.

    Args:
        descriptor: Where lines go; standard error by default.
        style: `human` or `json`; by default what suits the descriptor.
        level: The lowest level that is written.
    """
    chosen: Style = style or ("human" if os.isatty(descriptor) else "json")
    writer = LogWriter(descriptor, chosen)
    structlog.configure(
        processors=[
            structlog.contextvars.merge_contextvars,
            structlog.processors.add_log_level,
            _note_time,
            _hand_over_as_it_is,
        ],
        wrapper_class=structlog.make_filtering_bound_logger(level),
        logger_factory=lambda *_: _Queue(writer),
        cache_logger_on_first_use=False,
    )
    return writer


def _note_time(_logger: Any, _name: str, line: Line) -> Line:
    # Written out by the writer: that takes longer than to take the time.
    line["timestamp"] = time.time_ns()
    return line


def _hand_over_as_it_is(_logger: Any, _name: str, line: Line) -> tuple[tuple[Line], dict[str, Any]]:
    # Rendering costs ten times what this does; it is done on the writer's thread.
    return (line,), {}
