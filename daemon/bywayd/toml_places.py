"""On which line of a TOML text each key stands; the parser of the standard library does not say."""

import tomllib
from collections.abc import Iterator, Mapping
from typing import Any

Key = tuple[str, ...]


def lines_of_keys(text: str) -> dict[Key, int]:
    """
    Return the line (from 1) on which each key of a valid TOML text begins.

    Keys inside arrays count as well, by their index: ("a", "1", "b"). The parser itself is asked:
    a key begins on the first line after the last whole beginning of the text that does not have
    it yet. That costs one parse a line, which a settings file can bear when it has a mistake.
    """
    found: dict[Key, int] = {}
    lines = text.splitlines(keepends=True)
    first_unseen = 1
    for count in range(1, len(lines) + 1):
        try:
            beginning = tomllib.loads("".join(lines[:count]))
        except tomllib.TOMLDecodeError:
            continue  # in the middle of a value of several lines
        for key in _keys(beginning):
            found.setdefault(key, first_unseen)
        first_unseen = count + 1
    return found


def _keys(value: Any, above: Key = ()) -> Iterator[Key]:
    if isinstance(value, Mapping):
        below: Any = value.items()
    elif isinstance(value, list):
        below = enumerate(value)
    else:
        return
    for name, inner in below:
        key = (*above, str(name))
        yield key
        yield from _keys(inner, key)
