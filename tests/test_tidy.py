"""
The house rules that a program can check, and for each a test that shows it firing.

A rule looks at one file and yields (line, what is wrong and what to do instead). Whatever a
reviewer has had to say twice belongs here.
"""

import ast
import re
import subprocess
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
PRODUCT = ("protocol/byway/", "planning/byway_planning/", "daemon/bywayd/")
PURE = ("planning/byway_planning/", "daemon/bywayd/core/")
#: Where people read what is printed; everywhere else it would go past the log.
PRINTS = ("daemon/bywayd/commands/", "daemon/bywayd/yard/", "daemon/bywayd/bench/")

FILE_LINES_MAX = 500
FUNCTION_LINES_MAX = 70

Found = Iterator[tuple[int, str]]


def file_length(path: str, source: str, tree: ast.Module) -> Found:
    lines = source.count("\n")
    if lines > FILE_LINES_MAX:
        yield lines, f"{lines} lines, {FILE_LINES_MAX} at most: split it along what it does"


def function_length(path: str, source: str, tree: ast.Module) -> Found:
    """A function fits a screen; its docstring does not count."""
    for node in ast.walk(tree):
        if not isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
            continue
        first = node.body[0]
        told = ast.get_docstring(node) is not None
        told_lines = (first.end_lineno or first.lineno) - first.lineno + 1 if told else 0
        lines = (node.end_lineno or node.lineno) - node.lineno + 1 - told_lines
        if lines > FUNCTION_LINES_MAX:
            yield node.lineno, f"{node.name} has {lines} lines, {FUNCTION_LINES_MAX} at most"


CLOCK = "take the time as an argument"
DICE = "take a seed or a random state as an argument"
IO = "no I/O here: return what is to be done"
BANNED_WHEN_PURE = {
    f"{module}.{name}": instead
    for module, names, instead in (
        ("time", "time time_ns monotonic monotonic_ns perf_counter perf_counter_ns sleep", CLOCK),
        ("datetime.datetime", "now utcnow today", CLOCK),
        ("random", "random randint choice shuffle seed", DICE),
        ("numpy.random", "rand randn random randint seed shuffle choice", DICE),
        ("os", "open fork system remove getenv", IO),
    )
    for name in names.split()
} | dict.fromkeys(("open", "print", "input", "exec", "eval"), IO)
BANNED_IN_PRODUCT = {
    "time.time": "wall time jumps; use a monotonic clock",
    "os.system": "name the program and its arguments, without a shell",
    "eval": "parse it",
    "exec": "import it",
    "breakpoint": "take it out again",
}
#: Files whose task is the exception, and what they may call.
MAY_CALL = {
    "planning/byway_planning/countdown.py": {"time.perf_counter"},
}


def dotted(node: ast.expr) -> str:
    """`a.b.c` for names and attributes, an empty text for anything else."""
    parts: list[str] = []
    while isinstance(node, ast.Attribute):
        parts.append(node.attr)
        node = node.value
    return ".".join(reversed([*parts, node.id])) if isinstance(node, ast.Name) else ""


def full_names(tree: ast.Module) -> dict[str, str]:
    """What a name brought in by `from module import name` or `as` stands for."""
    names: dict[str, str] = {}
    for node in ast.walk(tree):
        if isinstance(node, ast.ImportFrom) and node.module:
            names |= {a.asname or a.name: f"{node.module}.{a.name}" for a in node.names}
        elif isinstance(node, ast.Import):
            names |= {a.asname: a.name for a in node.names if a.asname}
    return names


def banned_calls(path: str, source: str, tree: ast.Module) -> Found:
    banned: dict[str, str] = {}
    if path.startswith(PRODUCT):
        banned |= BANNED_IN_PRODUCT
        if not path.startswith(PRINTS):
            banned["print"] = "log it, or let a command print it"
    if path.startswith(PURE):
        banned |= BANNED_WHEN_PURE
    names = full_names(tree)
    for node in ast.walk(tree):
        if not isinstance(node, ast.Call):
            continue
        called = dotted(node.func)
        head, dot, rest = called.partition(".")
        called = names.get(head, head) + dot + rest
        if called in banned and called not in MAY_CALL.get(path, ()):
            yield node.lineno, f"{called} is banned here: {banned[called]}"


