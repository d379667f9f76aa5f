"""
Where compiled kernels are kept between runs, and when they are out of date.

numba looks only at the file of the function itself when it decides whether a cached kernel
still fits; a change in a called function of another file goes unnoticed. Here the stamp of a
kernel covers its own module and every module of this package that it imports, however far
away, so an edit rebuilds what it touches and nothing else. Entries are found by module name and
stamp, not by path: a cache that was warmed while an image was built still fits after a copy, and
two versions do not overwrite each other's.

The folder is the first of these that can be written: `BYWAY_CACHE_DIR`, `CACHE_DIRECTORY`
(set by service managers), the user's cache folder, a private folder in the temporary folder.
Cache entries are pickles, so the folder must belong to the user and be closed to others.

`BYWAY_WARM_DIR` may name another one, such as an image brings along on a file system that cannot
be written: what it has is copied when it is missed. numba has to write beside what it reads (it
probes for that, and keeps there what it builds for a CPU that the image does not know), so the
folder that can be written is the one that is used.
"""

import ast
import contextlib
import functools
import hashlib
import os
import shutil
import tempfile
from collections.abc import Callable, Iterator
from importlib import metadata
from importlib.util import find_spec, resolve_name
from pathlib import Path
from typing import Any, Final

from numba.core.caching import _CacheLocator

PACKAGE = "byway_planning"
#: Of each module; a developer goes back and forth between some.
VERSIONS_KEPT: Final = 4

_NAME: Final = f"kernels-numba{metadata.version('numba')}"


def _candidates() -> Iterator[Path]:
    for variable in ("BYWAY_CACHE_DIR", "CACHE_DIRECTORY"):
        if os.environ.get(variable):
            yield Path(os.environ[variable])
    home_cache = os.environ.get("XDG_CACHE_HOME") or os.path.join(os.path.expanduser("~"), ".cache")
    yield Path(home_cache) / "byway"
    yield Path(tempfile.gettempdir()) / f"byway-{os.getuid()}"


@functools.cache
def cache_root() -> Path | None:
    """Return the first folder that is ours and can be written, or None."""
    for folder in _candidates():
        root = folder / _NAME
        try:
            root.mkdir(parents=True, exist_ok=True, mode=0o700)
            if root.stat().st_uid != os.getuid() or root.stat().st_mode & 0o022:
                continue  # somebody else could plant a pickle there
            tempfile.TemporaryFile(dir=root).close()
        except OSError:
            continue
        return root
    return None


@functools.cache
def _imports_of(module: str) -> tuple[str, tuple[str, ...]]:
    """Digest of a module's source, and the modules of this package that it imports."""
    spec = find_spec(module)
    if spec is None or spec.origin is None:
        return "", ()
    source = Path(spec.origin).read_bytes()
    found: set[str] = set()
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            base = "." * node.level + (node.module or "")
            base = resolve_name(base, spec.parent) if node.level else base
            found.add(base)
            found |= {f"{base}.{alias.name}" for alias in node.names}
    ours = sorted(name for name in found if name.startswith(PACKAGE + ".") and _is_module(name))
    return hashlib.sha256(source).hexdigest(), tuple(ours)


def _is_module(name: str) -> bool:
    try:
        return find_spec(name) is not None
    except ModuleNotFoundError:
        return False


def closure_of(module: str) -> dict[str, str]:
    """Return a module and all it imports from this package, directly or not, with digests."""
    seen: dict[str, str] = {}
    waiting = [module]
    while waiting:
        name = waiting.pop()
        if name not in seen:
            seen[name], imports = _imports_of(name)
            waiting.extend(imports)
    return seen


@functools.cache
def stamp_of(module: str) -> str:
    """Digest of a module and of all it imports from this package."""
    text = "".join(f"{name}={digest};" for name, digest in sorted(closure_of(module).items()))
    return hashlib.sha256(text.encode()).hexdigest()


def forget(module: str) -> None:
    """Throw away what is kept of the kernels of a module and of all it calls."""
    root = cache_root()
    if root is not None:
        for name in closure_of(module):
            folder = root / _folder_of(name)
            shutil.rmtree(folder, ignore_errors=True)
            # So that it is not copied again: it was the same that has just failed.
            with contextlib.suppress(OSError):
                folder.mkdir(mode=0o700, exist_ok=True)


def _folder_of(module: str) -> str:
    return f"{module}-{stamp_of(module)[:16]}"


def _warm_root() -> Path | None:
    """Return the folder that an image has brought along, if nobody else could have changed it."""
    told = os.environ.get("BYWAY_WARM_DIR")
    if not told:
        return None
    root = Path(told) / _NAME
    try:
        facts = root.stat()
    except OSError:
        return None
    is_safe = facts.st_uid in (0, os.getuid()) and not facts.st_mode & 0o022
    return root if is_safe else None


def _prepare(module: str, root: Path) -> Path:
    """Return the folder for the kernels of a module as it is now, with what is there already."""
    folder = root / _folder_of(module)
    if folder.is_dir():
        return folder
    warm = _warm_root()
    made = Path(tempfile.mkdtemp(prefix=".making-", dir=root))
    try:
        if warm is not None and (warm / folder.name).is_dir():
            # Contents alone: what is brought along may be for reading only.
            for entry in (warm / folder.name).iterdir():
                shutil.copyfile(entry, made / entry.name)
        made.rename(folder)
    except OSError:
        # Somebody else was quicker, the disk is full, or a file cannot be read: do without.
        shutil.rmtree(made, ignore_errors=True)
        folder.mkdir(mode=0o700, exist_ok=True)
    _prune(module, root)
    return folder


def _prune(module: str, root: Path) -> None:
    """Throw away what is left of old versions of a module."""

    def age(folder: Path) -> float:
        try:
            return -folder.stat().st_mtime
        except OSError:
            return 0.0

    for folder in sorted(root.glob(f"{module}-*"), key=age)[VERSIONS_KEPT:]:
        shutil.rmtree(folder, ignore_errors=True)


class ClosureLocator(_CacheLocator):  # type: ignore[misc]
    """numba's question "where, and is it fresh?", answered as the module text says."""

    def __init__(self, module: str, line: int, root: Path) -> None:
        self._module, self._line = module, line
        self._path = str(_prepare(module, root))

    def get_cache_path(self) -> str:
        return self._path

    def get_source_stamp(self) -> str:
        return stamp_of(self._module)

    def get_disambiguator(self) -> str:
        return str(self._line)

    @classmethod
    def from_function(cls, function: Callable[..., Any], _file: str) -> "ClosureLocator | None":
        root = cache_root()
        if root is None:
            return None
        try:
            locator = cls(function.__module__, function.__code__.co_firstlineno, root)
            locator.ensure_cache_path()
        except OSError:
            return None
        return locator
