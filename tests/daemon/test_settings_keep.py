"""Where durable layers are kept: what may be said of it, and what is said back."""

from __future__ import annotations

from pathlib import Path

import pytest

from bywayd.settings import BadSettings, load


def told(tmp_path: Path, text: str) -> Path:
    file = tmp_path / "site.toml"
    file.write_text(text)
    return file


def complaint(file: Path) -> str:
    with pytest.raises(BadSettings) as caught:
        load(file)
    (mistake,) = caught.value.mistakes
    return str(mistake)


def test_nothing_is_kept_unless_a_file_is_named() -> None:
    assert load().keep.file is None


@pytest.mark.parametrize("variable", ["STATE_DIRECTORY", "XDG_STATE_HOME"])
def test_the_state_folder_is_what_the_system_gives_this_user(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, variable: str
) -> None:
    for each in ("STATE_DIRECTORY", "XDG_STATE_HOME"):
        monkeypatch.delenv(each, raising=False)
    file = told(tmp_path, '[keep]\nfile = "{state}/site.sqlite"\n')
    home = Path.home() / ".local" / "state"
    assert load(file).keep.file == str(home / "byway" / "site.sqlite")
    monkeypatch.setenv(variable, "/var/lib/yard")
    assert load(file).keep.file == "/var/lib/yard/byway/site.sqlite"


def test_a_file_that_depends_on_where_the_daemon_is_started_is_refused(tmp_path: Path) -> None:
    assert "site.toml:2: keep.file: site.sqlite: must be an absolute path" in complaint(
        told(tmp_path, '[keep]\nfile = "site.sqlite"\n')
    )


def test_a_durable_layer_needs_a_file(tmp_path: Path) -> None:
    layer = "[layers.stacks]\ndurable = true\n"
    assert "stacks is durable, and there is no file for it: set [keep] file" in complaint(
        told(tmp_path, layer)
    )
    settings = load(told(tmp_path, f'[keep]\nfile = "/var/lib/yard.sqlite"\n{layer}'))
    assert settings.layers["stacks"].durable


def test_a_misspelt_key_is_told_with_what_was_meant(tmp_path: Path) -> None:
    text = complaint(told(tmp_path, '[keep]\nflie = "/var/lib/yard.sqlite"\n'))
    assert "did you mean file?" in text
