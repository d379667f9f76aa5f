"""What stands before every body: names and addresses."""

from dataclasses import dataclass

from byway import limits


@dataclass(frozen=True, slots=True)
class Header:
    """
    What names and addresses a message.

    Attributes:
        kind: Which message the body is.
        id: Of the request, or of the request that is replied to; empty for changes.
        source: Of a change: who sends it.
        number: Of a change: 1, 2, 3, ... per source. Of an event: 1, 2, 3, ... per topic.
        epoch: Of the daemon; from a client, the one that it believes in.
        traceparent: W3C trace context, handed through.
        version: Of the SPEC.
    """

    kind: str
    id: str = ""
    source: str = ""
    number: int = 0
    epoch: str = ""
    traceparent: str = ""
    version: int = limits.spec_version
