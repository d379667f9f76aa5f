"""
Rules that Byway sets itself, and what happens when one is broken.

A broken rule of our own is not an error to handle: going on would mean to answer from a state
that nobody has thought about. So it stops the process, the supervisor starts a new one, the
epoch changes and the sources send their layers again. Mistakes of others never end here; they
are refused with an error of the protocol.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import TypeVar

Value = TypeVar("Value")


class Defect(BaseException):
    """
    Byway broke its own rule. Nothing may catch this and carry on.

    Not an `Exception`, so that a broad handler does not swallow it. `story` holds the last
    things that happened before, oldest first, and is part of the text: whoever reads the
    report was not there.
    """

    def __init__(self, rule: str, story: Iterable[str] = ()) -> None:
        self.rule = rule
        self.story = tuple(story)
        super().__init__("\n  ".join([rule, *self.story]))


def invariant(holds: bool, rule: str, story: Iterable[str] = ()) -> None:
    """
    Stop with a `Defect` unless the rule holds. One condition a call.

    Not `assert`: the interpreter drops those under -O, and ours stay on in service.
    """
    if not holds:
        raise Defect(rule, story)


def known(value: Value | None, rule: str, story: Iterable[str] = ()) -> Value:
    """Return a value that must be there; stop with a `Defect` if it is not."""
    if value is None:
        raise Defect(rule, story)
    return value
