"""The benchmark itself: questions that stay the same, a small run that finds nothing wrong."""

import numpy as np
import pytest
from rich.console import Console

from bywayd.bench import measure, tables
from bywayd.bench.families_tight import FAMILIES, draw
from bywayd.bench.figures import quantile, ratio
from bywayd.bench.planning import digest_of


@pytest.mark.parametrize("family", FAMILIES)
def test_the_same_salt_asks_the_same_question_and_another_salt_another(family):
    one, same, other = draw(family, 3, 0), draw(family, 3, 0), draw(family, 4, 0)
    assert one.digest() == same.digest()
    assert one.digest() != other.digest()


def test_the_digest_of_answers_does_not_depend_on_what_ran_before():
    """It is the guard against a kernel that is made faster by answering something else."""
    one = digest_of(["open", "bay"], 2)
    digest_of(["trap"], 5)
    assert digest_of(["open", "bay"], 2) == one
    assert digest_of(["open", "bay"], 3) != one


def test_a_small_run_measures_everything_and_finds_no_broken_promise():
    found = measure(small=True, salt=1)
    assert found["faults"] == []
    assert {"planning", "micro", "site", "serving", "digest"} <= set(found)
    assert set(found["planning"]) == set(FAMILIES)
    console = Console(width=140, record=True)
    with console.capture():
        for part in tables(found):
            console.print(part)
    text = console.export_text()
    for family in FAMILIES:
        assert family in text


def test_unknown_parts_and_families_are_refused_by_name():
    with pytest.raises(ValueError, match="wheels"):
        measure(only=["wheels"])
    with pytest.raises(ValueError, match="moon"):
        measure(families=["moon"])
    with pytest.raises(ValueError, match="seeds"):
        measure(seeds=0)


def test_quantiles_of_little_or_nothing():
    assert quantile([], 0.5) is None
    assert quantile([3.0], 0.99) == 3.0
    assert ratio(1.0, None) is None
