"""Compiled kernels on disk: found again, rebuilt when stale or broken, done without if need be."""

import errno
import importlib
import logging
import os
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from types import ModuleType
from typing import Any

import numba
import pytest
from numba.core import caching

from byway_planning import kernel, kernel_cache

INNER = """
from byway_planning.kernel import kernel

@kernel()
def inner(x):
    return 2.0 * x
"""
OUTER = """
from byway_planning.kernel import kernel
from cached_room.inner import inner

@kernel("f8")
def entry(x):
    return inner(x) + 1.0
"""

Start = Callable[[], Any]


@pytest.fixture
def start(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Start]:
    """Import two modules with kernels as a new process would, warm up, return the entry."""
    room = tmp_path / "cached_room"
    room.mkdir()
    (room / "__init__.py").write_text("")
    (room / "inner.py").write_text(INNER)
    (room / "outer.py").write_text(OUTER)
    monkeypatch.syspath_prepend(tmp_path)
    root = tmp_path / "cache"
    root.mkdir(mode=0o700)
    monkeypatch.setattr(kernel_cache, "cache_root", lambda: root)
    monkeypatch.setattr(kernel_cache, "PACKAGE", "cached_room")
    monkeypatch.setattr(kernel, "_REHEARSALS", [])

    def begin() -> Any:
        monkeypatch.setattr(kernel, "_ENTRIES", {})
        monkeypatch.setattr(kernel, "_WARM", set())
        forget_modules()
        module: ModuleType = importlib.import_module("cached_room.outer")
        kernel.warm()
        return module.entry

    yield begin
    forget_modules()


def forget_modules() -> None:
    for name in ("cached_room", "cached_room.inner", "cached_room.outer"):
        sys.modules.pop(name, None)
    importlib.invalidate_caches()
    kernel_cache.stamp_of.cache_clear()
    kernel_cache._imports_of.cache_clear()


def hits(entry: Any) -> int:
    return sum(entry.stats.cache_hits.values())


def test_a_second_start_finds_what_the_first_compiled(start: Start, tmp_path: Path) -> None:
    first = start()
    assert first(3.0) == 7.0
    assert hits(first) == 0
    second = start()
    assert second(3.0) == 7.0
    assert hits(second) == 1


def test_what_is_compiled_is_looked_up_by_module_not_by_place(start: Start, tmp_path: Path) -> None:
    """A cache made while an image was built still fits where the image runs."""
    start()
    elsewhere = tmp_path / "elsewhere"
    elsewhere.mkdir()
    (tmp_path / "cached_room").rename(elsewhere / "cached_room")
    sys.path.insert(0, str(elsewhere))
    try:
        assert hits(start()) == 1
    finally:
        sys.path.remove(str(elsewhere))


def test_a_change_in_the_called_module_is_noticed(start: Start, tmp_path: Path) -> None:
    """numba alone looks at the file of the function only, and would answer 7."""
    assert start()(3.0) == 7.0
    (tmp_path / "cached_room" / "inner.py").write_text(INNER.replace("2.0", "5.00"))
    changed = start()
    assert changed(3.0) == 16.0
    assert hits(changed) == 0
    assert hits(start()) == 1


