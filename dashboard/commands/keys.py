"""``rampside keys``: the keys by which this computer and others know each other."""

from __future__ import annotations

import argparse

from acquire.bus.keys import PUBLIC_SUFFIX, KeyFolder


def run(arguments: argparse.Namespace) -> int:
    """Make, accept or list keys; exit status 0."""
    _ACTIONS[arguments.action](KeyFolder(arguments.folder), arguments)
    return 0


def _make(keys: KeyFolder, arguments: argparse.Namespace) -> None:
    name = arguments.name
    pair = keys.make(name)
    file = f"{name}{PUBLIC_SUFFIX}"
    print(f"Keys of {name!r} are in {keys.path}. Public key: {pair.public}")
    print(f"Copy {keys.path / file} to each computer that {name!r} is to talk to, and say there:")
    print(f"  rampside keys accept {file}")
    print("Copy the .pub file of each of these here, and accept it, too. What else is in the folder")
    print("stays there: whoever has secret.key passes for this computer.")


def _accept(keys: KeyFolder, arguments: argparse.Namespace) -> None:
    name = keys.accept(arguments.file)
    print(f"{name} may come in from now on, also where something runs already. Its public key:")
    print(f"  {keys.known()[name]}")
    print("Compare it with what `rampside keys list` says there, if the copy came by a doubtful way.")
    print(f"To take that back, remove {keys.path / (name + PUBLIC_SUFFIX)}.")


def _list(keys: KeyFolder, arguments: argparse.Namespace) -> None:
    own = keys.own()
    print(f"{keys.path}: these computers may come in")
    for name, key in keys.known().items():
        print(f"  {key}  {name}" + (" (this computer)" if key == own.public else ""))
    print("To keep one out, remove its .pub file; its connections are cut within a second.")


_ACTIONS = {"make": _make, "accept": _accept, "list": _list}
