"""What everything stands on: compiled kernels and their cache, random state, the countdown."""

import itertools
import os
from pathlib import Path

import numpy as np
import pytest

import byway_planning
from byway_planning import countdown, kernel_cache
from byway_planning.dice import new_dice, next_word, normal, uniform, whole_below
from byway_planning.kernel import describe, entries, is_warm, kernel, numba_type, warm
from byway_planning.vehicles.body import Limits

WORD = 2**64


def twin_words(seed: int, count: int) -> list[int]:
    """SplitMix64 and xoshiro256** 1.0 as published, in whole numbers of Python."""
    state, z = [], seed % WORD
    for _ in range(4):
        z = (z + 0x9E3779B97F4A7C15) % WORD
        mixed = ((z ^ (z >> 30)) * 0xBF58476D1CE4E5B9) % WORD
        mixed = ((mixed ^ (mixed >> 27)) * 0x94D049BB133111EB) % WORD
        state.append(mixed ^ (mixed >> 31))
    words = []
    for _ in range(count):
        five = state[1] * 5 % WORD
        words.append(((five << 7) | (five >> 57)) % WORD * 9 % WORD)
        t = (state[1] << 17) % WORD
        state[2] ^= state[0]
        state[3] ^= state[1]
        state[1] ^= state[2]
        state[0] ^= state[3]
        state[2] ^= t
        state[3] = ((state[3] << 45) | (state[3] >> 19)) % WORD
    return words


@pytest.mark.parametrize("seed", [0, 1, 2**63 + 5, -7])
def test_the_dice_are_the_published_generator(seed):
    dice = new_dice(seed)
    assert [int(next_word(dice)) for _ in range(50)] == twin_words(seed, 50)


def test_draws_have_the_moments_of_their_distributions():
    dice = new_dice(3)
    flat = np.array([uniform(dice) for _ in range(20_000)])
    bell = np.array([normal(dice) for _ in range(20_000)])
    assert (flat >= 0.0).all()
    assert (flat < 1.0).all()
    # Four standard errors of 20,000 draws.
    assert flat.mean() == pytest.approx(0.5, abs=4 * 0.289 / 141)
    assert bell.mean() == pytest.approx(0.0, abs=4 / 141)
    assert bell.var() == pytest.approx(1.0, abs=4 * 1.415 / 141)
    assert {whole_below(dice, 3) for _ in range(100)} == {0, 1, 2}


def test_after_warming_up_every_entry_has_one_signature_and_takes_no_other():
    """A surprise signature would have a request wait for the compiler."""
    warm()
    assert is_warm()
    assert len(entries()) > 20
    for name, dispatcher in entries().items():
        assert len(dispatcher.signatures) == 1, name
    excess = entries()["byway_planning.search.question.excess_kernel"]
    with pytest.raises(TypeError):
        excess(1, 2, 3)


def test_warming_up_tells_how_far_it_is():
    warm()

    @kernel("f8")
    def doubled(x: float) -> float:
        return 2.0 * x

    told = []
    warm(lambda done, total, name: told.append((done, total, name)))
    assert [name.rpartition(".")[2] for _, _, name in told] == ["doubled"]
    assert told[0][0] < told[0][1]
    assert doubled(2.0) == 4.0


def test_the_type_of_a_tuple_is_the_one_that_numba_gives_its_value():
    import numba

    assert numba_type(Limits) == numba.typeof(Limits(1.0, 1.0, 1.0, 1.0, 1.0))
    assert numba_type("rf8[:, ::1]") == numba.typeof(read_only(np.zeros((2, 2))))
    with pytest.raises(KeyError):
        describe(Limits, "f16")


def read_only(array: np.ndarray) -> np.ndarray:
    array.flags.writeable = False
    return array


def test_a_change_two_imports_away_makes_a_cached_kernel_stale(monkeypatch):
    """numba itself looks at the file of the function only."""
    real = kernel_cache._imports_of
    module = "byway_planning.search.lattice"
    before = kernel_cache.stamp_of.__wrapped__(module)
    assert kernel_cache.stamp_of.__wrapped__(module) == before

    def edited(name: str) -> tuple[str, tuple[str, ...]]:
        digest, imports = real(name)
        return ("edited", imports) if name == "byway_planning.curves.word" else (digest, imports)

    monkeypatch.setattr(kernel_cache, "_imports_of", edited)
    assert kernel_cache.stamp_of.__wrapped__(module) != before
    assert "byway_planning.curves.word" not in real("byway_planning.outcome")[1]


def test_the_cache_folder_is_ours_alone_and_moves_on_when_it_is_not(monkeypatch, tmp_path):
    find = kernel_cache.cache_root.__wrapped__
    monkeypatch.setenv("BYWAY_CACHE_DIR", str(tmp_path / "mine"))
    first = find()
    assert first is not None
    assert Path(first).is_relative_to(tmp_path / "mine")
    assert os.stat(first).st_mode & 0o077 == 0
    os.chmod(first, 0o777)  # others could plant a pickle there
    monkeypatch.setenv("CACHE_DIRECTORY", str(tmp_path / "other"))
    second = find()
    assert second is not None
    assert Path(second).is_relative_to(tmp_path / "other")
    blocked = tmp_path / "file"
    blocked.write_text("not a folder")
    monkeypatch.setenv("BYWAY_CACHE_DIR", str(blocked))
    monkeypatch.setenv("CACHE_DIRECTORY", str(blocked))
    monkeypatch.setenv("XDG_CACHE_HOME", str(blocked))
    monkeypatch.setattr(kernel_cache.tempfile, "gettempdir", lambda: str(blocked))
    assert find() is None


def test_a_countdown_starts_at_its_first_reading(monkeypatch):
    ticks = itertools.count(100.0, 0.5)
    monkeypatch.setattr(countdown_module().time, "perf_counter", lambda: next(ticks))
    left_s = countdown(2.0)
    assert [left_s() for _ in range(6)] == [2.0, 1.5, 1.0, 0.5, 0.0, -0.5]
    for senseless in (-1.0, float("nan"), float("inf")):
        with pytest.raises(ValueError, match="countdown"):
            countdown(senseless)


def countdown_module():
    import importlib

    return importlib.import_module("byway_planning.countdown")


def test_everything_the_room_offers_is_there():
    for name in byway_planning.__all__:
        assert getattr(byway_planning, name) is not None