DAMAGES: dict[str, Callable[[bytes], bytes]] = {
    "empty": lambda data: b"",
    "cut short": lambda data: data[: len(data) // 2],
    "garbage": lambda data: bytes(range(256)) * 8,
    "other pickle": lambda data: b"\x80\x04N.",
    "zeros": lambda data: bytes(len(data)),
}


@pytest.mark.parametrize("damage", DAMAGES)
@pytest.mark.parametrize("suffix", [".nbi", ".nbc"])
@pytest.mark.parametrize("module", ["cached_room.inner", "cached_room.outer"])
def test_a_broken_cache_is_thrown_away_and_built_again(
    start: Start, tmp_path: Path, caplog: pytest.LogCaptureFixture,
    module: str, suffix: str, damage: str,
) -> None:  # fmt: skip
    start()
    files = list(tmp_path.glob(f"cache/{module}-*/*{suffix}"))
    assert files
    for file in files:
        file.write_bytes(DAMAGES[damage](file.read_bytes()))
    with caplog.at_level(logging.WARNING):
        assert start()(3.0) == 7.0
    caplog.clear()
    with caplog.at_level(logging.WARNING):
        healed = start()
    assert healed(3.0) == 7.0
    assert hits(healed) == 1
    assert not caplog.records


@pytest.mark.parametrize("damage", DAMAGES)
def test_a_broken_cache_of_a_called_kernel_is_thrown_away_too(
    start: Start, tmp_path: Path, damage: str
) -> None:
    """It is read when the entry itself has to be compiled again."""
    start()
    for file in tmp_path.glob("cache/cached_room.outer-*/*"):
        file.unlink()
    for file in tmp_path.glob("cache/cached_room.inner-*/*"):
        file.write_bytes(DAMAGES[damage](file.read_bytes()))
    assert start()(3.0) == 7.0
    assert hits(start()) == 1


def test_a_kernel_that_does_not_compile_says_so(start: Start, tmp_path: Path) -> None:
    (tmp_path / "cached_room" / "inner.py").write_text(INNER.replace("2.0 * x", "x.no_such_thing"))
    with pytest.raises(numba.TypingError, match="no_such_thing"):
        start()


def test_without_a_folder_everything_works_uncached(
    start: Start, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(kernel_cache, "cache_root", lambda: None)
    for _ in range(2):
        entry = start()
        assert entry(3.0) == 7.0
        assert hits(entry) == 0


def test_warm_kernels_accept_no_other_arguments(start: Start) -> None:
    entry = start()
    assert kernel.is_warm()
    with pytest.raises(TypeError):
        entry(1j)
    assert len(entry.signatures) == 1


def test_a_stamp_covers_all_modules_reached_by_imports(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    room = tmp_path / "stamped"
    room.mkdir()
    (room / "__init__.py").write_text("")
    (room / "top.py").write_text("from stamped import middle\n")
    (room / "middle.py").write_text("import stamped.low\nfrom stamped.side import NUMBER\n")
    (room / "low.py").write_text("import stamped.top  # a circle\n")
    (room / "side.py").write_text("NUMBER = 1\n")
    (room / "apart.py").write_text("NUMBER = 1\n")
    monkeypatch.syspath_prepend(tmp_path)
    monkeypatch.setattr(kernel_cache, "PACKAGE", "stamped")

    def stamp() -> str:
        kernel_cache._imports_of.cache_clear()
        return kernel_cache.stamp_of.__wrapped__("stamped.top")

    try:
        seen = {stamp()}
        (room / "apart.py").write_text("NUMBER = 2\n")
        assert stamp() in seen
        for count, name in enumerate(("low", "side", "middle", "top"), start=2):
            with (room / f"{name}.py").open("a") as file:
                file.write("# changed\n")
            seen.add(stamp())
            assert len(seen) == count
    finally:
        kernel_cache._imports_of.cache_clear()
        sys.modules.pop("stamped", None)


def test_relative_imports_are_followed_too(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    room = tmp_path / "related"
    room.mkdir()
    (room / "__init__.py").write_text("")
    (room / "top.py").write_text("from . import low\nfrom .side import NUMBER\n")
    (room / "low.py").write_text("")
    (room / "side.py").write_text("NUMBER = 1\n")
    monkeypatch.syspath_prepend(tmp_path)
    monkeypatch.setattr(kernel_cache, "PACKAGE", "related")
    kernel_cache._imports_of.cache_clear()
    try:
        assert kernel_cache._imports_of("related.top")[1] == ("related.low", "related.side")
    finally:
        kernel_cache._imports_of.cache_clear()
        sys.modules.pop("related", None)


def test_a_folder_of_somebody_else_is_not_trusted(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Cache files are pickles: whoever writes them runs code here."""
    find = kernel_cache.cache_root.__wrapped__
    monkeypatch.setenv("BYWAY_CACHE_DIR", str(tmp_path / "first"))
    monkeypatch.setenv("CACHE_DIRECTORY", str(tmp_path / "second"))
    ours = find()
    assert ours is not None
    assert ours.parent == tmp_path / "first"
    me = os.getuid()
    monkeypatch.setattr(os, "getuid", lambda: me + 1)
    elsewhere = find()
    assert elsewhere is None or elsewhere.parent != tmp_path / "first"


@pytest.fixture
def image(start: Start, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """What an image brings along, with a cache folder that is empty as yet."""
    start()
    image = tmp_path / "image" / kernel_cache._NAME
    image.parent.mkdir()
    (tmp_path / "cache").rename(image)
    (tmp_path / "cache").mkdir(mode=0o700)
    monkeypatch.setenv("BYWAY_WARM_DIR", str(image.parent))
    return image


def contents(folder: Path) -> dict[str, bytes]:
    found = (file for file in folder.rglob("*") if file.is_file())
    return {str(file.relative_to(folder)): file.read_bytes() for file in found}


def test_what_an_image_brings_along_is_used_and_stays_as_it_is(
    start: Start, image: Path, tmp_path: Path
) -> None:
    before = contents(image)
    assert len(before) == 4  # index and code of two kernels
    for folder in (*image.iterdir(), image):
        folder.chmod(0o500)
    found = start()
    assert found(3.0) == 7.0
    assert hits(found) == 1
    assert contents(image) == before
    assert contents(tmp_path / "cache") == before


def test_what_an_image_does_not_have_is_added_to_the_folder_that_can_be_written(
    start: Start, image: Path, tmp_path: Path
) -> None:
    for file in image.glob("cached_room.outer-*/*"):
        file.unlink()
    assert hits(start()) == 0
    assert hits(start()) == 1
    assert len(contents(image)) == 2
    assert len(contents(tmp_path / "cache")) == 4


def test_an_image_of_another_version_is_no_use(start: Start, image: Path, tmp_path: Path) -> None:
    (tmp_path / "cached_room" / "inner.py").write_text(INNER.replace("2.0", "5.00"))
    assert start()(3.0) == 16.0
    assert hits(start()) == 1


@pytest.mark.parametrize("damage", DAMAGES)
def test_what_is_broken_in_an_image_is_built_again(start: Start, image: Path, damage: str) -> None:
    for file in image.rglob("*.nb?"):
        file.write_bytes(DAMAGES[damage](file.read_bytes()))
    assert start()(3.0) == 7.0
    assert hits(start()) == 1


def test_what_others_could_have_put_into_an_image_is_not_trusted(start: Start, image: Path) -> None:
    image.chmod(0o777)
    assert hits(start()) == 0


def test_on_a_full_disk_kernels_are_built_and_not_kept(
    start: Start, monkeypatch: pytest.MonkeyPatch, caplog: pytest.LogCaptureFixture
) -> None:
    def is_full(*_: object) -> None:
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(kernel, "_DISPATCHERS", [])
    monkeypatch.setattr(caching.IndexDataCacheFile, "_save_index", is_full)
    with caplog.at_level(logging.WARNING):
        assert start()(3.0) == 7.0
    assert "keeping no kernels any more" in caplog.text


def test_few_old_versions_are_kept(start: Start, tmp_path: Path) -> None:
    for version in range(2 * kernel_cache.VERSIONS_KEPT):
        (tmp_path / "cached_room" / "inner.py").write_text(INNER.replace("2.0", f"{version}.0"))
        assert start()(3.0) == 3.0 * version + 1.0
    for module in ("inner", "outer"):
        kept = list((tmp_path / "cache").glob(f"cached_room.{module}-*"))
        assert len(kept) == kernel_cache.VERSIONS_KEPT
    assert hits(start()) == 1