def kernels_through_the_door(path: str, source: str, tree: ast.Module) -> Found:
    """One place decides how kernels are compiled."""
    if not path.startswith(PRODUCT) or path == "planning/byway_planning/kernel.py":
        return
    compilers = {"jit", "njit", "cfunc", "vectorize", "guvectorize", "stencil", "generated_jit"}
    for node in ast.walk(tree):
        named: set[str] = set()
        if isinstance(node, ast.ImportFrom) and (node.module or "").startswith("numba"):
            named = {alias.name for alias in node.names} & compilers
        elif isinstance(node, ast.Attribute) and dotted(node).startswith("numba."):
            named = {node.attr} & compilers
        for name in sorted(named):
            yield node.lineno, f"numba.{name} goes round byway_planning.kernel"


def no_reordered_arithmetic(path: str, source: str, tree: ast.Module) -> Found:
    """Answers must not change between builds, and inf means "nothing found yet"."""
    for node in ast.walk(tree):
        if isinstance(node, ast.keyword) and node.arg in ("fastmath", "parallel"):
            off = isinstance(node.value, ast.Constant) and node.value.value is False
            if not off:
                yield node.value.lineno, f"{node.arg} stays off in kernels"


def rules_that_stay_on(path: str, source: str, tree: ast.Module) -> Found:
    if path.startswith(PRODUCT):
        for node in ast.walk(tree):
            if isinstance(node, ast.Assert):
                yield node.lineno, "assert vanishes under -O: raise, or use invariant()"


def numbered_todos(path: str, source: str, tree: ast.Module) -> Found:
    for number, line in enumerate(source.splitlines(), start=1):
        if re.search(r"\b(TODO|FIXME|XXX)\b(?!\(#\d+\))", line) and path != "tests/test_tidy.py":
            yield number, "a TODO names its issue: TODO(#12)"


PYTHON_RULES: tuple[Callable[[str, str, ast.Module], Found], ...] = (
    file_length,
    function_length,
    banned_calls,
    kernels_through_the_door,
    no_reordered_arithmetic,
    rules_that_stay_on,
    numbered_todos,
)

# Put together from parts, so that this file does not break its own rule.
MACHINE_PATHS = re.compile(
    "|".join(
        (
            r"(?<![\w.])/(?:home|Users)/\w+",
            r"(?<![\w.])/" + "root" + r"\b",
            r"(?<![\w.])/" + "work" + r"/",
            r"\.\./" + "shared" + r"\b",
        )
    )
)
#: The build machine's own script may look for a folder beside the repository, on one line.
MAY_NAME_ONE_PATH = ".ci/run"


def machine_paths(path: str, source: str) -> Found:
    hits = [n for n, line in enumerate(source.splitlines(), 1) if MACHINE_PATHS.search(line)]
    allowed = 1 if path == MAY_NAME_ONE_PATH else 0
    for number in hits[allowed:]:
        yield number, "names a place that only one machine has"


def faults(path: str, source: str) -> list[str]:
    """Everything wrong with one file, as `path:line: what`."""
    found = list(machine_paths(path, source))
    if path.endswith(".py"):
        tree = ast.parse(source)
        for rule in PYTHON_RULES:
            found.extend(rule(path, source, tree))
    return [f"{path}:{line}: {text}" for line, text in sorted(found)]


def repository_files() -> list[Path]:
    """Everything that is, or would be, committed."""
    listed = subprocess.run(
        ["git", "ls-files", "--cached", "--others", "--exclude-standard"],
        cwd=ROOT, capture_output=True, text=True, check=True,
    ).stdout.splitlines()  # fmt: skip
    return [ROOT / name for name in listed if (ROOT / name).is_file()]


def texts(paths: list[Path]) -> Iterator[tuple[str, str]]:
    for path in paths:
        data = path.read_bytes()
        if b"\0" not in data[:8192]:
            yield path.relative_to(ROOT).as_posix(), data.decode(errors="replace")


def test_the_tree_is_tidy() -> None:
    paths = repository_files()
    assert sum(path.suffix == ".py" for path in paths) > 20, "found too few files to mean anything"
    found = [fault for path, source in texts(paths) for fault in faults(path, source)]
    assert not found, "\n" + "\n".join(found)


