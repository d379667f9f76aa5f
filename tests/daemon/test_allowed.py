"""The list of who is allowed: read with every mistake told, written whole."""

from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from byway.errors import BadValue
from byway.keys import new_keys
from bywayd import allowed as allowed_module
from bywayd.allowed import load_allowed, save_allowed
from bywayd.core.rights import ROLES, Rights

KEYS = [new_keys(f"k-{i}").public for i in range(4)]


def write(tmp_path: Path, text: str) -> Path:
    file = tmp_path / "allowed.toml"
    file.write_text(text)
    file.chmod(0o644)
    return file


def entry(role: str = "driver", public: str = KEYS[0], **more: str) -> str:
    lines = [f'role = "{role}"', f"public = '{public}'"]
    return "\n".join([*lines, *(f"{key} = {text}" for key, text in more.items())])


def test_a_list_is_read(tmp_path: Path) -> None:
    text = f"[tug-3]\n{entry()}\n['lidar.north']\n"
    text += entry("source", KEYS[1], layers='["lidar.*", "a/b:c#d"]')
    assert load_allowed(write(tmp_path, text)) == {
        KEYS[0]: Rights("driver", "tug-3"),
        KEYS[1]: Rights("source", "lidar.north", ("lidar.*", "a/b:c#d")),
    }


@pytest.mark.parametrize(
    ("text", "why"),
    [
        ("[tug", "is not TOML"),
        ("tug = 3", "no section"),
        (f"['two words']\n{entry()}", "no section with a name"),
        (f"[tug]\n{entry('emperor')}", "role 'emperor' for tug; it must be one of source, driver"),
        (f"[tug]\npublic = '{KEYS[0]}'", "role None for tug"),
        ("[tug]\nrole = 'driver'", "no public key for tug"),
        ("[tug]\nrole = 'driver'\npublic = 3", "no public key for tug"),
        (f"[tug]\n{entry(public='short')}", "public key of tug key is not 40 characters"),
        (f"[tug]\n{entry(layer='[]')}", "'layer' at tug that is not known"),
        (f"[tug]\n{entry(layers='3')}", "no list as the layers of tug"),
        (f"[tug]\n{entry(layers='[3]')}", "wrong about tug: 3 is no name"),
        (f"[tug]\n{entry(layers='[chr]')}", "is not TOML"),
        (f"[a]\n{entry(layers='''['li*r']''')}", "'li.r' is no name of a layer, nor the beginning"),
        (f"[a]\n{entry('operator', layers='''['a']''')}", "mean nothing for the role operator"),
        (f"[a]\n{entry()}\n[b]\n{entry()}", "gives b the key of a"),
    ],
)
def test_every_mistake_is_told(tmp_path: Path, text: str, why: str) -> None:
    with pytest.raises(BadValue, match=why):
        load_allowed(write(tmp_path, text))


def test_a_list_that_others_can_change_is_refused(tmp_path: Path) -> None:
    file = write(tmp_path, "")
    assert load_allowed(file) == {}
    file.chmod(0o664)
    with pytest.raises(BadValue, match="can be changed by others"):
        load_allowed(file)


def test_a_list_is_bounded(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(allowed_module, "allowed_max", 1)
    file = write(tmp_path, f"[a]\n{entry()}\n[b]\n{entry(public=KEYS[1])}")
    with pytest.raises(BadValue, match="2 entries, the most are 1"):
        load_allowed(file)


NAMES = st.from_regex(r"\A[A-Za-z0-9][A-Za-z0-9_.:/#-]{0,10}\Z")
PATTERNS = NAMES | NAMES.map(lambda name: name + "*") | st.just("*")


@st.composite
def lists(draw: st.DrawFn) -> dict[str, Rights]:
    names = draw(st.lists(NAMES, unique=True, max_size=len(KEYS)))
    made = {}
    for public, name in zip(KEYS, names, strict=False):
        role = draw(st.sampled_from(ROLES))
        has_layers = role in ("source", "driver")
        layers = draw(st.lists(PATTERNS, max_size=3)) if has_layers else []
        made[public] = Rights(role, name, tuple(layers))
    return made


@settings(max_examples=50, deadline=None)
@given(lists())
def test_what_is_written_is_read(
    tmp_path_factory: pytest.TempPathFactory, made: dict[str, Rights]
) -> None:
    file = tmp_path_factory.mktemp("l") / "allowed.toml"
    save_allowed(made, file)
    assert load_allowed(file) == made
    assert file.stat().st_mode & 0o777 == 0o600
