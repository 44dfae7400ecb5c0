"""Files of keys: for their owner alone, never overwritten, every mistake in one sentence."""

from __future__ import annotations

import os
import stat
import subprocess
import sys
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import pytest

from acquire.bus.keys import KeyFolder, client_keys
from acquire.errors import KeysError


def mode(path: Path) -> int:
    return stat.S_IMODE(path.stat().st_mode)


@pytest.fixture
def keys(tmp_path: Path) -> KeyFolder:
    folder = KeyFolder(tmp_path / "keys")
    folder.make("desk")
    return folder


def test_keys_are_their_owners_alone_and_read_back(tmp_path: Path) -> None:
    before = os.umask(0)  # the widest that there is
    try:
        folder = KeyFolder(tmp_path / "a" / "keys")
        pair = folder.make("desk")
    finally:
        os.umask(before)
    assert (mode(folder.path), mode(folder.path / "secret.key")) == (0o700, 0o600)
    assert sorted(os.listdir(folder.path)) == ["desk.pub", "secret.key"]
    assert folder.own() == pair
    assert folder.known() == {"desk": pair.public}
    assert (folder.own_name(), len(pair.public), len(pair.secret)) == ("desk", 40, 40)
    assert pair.secret not in (folder.path / "desk.pub").read_text()
    assert pair.secret not in repr(pair)


def test_nothing_is_ever_overwritten(keys: KeyFolder) -> None:
    before = {path.name: path.read_bytes() for path in keys.path.iterdir()}
    for name in ("desk", "other"):
        with pytest.raises(KeysError, match="never overwritten; nothing was done"):
            keys.make(name)
    (keys.path / "secret.key").unlink()
    with pytest.raises(KeysError, match="desk.pub: is there already"):
        keys.make("desk")
    del before["secret.key"]
    assert {path.name: path.read_bytes() for path in keys.path.iterdir()} == before


def test_of_many_who_make_keys_at_once_one_succeeds(tmp_path: Path) -> None:
    def make(number: int) -> str:
        try:
            return KeyFolder(tmp_path / "keys").make("desk").public
        except KeysError as error:
            return str(error)

    with ThreadPoolExecutor(8) as pool:
        done = list(pool.map(make, range(8)))
    folder = KeyFolder(tmp_path / "keys")
    assert done.count(folder.own().public) == 1
    assert sorted(os.listdir(folder.path)) == ["desk.pub", "secret.key"]


def test_a_computer_is_accepted_once_and_not_exchanged(keys: KeyFolder, tmp_path: Path) -> None:
    other, third = KeyFolder(tmp_path / "other"), KeyFolder(tmp_path / "third")
    other.make("cryostat")
    third.make("cryostat")
    assert keys.accept(other.path / "cryostat.pub") == "cryostat"
    assert keys.accept(other.path / "cryostat.pub") == "cryostat"
    assert keys.known()["cryostat"] == other.own().public
    with pytest.raises(KeysError, match="is there already, with another key"):
        keys.accept(third.path / "cryostat.pub")
    found = client_keys(str(keys.path), "cryostat")
    assert found is not None
    assert (found.own, found.server) == (keys.own(), other.own().public)
    assert client_keys("", "cryostat") is None


def remake(path: Path, text: str) -> None:
    path.write_text(text)
    path.chmod(0o600)


BREAK: dict[str, tuple[Callable[[Path], object], str]] = {
    "no folder": (lambda path: path.rename(path.parent / "x"), "make it by: rampside keys make"),
    "loose folder": (lambda path: path.chmod(0o750), r"others may get at it \(mode 750\).*chmod 700"),
    "loose secret": (
        lambda path: (path / "secret.key").chmod(0o640), r"\(mode 640\).*chmod 600"
    ),
    "no secret": (lambda path: (path / "secret.key").unlink(), r"secret.key: can't be read \(No such"),
    "folder for secret": (
        lambda path: ((path / "secret.key").unlink(), (path / "secret.key").mkdir()), "is not a file"
    ),
    "empty": (lambda path: remake(path / "secret.key", ""), "holds no key; it must say secret_key"),
    "no toml": (lambda path: remake(path / "secret.key", "\0{{"), "holds no key"),
    "short": (lambda path: remake(path / "secret.key", f'secret_key = "{"a" * 39}"'), "40 characters"),
    "letters": (lambda path: remake(path / "secret.key", f'secret_key = "{"~" * 40}"'), "of Z85"),
    "too large": (lambda path: remake(path / "secret.key", f'secret_key = "{"#" * 40}"'), "is damaged"),
    "number": (lambda path: remake(path / "secret.key", "secret_key = 7"), "holds no key"),
    "latin": (lambda path: (path / "secret.key").write_bytes(b"\xff"), "holds no key"),
    "huge": (lambda path: remake(path / "secret.key", "#" * 10_000_000), "holds no key"),
}  # fmt: skip


