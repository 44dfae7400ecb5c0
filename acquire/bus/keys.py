"""Keys by which computers know each other: one folder a computer, small text files.

::

    keys/             for its owner alone (mode 0700)
      secret.key      this computer's secret (mode 0600), which never leaves it
      cryostat.pub    public keys by computer: its own, and those of all that may come in
      desk.pub

Files are TOML with one key each. Who is in the folder may connect; taking a file away takes that
back. Every connection is encrypted and authenticated by CURVE, the elliptic-curve handshake of
ZeroMQ, so that both sides know each other by these keys.
"""

from __future__ import annotations

import os
import re
import stat
from dataclasses import dataclass, field
from pathlib import Path

import tomli
import zmq

from acquire.errors import KeyNameError, KeysError

SECRET_FILE, PUBLIC_SUFFIX = "secret.key", ".pub"
NAME = re.compile(r"[A-Za-z][A-Za-z0-9_-]{0,39}")
LARGEST_FILE = 4096  # bytes

_Z85 = re.compile(r"[0-9a-zA-Z.\-:+=^!/*?&<>()\[\]{}@%$#]{40}")
_PUBLIC_TEXT = """\
# Public key of the computer "{name}", made by rampside keys. Everybody may see it. Copy this file
# to the computers that are to know "{name}", and say there: rampside keys accept {name}.pub
public_key = "{key}"
"""
_SECRET_TEXT = """\
# Secret key of the computer "{name}", made by rampside keys. Who has it passes for this computer:
# it never leaves this folder, and nobody but its owner may read it.
secret_key = "{key}"
"""


@dataclass(frozen=True)
class KeyPair:
    """A public key and its secret, as 40 characters of Z85 each."""

    public: str
    secret: str = field(repr=False)


@dataclass(frozen=True)
class ClientKeys:
    """What a client shows, and the public key of the only server that it accepts."""

    own: KeyPair
    server: str


class KeyFolder:
    """The keys of this computer. Every call reads the files anew, so that changes hold at once.

    Raises KeysError for files that are missing, malformed, or open to others.
    """

    def __init__(self, path: str | Path) -> None:
        self.path = Path(path).expanduser().absolute()

    def own(self) -> KeyPair:
        """This computer's pair."""
        self._check()
        secret = self._key(self.path / SECRET_FILE, "secret_key", private=True)
        return KeyPair(zmq.curve_public(secret.encode()).decode(), secret)

    def known(self) -> dict[str, str]:
        """Public keys by computer, its own among them."""
        self._check()
        try:
            names = sorted(entry for entry in os.listdir(self.path))
        except OSError as error:
            raise _system(self.path, "can't be read", error) from None
        found = [name for name in names if name.endswith(PUBLIC_SUFFIX) and name[0] != "."]
        return {name.removesuffix(PUBLIC_SUFFIX): self.public(self.path / name) for name in found}

    def own_name(self) -> str:
        """What this computer is called."""
        own = self.own().public
        for name, key in self.known().items():
            if key == own:
                return name
        raise KeysError(
            f"{self.path}: the public key of this computer is missing; put its .pub file back."
        )

    def for_server(self, computer: str) -> KeyPair:
        """The pair of this computer, which must be the one called ``computer`` ("" for any)."""
        if computer and self.own_name() != computer:
            raise KeysError(
                f"{self.path}: holds the keys of {self.own_name()!r}, but the reader is to run on "
                f"{computer!r}; run it there, or mend `computer`."
            )
        return self.own()

    def for_client_of(self, computer: str) -> ClientKeys:
        """What is needed to connect to ``computer``."""
        known = self.known()
        if computer not in known:
            have = ", ".join(known) or "none"
            raise KeysError(
                f"{self.path}: no public key of {computer!r} (there are: {have}); copy "
                f"{computer}.pub from there and say: rampside keys accept {computer}.pub"
            )
        return ClientKeys(self.own(), known[computer])

    def public(self, path: Path) -> str:
        """The public key in a file."""
        return self._key(path, "public_key", private=False)

    def make(self, name: str) -> KeyPair:
        """Make this computer's pair. Nothing that is there is ever overwritten."""
        if not NAME.fullmatch(name):
            raise KeyNameError(
                f"{name!r}: is no name for a computer; letters, digits, - and _, at most 40."
            )
        try:
            self.path.mkdir(mode=0o700, parents=True, exist_ok=True)
        except OSError as error:
            raise _system(self.path, "can't be made", error) from None
        self._check()
        public, secret = (key.decode() for key in zmq.curve_keypair())
        if (self.path / SECRET_FILE).exists():  # told before anything is written
            raise _there(self.path / SECRET_FILE)
        _create(self.path / f"{name}{PUBLIC_SUFFIX}", _PUBLIC_TEXT.format(name=name, key=public))
        try:
            _create(self.path / SECRET_FILE, _SECRET_TEXT.format(name=name, key=secret))
        except KeysError:
            (self.path / f"{name}{PUBLIC_SUFFIX}").unlink(missing_ok=True)
            raise
        return KeyPair(public, secret)

    def accept(self, file: Path) -> str:
        """Let the computer in whose public key is in ``file``; returns its name, the file's."""
        name = file.name.removesuffix(PUBLIC_SUFFIX)
        if not file.name.endswith(PUBLIC_SUFFIX) or not NAME.fullmatch(name):
            raise KeysError(f"{file}: is not called COMPUTER{PUBLIC_SUFFIX}; give it its name back.")
        key = self.public(file)
        known = self.known()
        if known.get(name, key) != key:
            raise KeysError(
                f"{self.path / file.name}: is there already, with another key. If {name!r} has got "
                "new keys, take that file away and accept again."
            )
        if name not in known:
            _create(self.path / file.name, _PUBLIC_TEXT.format(name=name, key=key))
        return name

    def _check(self) -> None:
        try:
            found = os.lstat(self.path)
        except OSError as error:
            hint = "make it by: rampside keys make NAME"
            raise _system(self.path, f"the folder of keys can't be used; {hint}", error) from None
        if not stat.S_ISDIR(found.st_mode):
            raise KeysError(f"{self.path}: is not a folder, so it can't hold keys.")
        _check_private(self.path, found, "700")

    def _key(self, path: Path, kind: str, private: bool) -> str:
        try:
            content = tomli.loads(_read(path, private))
        except ValueError:
            content = {}
        key = content.get(kind)
        if key is None and ("secret_key" in content) and kind == "public_key":
            raise KeysError(f"{path}: is a secret key. It must not leave its computer; copy the .pub.")
        if not isinstance(key, str) or not _Z85.fullmatch(key):
            raise KeysError(
                f'{path}: holds no key; it must say {kind} = "..." with 40 characters of Z85. '
                "Copy it again from where it was made."
            )
        try:
            zmq.curve_public(key.encode())
        except zmq.ZMQError:  # five characters of Z85 that stand for more than 32 bits
            raise KeysError(f"{path}: its key is damaged; copy it again.") from None
        return key