def only(path: str, source: str) -> str:
    """The one fault of a file that has exactly one."""
    (found,) = faults(path, source)
    return found


PLANNING = "planning/byway_planning/x.py"
CORE = "daemon/bywayd/core/x.py"
RUNTIME = "daemon/bywayd/runtime/x.py"


def test_a_tidy_file_has_no_fault() -> None:
    assert faults(PLANNING, '"""Text."""\n\n\ndef f(x: float) -> float:\n    return x\n') == []


def test_a_long_file_is_found() -> None:
    assert "501 lines" in only(PLANNING, "x = 1\n" * 501)
    assert faults(PLANNING, "x = 1\n" * 500) == []


def test_a_long_function_is_found_and_its_docstring_does_not_count() -> None:
    line = "    x = 1\n"
    assert "f has 71 lines" in only("tests/x.py", "def f():\n" + line * 70)
    told = '    """\n' + "    word\n" * 50 + '    """\n'
    assert faults("tests/x.py", "def f():\n" + told + line * 69) == []


@pytest.mark.parametrize(
    ("path", "source", "named"),
    [
        (PLANNING, "import time\nt = time.monotonic()\n", "time.monotonic"),
        (PLANNING, "from time import perf_counter\nt = perf_counter()\n", "time.perf_counter"),
        (PLANNING, "import numpy as np\nx = np.random.rand(3)\n", "numpy.random.rand"),
        (PLANNING, "print(1)\n", "print"),
        (CORE, "import datetime as d\nt = d.datetime.now()\n", "datetime.datetime.now"),
        (CORE, "f = open('x')\n", "open"),
        (RUNTIME, "print(1)\n", "print"),
        (RUNTIME, "import time\nt = time.time()\n", "time.time"),
        (RUNTIME, "breakpoint()\n", "breakpoint"),
    ],
)
def test_a_banned_call_is_found(path: str, source: str, named: str) -> None:
    assert f": {named} is banned here" in only(path, source)


def test_exceptions_to_banned_calls_are_as_wide_as_they_say() -> None:
    read = "import time\nt = time.perf_counter()\n"
    assert faults("planning/byway_planning/countdown.py", read) == []
    assert faults(RUNTIME, read) == []
    assert only("planning/byway_planning/countdown.py", "import time\ntime.sleep(1)\n")
    assert faults("daemon/bywayd/commands/x.py", "print(1)\n") == []


@pytest.mark.parametrize(
    "source",
    [
        "import numba\n@numba.njit\ndef f(): ...\n",
        "import numba\n@numba.njit(cache=True)\ndef f(): ...\n",
        "from numba import njit\n",
        "from numba.core.decorators import cfunc\n",
    ],
)
def test_a_kernel_that_goes_round_the_decorator_is_found(source: str) -> None:
    assert "goes round byway_planning.kernel" in only(PLANNING, source)
    assert faults("planning/byway_planning/kernel.py", source) == []


def test_reordered_arithmetic_is_found() -> None:
    assert "fastmath stays off" in only(PLANNING, "f = dict(fastmath=True)\n")
    assert "parallel stays off" in only(PLANNING, "f = dict(parallel=ON)\n")
    assert faults(PLANNING, "f = dict(fastmath=False)\n") == []


def test_an_assert_in_the_product_is_found() -> None:
    assert "vanishes under -O" in only(CORE, "assert 1\n")
    assert faults("tests/x.py", "assert 1\n") == []


@pytest.mark.parametrize("word", ["TODO", "FIXME", "XXX"])
def test_a_todo_without_number_is_found(word: str) -> None:
    assert "names its issue" in only(RUNTIME, f"x = 1  # {word}: later\n")
    assert faults(RUNTIME, f"x = 1  # {word}(#12): later\n") == []


@pytest.mark.parametrize("place", ["home/me", "root", "work/x"])
def test_a_path_of_one_machine_is_found(place: str) -> None:
    assert "only one machine has" in only("README.md", f"see `/{place}`\n")
    assert faults("README.md", f"see `https://example.org/{place}` and network/{place}\n") == []


def test_the_build_script_may_name_one_place_beside_the_repository() -> None:
    line = "X=../" + "shared\n"
    assert faults(".ci/run", line) == []
    assert len(faults(".ci/run", line * 2)) == 1
    assert len(faults("deploy/check.sh", line)) == 1
