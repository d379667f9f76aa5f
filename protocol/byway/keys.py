"""
CURVE keys in files that nobody else can read.

A client's file has all that it needs: its own pair, and the public key of the daemon, so that it
cannot be talked into taking another for it. The daemon's file has its own pair alone. Both are
TOML, mode 0600. A file that others can read is refused: its secret is one no longer.
"""

import os
import stat
import tomllib
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final, TypeAlias

import zmq
from zmq.utils import z85

from byway.errors import BadValue
from byway.obstacles import is_id

#: Characters of a key as text: 32 bytes in Z85.
key_chars: Final = 40

#: No file of ours comes near; more is none of ours.
file_bytes_max: Final = 1024 * 1024

_CAUTION: Final = "Secret: whoever can read this file is taken for its owner."


@dataclass(frozen=True, slots=True)
class Keys:
    """
    Who somebody is.

    Attributes:
        name: For logs and lists.
        public: The public half, Z85.
        secret: The other.
        daemon: The public key of the daemon that a client talks to; empty in the daemon's own.
    """

    name: str
    public: str
    secret: str = field(repr=False)
    daemon: str = ""


#: What a client takes: keys, or the file that they are in.
KeysFrom: TypeAlias = Keys | str | os.PathLike[str]


def client_keys(keys: KeysFrom) -> Keys:
    """
    Return the keys that a client is to use.

    Raises:
        BadValue: As `load_keys`; or they do not say which daemon is meant.
    """
    found = keys if isinstance(keys, Keys) else load_keys(keys)
    if not found.daemon:
        raise BadValue(
            f"the key of {found.name} does not say which daemon it is for: it is a daemon's own",
            {"field": "keys"},
        )
    return found


def new_keys(name: str, daemon: str = "") -> Keys:
    """
    Return a new pair.

    Args:
        name: Of the owner.
        daemon: The public key of the daemon that it shall talk to.

    Raises:
        BadValue: The name is none, or the daemon's key is none.
    """
    if not is_id(name):
        raise BadValue(f"{name!r:.80} is no name for a key", {"field": "name"})
    if daemon:
        check_key(daemon, "daemon")
    public, secret = zmq.curve_keypair()
    return Keys(name, public.decode(), secret.decode(), daemon)


def load_keys(file: str | os.PathLike[str]) -> Keys:
    """
    Return the keys in a file.

    Raises:
        BadValue: It cannot be read, is no key file, or others can read or change it.
    """
    path = Path(file)
    try:
        told = tomllib.loads(read_guarded(path, is_secret=True))
        pair = _section(told, "key")
        daemon = _section(told, "daemon") if "daemon" in told else {"public": ""}
        keys = Keys(
            _text(pair, "name"),
            _text(pair, "public"),
            _text(pair, "secret"),
            _text(daemon, "public"),
        )
    except (tomllib.TOMLDecodeError, KeyError, TypeError) as fault:
        raise _bad(path, f"is no key file: {fault}") from None
    for what, key in (("public", keys.public), ("secret", keys.secret), ("daemon", keys.daemon)):
        if key or what != "daemon":
            check_key(key, what, path)
    if zmq.curve_public(keys.secret.encode()).decode() != keys.public:
        raise _bad(path, "has a public and a secret key that do not belong together")
    return keys


def save_keys(keys: Keys, file: str | os.PathLike[str]) -> None:
    """
    Write keys into a new file that its owner alone can read.

    Raises:
        OSError: It exists already, or cannot be written.
    """
    lines = [
        f"# A key for Byway: {keys.name}. {_CAUTION}",
        "[key]",
        f'name = "{keys.name}"',
        f'public = "{keys.public}"',
        f'secret = "{keys.secret}"',
    ]
    if keys.daemon:
        lines += ["[daemon]", f'public = "{keys.daemon}"']
    write_private(Path(file), "\n".join([*lines, ""]))


