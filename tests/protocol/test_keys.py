"""Key files: what is in them, and who may have read or changed them."""

import os
import stat
from pathlib import Path
from typing import Any

import pytest
import zmq

import byway
from byway.keys import (
    Keys,
    client_keys,
    load_keys,
    make_private_folder,
    new_keys,
    read_guarded,
    save_keys,
    write_private,
)

DAEMON = new_keys("daemon")
EYE = new_keys("eye", DAEMON.public)


@pytest.fixture
def file(tmp_path: Path) -> Path:
    path = tmp_path / "eye.key"
    save_keys(EYE, path)
    return path


@pytest.mark.parametrize("keys", [DAEMON, EYE])
def test_what_is_saved_is_loaded(tmp_path: Path, keys: Keys) -> None:
    save_keys(keys, tmp_path / "a.key")
    assert load_keys(tmp_path / "a.key") == keys
    assert zmq.curve_public(keys.secret.encode()).decode() == keys.public


def test_every_pair_is_another() -> None:
    assert len({new_keys("a").secret for _ in range(10)}) == 10


@pytest.mark.parametrize("umask", [0o000, 0o022, 0o077])
def test_nobody_else_can_ever_read_a_key_file(tmp_path: Path, umask: int) -> None:
    before = os.umask(umask)
    try:
        save_keys(EYE, tmp_path / "a.key")
        make_private_folder(tmp_path / "folder")
    finally:
        os.umask(before)
    assert stat.S_IMODE((tmp_path / "a.key").stat().st_mode) == 0o600
    assert stat.S_IMODE((tmp_path / "folder").stat().st_mode) == 0o700


def test_a_key_file_is_never_written_over(file: Path) -> None:
    with pytest.raises(FileExistsError):
        save_keys(new_keys("eye", DAEMON.public), file)
    link = file.with_name("link.key")
    link.symlink_to(file.with_name("elsewhere"))
    with pytest.raises(FileExistsError):
        save_keys(EYE, link)
    assert load_keys(file) == EYE


@pytest.mark.parametrize("mode", [0o640, 0o604, 0o644, 0o610, 0o601])
def test_a_secret_that_others_can_read_is_refused(file: Path, mode: int) -> None:
    file.chmod(mode)
    with pytest.raises(byway.BadValue, match=f"can be read by others .mode {mode:04o}") as caught:
        load_keys(file)
    assert caught.value.facts == {"field": "keys", "value": str(file)}
    assert EYE.secret not in str(caught.value)


@pytest.mark.parametrize("is_secret", [True, False])
@pytest.mark.parametrize("mode", [0o620, 0o602, 0o666])
def test_what_others_can_change_is_refused(file: Path, mode: int, is_secret: bool) -> None:
    file.chmod(mode)
    with pytest.raises(byway.BadValue, match="can be changed by others"):
        read_guarded(file, is_secret=is_secret)


def test_what_is_no_secret_may_be_read_by_others(file: Path) -> None:
    file.chmod(0o644)
    assert "eye" in read_guarded(file, is_secret=False)


@pytest.mark.parametrize(
    ("owner", "me", "mode", "is_good"),
    [
        (1000, 1000, 0o400, True),
        (1000, 1000, 0o440, False),
        (0, 1000, 0o440, True),  # handed over by a service manager
        (0, 1000, 0o444, False),
        (0, 1000, 0o460, False),
        (0, 0, 0o440, False),
        (1001, 1000, 0o400, False),
        (1001, 0, 0o400, False),
    ],
)
def test_whose_a_secret_may_be(
    file: Path, monkeypatch: pytest.MonkeyPatch, owner: int, me: int, mode: int, is_good: bool
) -> None:
    real = os.fstat

    def as_if(descriptor: int) -> os.stat_result:
        facts = list(real(descriptor))
        facts[stat.ST_UID], facts[stat.ST_MODE] = owner, stat.S_IFREG | mode
        return os.stat_result(facts)

    monkeypatch.setattr(os, "fstat", as_if)
    monkeypatch.setattr(os, "geteuid", lambda: me)
    if is_good:
        assert load_keys(file) == EYE
    else:
        with pytest.raises(byway.BadValue):
            load_keys(file)