@pytest.mark.parametrize("what", BREAK)
def test_keys_that_can_not_be_used_are_told_in_one_sentence(keys: KeyFolder, what: str) -> None:
    damage, message = BREAK[what]
    damage(keys.path)
    with pytest.raises(KeysError, match=message) as caught:
        keys.own()
    assert str(keys.path) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_keys_of_another_user_are_not_used(
    keys: KeyFolder, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(os, "geteuid", lambda: os.getuid() + 1)
    with pytest.raises(KeysError, match="belongs to another user"):
        keys.own()


def test_a_folder_is_not_reached_through_a_link(keys: KeyFolder) -> None:
    link = keys.path.with_name("link")
    link.symlink_to(keys.path)
    with pytest.raises(KeysError, match="is not a folder"):
        KeyFolder(link).own()


@pytest.mark.parametrize("name", ["", "a b", "../x", "-x", "a" * 41, "ä", "a/b", "a.pub"])
def test_a_name_that_is_no_name_of_a_file_is_refused(tmp_path: Path, name: str) -> None:
    with pytest.raises(KeysError, match="is no name for a computer"):
        KeyFolder(tmp_path / "keys").make(name)
    assert not (tmp_path / "keys").exists()


def test_a_secret_key_is_not_accepted_as_a_public_one(keys: KeyFolder, tmp_path: Path) -> None:
    (keys.path / "secret.key").rename(tmp_path / "cryostat.pub")
    with pytest.raises(KeysError, match="is a secret key. It must not leave"):
        keys.accept(tmp_path / "cryostat.pub")


@pytest.mark.parametrize("name", ["cryostat.txt", ".pub", "a b.pub"])
def test_a_file_of_another_name_is_not_accepted(keys: KeyFolder, tmp_path: Path, name: str) -> None:
    (tmp_path / name).write_bytes((keys.path / "desk.pub").read_bytes())
    with pytest.raises(KeysError, match="is not called COMPUTER.pub"):
        keys.accept(tmp_path / name)


def test_a_computer_that_is_not_known_is_told(keys: KeyFolder) -> None:
    with pytest.raises(KeysError, match=r"no public key of 'cryostat' \(there are: desk\); copy"):
        keys.for_client_of("cryostat")
    (keys.path / "desk.pub").unlink()
    with pytest.raises(KeysError, match="public key of this computer is missing"):
        keys.own_name()


# The command.


def rampside_keys(*words: object) -> subprocess.CompletedProcess[str]:
    line = [sys.executable, "-m", "dashboard.cli", "keys", *map(str, words)]
    return subprocess.run(line, capture_output=True, text=True, timeout=60, check=False)


def test_two_computers_get_to_know_each_other(tmp_path: Path) -> None:
    desk, cryostat = tmp_path / "desk-keys", tmp_path / "cryostat-keys"
    made = rampside_keys("make", "desk", "--folder", desk)
    assert made.returncode == 0
    assert str(desk / "desk.pub") in made.stdout
    assert "rampside keys accept desk.pub" in made.stdout
    assert KeyFolder(desk).own().secret not in made.stdout
    assert rampside_keys("make", "cryostat", "--folder", cryostat).returncode == 0
    accepted = rampside_keys("accept", cryostat / "cryostat.pub", "--folder", desk)
    assert (accepted.returncode, "cryostat may come in" in accepted.stdout) == (0, True)
    listed = rampside_keys("list", "--folder", desk)
    assert listed.returncode == 0
    assert f"{KeyFolder(cryostat).own().public}  cryostat" in listed.stdout
    assert f"{KeyFolder(desk).own().public}  desk (this computer)" in listed.stdout
    again = rampside_keys("make", "desk", "--folder", desk)
    assert (again.returncode, again.stdout) == (1, "")
    assert again.stderr.startswith("rampside: ")
    assert "never overwritten" in again.stderr


def test_what_is_missing_is_told(tmp_path: Path) -> None:
    done = rampside_keys("list", "--folder", tmp_path / "nowhere")
    assert (done.returncode, "make it by: rampside keys make NAME" in done.stderr) == (1, True)
    assert rampside_keys().returncode == 2
    assert rampside_keys("make").returncode == 2
    wrong = rampside_keys("make", "../x", "--folder", tmp_path / "k")
    assert (wrong.returncode, "is no name for a computer" in wrong.stderr) == (2, True)
