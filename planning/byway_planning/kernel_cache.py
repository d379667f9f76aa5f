"""
Where compiled kernels are kept between runs, and when they are out of date.

numba looks only at the file of the function itself when it decides whether a cached kernel
still fits; a change in a called function of another file goes unnoticed. Here the stamp of a
kernel covers its own module and every module of this package that it imports, however far
away, so an edit rebuilds what it touches and nothing else. Entries are found by module name,
not by path: a cache that was warmed while an image was built still fits after a copy.

The folder is the first of these that can be written: `BYWAY_CACHE_DIR`, `CACHE_DIRECTORY`
(set by service managers), the user's cache folder, a private folder in the temporary folder.
Cache entries are pickles, so the folder must belong to the user and be closed to others.
"""

import ast
import functools
import hashlib
import os
import shutil
import tempfile
from collections.abc import Callable, Iterator
from importlib import metadata
from importlib.util import find_spec, resolve_name
from pathlib import Path
from typing import Any

from numba.core.caching import _CacheLocator

PACKAGE = "byway_planning"


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
        root = folder / f"kernels-numba{metadata.version('numba')}"
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
            shutil.rmtree(root / name, ignore_errors=True)


class ClosureLocator(_CacheLocator):  # type: ignore[misc]
    """numba's question "where, and is it fresh?", answered as the module text says."""

    def __init__(self, module: str, line: int, root: Path) -> None:
        self._module, self._line = module, line
        self._path = str(root / module)

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
        locator = cls(function.__module__, function.__code__.co_firstlineno, root)
        try:
            locator.ensure_cache_path()
        except OSError:
            return None
        return locator
