"""The scripts that make the environment: what they install is pinned, what they say is clear."""

import re
import subprocess
from importlib import metadata
from pathlib import Path

import pytest
from packaging.requirements import Requirement

ROOT = Path(__file__).resolve().parent.parent
#: The build backend is installed ahead of the build, so it must be pinned as well.
ASKED_FOR = ("byway[daemon,test]", "hatchling")


def same(name: str) -> str:
    """Distribution names compare without case, dashes, dots and underscores."""
    return re.sub(r"[-_.]+", "-", name).lower()


def pinned() -> dict[str, str]:
    lines = (ROOT / "deploy" / "constraints.txt").read_text().splitlines()
    pairs = [line.split("==") for line in lines if line and not line.startswith("#")]
    return {same(name): version for name, version in pairs}


def needed(asked_for: tuple[str, ...]) -> set[str]:
    """Every distribution that these need, directly or not, as installed here."""
    seen: set[tuple[str, str]] = set()
    waiting = [(asked, extra) for text in asked_for for asked, extra in _asked(Requirement(text))]
    while waiting:
        name, extra = waiting.pop()
        if (name, extra) in seen:
            continue
        seen.add((name, extra))
        for text in metadata.requires(name) or ():
            requirement = Requirement(text)
            if requirement.marker is None or requirement.marker.evaluate({"extra": extra}):
                waiting.extend(_asked(requirement))
    return {name for name, _ in seen} - {"byway"}


def _asked(requirement: Requirement) -> list[tuple[str, str]]:
    return [(same(requirement.name), extra) for extra in ("", *requirement.extras)]


def test_everything_that_is_installed_is_pinned() -> None:
    names = needed(ASKED_FOR)
    assert len(names) > 30
    assert sorted(names - set(pinned())) == []


def test_nothing_is_pinned_that_is_not_needed() -> None:
    # Some are needed on other systems or Python versions only.
    elsewhere = {"tzdata"}
    assert sorted(set(pinned()) - needed(ASKED_FOR) - elsewhere) == []


def test_pins_fulfil_what_the_project_file_asks_for() -> None:
    for text in metadata.requires("byway") or ():
        requirement = Requirement(text)
        assert requirement.specifier.contains(pinned()[same(requirement.name)]), text


@pytest.mark.parametrize("script", sorted((ROOT / "deploy").glob("*.sh")), ids=lambda p: p.name)
def test_scripts_are_plain_shell(script: Path) -> None:
    subprocess.run(["sh", "-n", str(script)], check=True)


def test_without_python_the_scripts_say_what_is_missing(tmp_path: Path) -> None:
    told = subprocess.run(
        ["/bin/sh", "-c", f'. "{ROOT}/deploy/venv.sh"; find_python'],
        env={"PATH": str(tmp_path)}, capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert told.returncode == 1
    assert told.stdout == ""
    assert "needs Python 3.11, 3.12 or 3.13" in told.stderr


def test_a_python_that_is_too_old_is_passed_over(tmp_path: Path) -> None:
    """A command that fails, as an old Python does at the version question, is not chosen."""
    for name, status in (("python3.13", 1), ("python3.12", 127), ("python3.11", 0)):
        (tmp_path / name).write_text(f"#!/bin/sh\nexit {status}\n")
        (tmp_path / name).chmod(0o755)
    told = subprocess.run(
        ["/bin/sh", "-c", f'. "{ROOT}/deploy/venv.sh"; find_python'],
        env={"PATH": str(tmp_path)}, capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert (told.returncode, told.stdout) == (0, "python3.11\n")
