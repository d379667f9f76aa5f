"""
How every kernel is compiled.

Two kinds. An *entry* (`@kernel("signature")`) is called from Python: it has one explicit
signature, `warm()` compiles it, and after that no other signature is accepted, so no request
ever waits for the compiler. An *inner* kernel (`@kernel()`) is called by other kernels only
and is compiled with them. Importing compiles nothing.

Kernels release the interpreter lock, check nothing, and hold no state: all of it, the random
state included, lives in arrays that the caller owns. fastmath stays off, because inf means
"nothing found yet" here and because answers must not change between builds.

Signatures are written as text: `f8 i8 b1 u8` scalars, `f8[::1]` `f4[:, ::1]` contiguous arrays,
an `r` in front for arrays that are only read (`rf8[::1]`; shared tiles are mapped read-only),
and a `NamedTuple` class whose fields carry such texts (see `numba_type`).
"""

import contextlib
import logging
from collections.abc import Callable, Iterator
from typing import Any, Final, TypeVar

import numba
from numba import types
from numba.core.caching import NullCache

from byway_planning import kernel_cache

F = TypeVar("F", bound=Callable[..., Any])
Part = str | type

log = logging.getLogger("byway_planning")

_SCALARS: Final[dict[str, Any]] = {
    "b1": types.boolean,
    "u1": types.uint8,
    "i1": types.int8,
    "i4": types.int32,
    "i8": types.int64,
    "u8": types.uint64,
    "f4": types.float32,
    "f8": types.float64,
}
_NAMED: dict[type, Any] = {}
_ENTRIES: dict[str, tuple[Any, Any]] = {}
_DISPATCHERS: list[Any] = []
_WARM: set[str] = set()
_REHEARSALS: list[Callable[[], None]] = []


def numba_type(part: Part) -> Any:
    """
    Return the numba type for a text of the module's notation, or for a NamedTuple class.

    A NamedTuple class names the types of its fields in `kernel_types`, registered with
    `describe(cls, ...)`.
    """
    if not isinstance(part, str):
        return _NAMED[part]
    text = part.strip()
    read_only = text.startswith("r")
    scalar, bracket, shape = text.removeprefix("r").partition("[")
    if not bracket:
        return _SCALARS[scalar]
    return types.Array(
        _SCALARS[scalar], shape.count(":") - shape.count("::"), "C", readonly=read_only
    )


def describe(cls: type, *fields: Part) -> None:
    """Declare the numba types of the fields of a NamedTuple class, in their order."""
    # from_types, because numba knows a tuple whose fields are all alike as another type
    _NAMED[cls] = types.BaseTuple.from_types([numba_type(part) for part in fields], cls)


def kernel(*signature: Part, allocates: bool = False) -> Callable[[F], F]:
    """
    Compile a function of plain arrays and numbers; see the module text.

    Args:
        signature: One text or NamedTuple class per argument for an entry, nothing for an
            inner kernel. The return type is inferred.
        allocates: Whether the function makes arrays of its own. Without, no reference is
            counted: with it, every call counts one for each array of each tuple argument, which
            took longer than the work itself in the collision tests (300 instead of 100 ns).
    """

    def decorate(function: F) -> F:
        dispatcher = _dispatcher(function, allocates)
        _DISPATCHERS.append(dispatcher)
        if signature:
            name = f"{function.__module__}.{function.__qualname__}"
            _ENTRIES[name] = (dispatcher, tuple(numba_type(part) for part in signature))
        return dispatcher  # type: ignore[no-any-return]

    return decorate


def _dispatcher(function: Callable[..., Any], allocates: bool) -> Any:
    # Every option is written out: a new numba release must not change our answers.
    options: dict[str, Any] = {
        "nogil": True,
        "fastmath": False,
        "parallel": False,
        "error_model": "numpy",
        "boundscheck": False,
        "_nrt": allocates,
    }
    with _our_cache():
        try:
            return numba.njit(cache=True, **options)(function)
        except RuntimeError:  # nowhere to write: still works, every start compiles
            return numba.njit(cache=False, **options)(function)


@contextlib.contextmanager
def _our_cache() -> Iterator[None]:
    before = numba.config.CACHE_LOCATOR_CLASSES
    numba.config.CACHE_LOCATOR_CLASSES = "byway_planning.kernel_cache.ClosureLocator"
    try:
        yield
    finally:
        numba.config.CACHE_LOCATOR_CLASSES = before


def entries() -> dict[str, Any]:
    """Return every entry kernel by its full name."""
    return {name: dispatcher for name, (dispatcher, _) in _ENTRIES.items()}


def is_warm() -> bool:
    """Tell whether every entry that has been imported is compiled."""
    return len(_WARM) == len(_ENTRIES)


def warm(progress: Callable[[int, int, str], None] | None = None) -> None:
    """
    Compile every entry kernel, or load it from the cache, and forbid other signatures.

    Args:
        progress: Called before each kernel with (done, total, name).

    A cache entry that cannot be read (a torn file) is thrown away and built again; where none can
    be written any more (a full disk), kernels are built and not kept.
    """
    for done, (name, (dispatcher, signature)) in enumerate(list(_ENTRIES.items())):
        if name in _WARM:
            continue
        if progress is not None:
            progress(done, len(_ENTRIES), name)
        try:
            dispatcher.compile(signature)
        except Exception as fault:  # what a pickle of nonsense raises is anybody's guess
            log.warning("building %s without its cache, which gave %r", name, fault)
            kernel_cache.forget(dispatcher.py_func.__module__)
            _compile_anyhow(name, dispatcher, signature)
        dispatcher.disable_compile()
        _WARM.add(name)

    while _REHEARSALS:
        _REHEARSALS.pop(0)()


def _compile_anyhow(name: str, dispatcher: Any, signature: Any) -> None:
    try:
        dispatcher.compile(signature)
    except OSError as fault:
        # It cannot be kept (a full disk, a folder that has become read-only), which is no reason
        # to do without it. Those that it calls would meet the same.
        log.warning("keeping no kernels any more: %s gave %r", name, fault)
        for each in _DISPATCHERS:
            each._cache = NullCache()
        dispatcher.compile(signature)


def rehearsal(function: Callable[[], None]) -> Callable[[], None]:
    """Have a function called once, when all kernels are compiled and before anything is planned."""
    _REHEARSALS.append(function)
    return function


def ensure_warm() -> None:
    """For scripts that did not call `warm()`: do it now and say so once."""
    if not is_warm():
        log.warning(
            "compiling the planning kernels; call byway_planning.warm() ahead to avoid this"
        )
        warm()