OTHER = new_keys("other")


@pytest.mark.parametrize(
    ("text", "reason"),
    [
        ("", "'key'"),
        ("key = 3", "key is no section"),
        ("[key", "is no key file"),
        ("[key]\nname = 'a'\npublic = 'b'", "'secret'"),
        ("[key]\nname = 'a'\npublic = 3\nsecret = ''", "public is no text"),
        (f"[key]\nname = 'a'\npublic = '{EYE.public}'\nsecret = 'short'", "the secret key is not"),
        (f"[key]\nname = 'a'\npublic = '{'~' * 40}'\nsecret = '{EYE.secret}'", "the public key is"),
        (
            f"[key]\nname = 'a'\npublic = '{OTHER.public}'\nsecret = '{EYE.secret}'",
            "do not belong together",
        ),
        (
            f"[key]\nname='a'\npublic='{EYE.public}'\nsecret='{EYE.secret}'\n[daemon]\npublic='x'",
            "the daemon key is not",
        ),
    ],
)
def test_what_is_no_key_file_says_why_and_shows_no_secret(
    tmp_path: Path, text: str, reason: str
) -> None:
    write_private(tmp_path / "a.key", text)
    with pytest.raises(byway.BadValue, match=reason) as caught:
        load_keys(tmp_path / "a.key")
    assert EYE.secret not in str(caught.value)


@pytest.mark.parametrize("what", ["nothing", "folder", "pipe", "bytes"])
def test_what_is_no_file_of_text_is_refused_and_not_waited_for(tmp_path: Path, what: str) -> None:
    path = tmp_path / "a.key"
    if what == "folder":
        path.mkdir()
    elif what == "pipe":
        os.mkfifo(path, 0o600)
    elif what == "bytes":
        path.write_bytes(b"\xff\xfe")
        path.chmod(0o600)
    with pytest.raises(byway.BadValue, match=r"cannot be read|is not a file"):
        load_keys(path)


def test_a_client_takes_a_file_or_keys_and_wants_to_know_its_daemon(file: Path) -> None:
    assert client_keys(file) == client_keys(str(file)) == client_keys(EYE) == EYE
    with pytest.raises(byway.BadValue, match="it is a daemon's own"):
        client_keys(DAEMON)
    with pytest.raises(byway.BadValue, match="cannot be read"):
        byway.Client("tcp://127.0.0.1:1", keys=file.with_name("none.key"))


@pytest.mark.parametrize(("name", "daemon"), [("", ""), ("two words", ""), ("eye", "x" * 39)])
def test_keys_are_made_for_good_names_and_daemons_only(name: str, daemon: str) -> None:
    with pytest.raises(byway.BadValue):
        new_keys(name, daemon)


def test_a_secret_is_not_shown() -> None:
    assert EYE.secret not in repr(EYE)


def test_a_folder_that_others_may_enter_is_refused(tmp_path: Path) -> None:
    tmp_path.chmod(0o750)
    with pytest.raises(byway.BadValue, match="chmod 700"):
        make_private_folder(tmp_path)


def test_a_file_is_replaced_whole_or_not_at_all(
    file: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    before = file.read_text()

    def is_full(*_: Any) -> None:
        raise OSError(28, "No space left on device")

    with monkeypatch.context() as patched:
        patched.setattr(os, "fsync", is_full)
        with pytest.raises(OSError, match="No space"):
            write_private(file, "new", replaces=True)
    assert file.read_text() == before
    assert [each.name for each in file.parent.iterdir()] == ["eye.key"]
    write_private(file, "new", replaces=True)
    assert file.read_text() == "new"
