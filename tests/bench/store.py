"""Outcomes kept between runs of the bench: one file a scenario, void when any code has changed."""

from __future__ import annotations

import hashlib
import os
import pickle
from pathlib import Path

from bench.trial import Outcome

HERE = Path(__file__).resolve().parent


def code_digest() -> str:
    """Of the estimator's and the bench's sources."""
    digest = hashlib.sha256()
    for folder in (HERE.parents[1] / "analyse", HERE):
        for path in sorted(folder.rglob("*.py")):
            digest.update(path.name.encode())
            digest.update(path.read_bytes())
    return digest.hexdigest()


class Store:
    """A folder of outcomes made by the present code. ``folder`` None: keeps nothing."""

    def __init__(self, folder: Path | None) -> None:
        self.folder = folder
        self._digest = code_digest()          # taken before the first ramp runs
        if folder is not None:
            folder.mkdir(parents=True, exist_ok=True)

    def load(self, scenario: str, ramps: int) -> list[Outcome]:
        """The first ramps of a scenario, at most so many, as far as they are there."""
        if self.folder is None:
            return []
        try:
            digest, outcomes = pickle.loads((self.folder / f"{scenario}.pickle").read_bytes())
        except FileNotFoundError:
            return []
        return list(outcomes[:ramps]) if digest == self._digest else []

    def save(self, scenario: str, outcomes: list[Outcome]) -> None:
        """Keep all outcomes of a scenario, in place of older ones."""
        if self.folder is None:
            return
        path = self.folder / f"{scenario}.pickle"
        temporary = path.with_suffix(".new")
        temporary.write_bytes(pickle.dumps((self._digest, outcomes)))
        os.replace(temporary, path)
