"""
The list of who is allowed: public keys, each with a name, a role, and layers where it matters.

    ["lidar-north"]
    role = "source"
    public = "Yne@$w-vo<fVvi]a<NY6T1ed:M$fCG*[IaLV{hID"
    layers = ["lidar.north", "lidar.north.*"]

It holds no secret, but whoever can change it can let himself in: it must belong to the user of the
daemon, or to root, and nobody else may write to it.
"""

import re
import tomllib
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any, Final

from byway import limits
from byway.errors import BadValue
from byway.keys import check_key, read_guarded, write_private
from byway.obstacles import is_id
from bywayd.core.rights import ROLES, Rights

#: Every key takes a line of the list, and a connection or three.
allowed_max: Final = 10_000
patterns_max: Final = limits.list_entries_max

_PATTERN: Final = re.compile(r"\*|[A-Za-z0-9][A-Za-z0-9_.:/#-]{0,63}\*?")

_HEAD: Final = """\
# Who may talk to the daemon of this folder, made by `byway keys`. It is read again when it changes.
# role: source (changes layers), driver (asks for routes), watcher (looks), operator (everything).
# layers: names of layers that may be changed; "lidar.*" stands for all that begin with "lidar.".
#   A source without layers may change all, a driver without layers none.
"""

#: Rights by public key.
Allowed = Mapping[str, Rights]


def load_allowed(file: Path) -> dict[str, Rights]:
    """
    Return who is allowed, by public key.

    Raises:
        BadValue: It cannot be read, others can change it, or something in it is wrong.
    """
    try:
        told = tomllib.loads(read_guarded(file, is_secret=False))
    except tomllib.TOMLDecodeError as fault:
        raise _bad(file, f"is not TOML: {fault}") from None
    if len(told) > allowed_max:
        raise _bad(file, f"has {len(told)} entries, the most are {allowed_max}")
    allowed: dict[str, Rights] = {}
    for name, entry in told.items():
        public, rights = _entry(file, name, entry)
        if public in allowed:
            raise _bad(file, f"gives {name} the key of {allowed[public].name}")
        allowed[public] = rights
    return allowed


def _entry(file: Path, name: str, entry: Any) -> tuple[str, Rights]:
    if not is_id(name) or not isinstance(entry, dict):
        raise _bad(file, f"has an entry {name!r:.80}, which is no section with a name")
    if unknown := set(entry) - {"role", "public", "layers"}:
        raise _bad(file, f"has a key {sorted(unknown)[0]!r:.80} at {name} that is not known")
    public, role, layers = entry.get("public"), entry.get("role"), entry.get("layers", [])
    if not isinstance(public, str):
        raise _bad(file, f"has no public key for {name}")
    check_key(public, f"public key of {name}", file)
    if role not in ROLES:
        raise _bad(file, f"has role {role!r:.80} for {name}; it must be one of {', '.join(ROLES)}")
    if not isinstance(layers, list):
        raise _bad(file, f"has no list as the layers of {name}")
    try:
        return public, Rights(role, name, checked_layers(role, layers))
    except BadValue as fault:
        raise _bad(file, f"is wrong about {name}: {fault.text}") from None


def checked_layers(role: str, layers: Iterable[object]) -> tuple[str, ...]:
    """Return patterns of layers, or raise BadValue for one that is none or means nothing."""
    checked = tuple(layers)
    for pattern in checked:
        if not isinstance(pattern, str) or not _PATTERN.fullmatch(pattern):
            text = f"{pattern!r:.80} is no name of a layer, nor the beginning of one and *"
            raise BadValue(text, {"field": "layers"})
    if checked and role not in ("source", "driver"):
        # An operator with layers would look narrower than it is.
        raise BadValue(f"layers mean nothing for the role {role}", {"field": "layers"})
    if len(checked) > patterns_max:
        raise BadValue(f"{len(checked)} layers, the most are {patterns_max}", {"field": "layers"})
    return tuple(str(pattern) for pattern in checked)


def save_allowed(allowed: Allowed, file: Path) -> None:
    """Write the list, whole or not at all; OSError if that cannot be done."""
    parts = [_HEAD]
    for public, rights in allowed.items():
        lines = [f'["{rights.name}"]', f'role = "{rights.role}"', f'public = "{public}"']
        if rights.layers:
            lines.append("layers = [" + ", ".join(f'"{each}"' for each in rights.layers) + "]")
        parts.append("\n".join([*lines, ""]))
    write_private(file, "\n".join(parts), replaces=True)


def _bad(file: Path, text: str) -> BadValue:
    return BadValue(f"{file} {text}", {"field": "allowed", "value": str(file)})