def client_keys(folder: str, computer: str) -> ClientKeys | None:
    """The keys to connect to ``computer`` out of a folder; None without a folder."""
    return KeyFolder(folder).for_client_of(computer) if folder else None


def _read(path: Path, private: bool) -> str:
    try:
        fd = os.open(path, os.O_RDONLY | os.O_CLOEXEC | os.O_NONBLOCK)
    except OSError as error:
        raise _system(path, "can't be read", error) from None
    try:
        found = os.fstat(fd)
        if not stat.S_ISREG(found.st_mode):
            raise KeysError(f"{path}: is not a file, so it holds no key.")
        if private:  # looked at on what is open, so that it can't be exchanged in between
            _check_private(path, found, "600")
        return os.read(fd, LARGEST_FILE).decode("utf-8", "replace")
    except OSError as error:
        raise _system(path, "can't be read", error) from None
    finally:
        os.close(fd)


def _check_private(path: Path, found: os.stat_result, wanted: str) -> None:
    if found.st_uid != os.geteuid():
        raise KeysError(f"{path}: belongs to another user; keys must be your own.")
    if found.st_mode & 0o077:
        raise KeysError(
            f"{path}: others may get at it (mode {stat.S_IMODE(found.st_mode):o}), so it is not "
            f"used. Was it copied? Then make new keys; else: chmod {wanted} '{path}'"
        )


def _create(path: Path, text: str) -> None:
    """A new file, whole or not there, for its owner alone. Raises KeysError if there is one."""
    new = path.with_name(f".{path.name}.{os.getpid()}.new")
    try:
        fd = os.open(new, os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, 0o600)
        try:
            with open(fd, "w", encoding="utf-8") as file:
                file.write(text)
                file.flush()
                os.fsync(fd)
            os.link(new, path)  # in one step, and refused where there is a file already
        finally:
            os.unlink(new)
    except FileExistsError:
        raise _there(path) from None
    except OSError as error:
        raise _system(path, "can't be written", error) from None


def _there(path: Path) -> KeysError:
    return KeysError(f"{path}: is there already, and keys are never overwritten; nothing was done.")


def _system(path: Path, what: str, error: OSError) -> KeysError:
    return KeysError(f"{path}: {what} ({error.strerror or error}).")