def check_key(key: str, field: str, path: Path | None = None) -> None:
    """Raise BadValue if a text is no CURVE key."""
    try:
        # Others fail on their way through the decoder, or come out with another length.
        is_key = len(key) == key_chars and len(z85.decode(key.encode())) == 32
    except (ValueError, KeyError):
        is_key = False
    if not is_key:
        # Not the text itself: it may be a secret that was mistyped.
        text = f"the {field} key is not {key_chars} characters of Z85"
        if path is not None:
            raise _bad(path, f"is no key file: {text}")
        raise BadValue(text, {"field": field})


def read_guarded(path: Path, *, is_secret: bool) -> str:
    """
    Return the text of a file that nobody else can have changed, nor read if it is secret.

    It must be ours or root's. One of root's may be readable by a group, for that is how a service
    manager hands a secret to a service that is not root; its group is then trusted with it.

    Raises:
        BadValue: Whatever is wrong with it.
    """
    try:
        # What was checked must be what is read: the file may be another a moment later.
        descriptor = os.open(path, os.O_RDONLY | os.O_CLOEXEC | os.O_NONBLOCK)
    except OSError as fault:
        raise _bad(path, f"cannot be read: {fault.strerror}") from None
    try:
        _check_guarded(path, os.fstat(descriptor), is_secret=is_secret)
        with open(descriptor, "rb", closefd=False) as opened:
            return opened.read(file_bytes_max).decode()
    except (OSError, UnicodeDecodeError):
        raise _bad(path, "cannot be read as text") from None
    finally:
        os.close(descriptor)


def _check_guarded(path: Path, facts: os.stat_result, *, is_secret: bool) -> None:
    if not stat.S_ISREG(facts.st_mode):
        raise _bad(path, "is not a file")
    me = os.geteuid()
    if facts.st_uid not in (me, 0):
        raise _bad(path, f"belongs to user {facts.st_uid}, who could change it; chown it")
    mode = stat.S_IMODE(facts.st_mode)
    if mode & 0o022:
        raise _bad(path, f"can be changed by others (mode {mode:04o}); chmod 600 it")
    shared = 0o077 if facts.st_uid == me else 0o007
    if is_secret and mode & shared:
        text = f"can be read by others (mode {mode:04o}), so its key is no secret any more"
        raise _bad(path, f"{text}; make a new one, and keep it at mode 0600")


def make_private_folder(folder: Path) -> None:
    """
    Make a folder that its owner alone can enter, or be sure that it is one.

    Raises:
        BadValue: It is somebody else's, or others may enter it.
        OSError: It cannot be made.
    """
    folder.mkdir(mode=0o700, parents=True, exist_ok=True)
    facts = folder.stat()
    if not stat.S_ISDIR(facts.st_mode) or facts.st_uid != os.geteuid() or facts.st_mode & 0o077:
        mode = stat.S_IMODE(facts.st_mode)
        raise _bad(folder, f"is not a folder of this user alone (mode {mode:04o}); chmod 700 it")


def write_private(path: Path, text: str, *, replaces: bool = False) -> None:
    """
    Write a file of mode 0600, whole or not at all; OSError if that fails.

    Args:
        replaces: Whether there may be one already.
    """
    written = path.with_name(f".{path.name}.{os.getpid()}") if replaces else path
    descriptor = os.open(written, os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, 0o600)
    try:
        with open(descriptor, "w") as opened:
            opened.write(text)
            opened.flush()
            os.fsync(descriptor)
        if replaces:
            written.replace(path)
    except BaseException:
        written.unlink(missing_ok=True)
        raise


def _section(told: dict[str, Any], name: str) -> dict[str, Any]:
    section = told[name]
    if not isinstance(section, dict):
        raise TypeError(f"{name} is no section")
    return section


def _text(section: dict[str, Any], name: str) -> str:
    text = section[name]
    if not isinstance(text, str):
        raise TypeError(f"{name} is no text")
    return text


def _bad(path: Path, text: str) -> BadValue:
    return BadValue(f"{path} {text}", {"field": "keys", "value": str(path)})
