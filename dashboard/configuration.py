"""A configuration as the commands need it: accepted by the schema, and by what reckons with it."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import tomli

from acquire.bus.keys import client_keys
from acquire.config import ConfigError, Problem, Rig, load
from acquire.config.problems import nearest_name
from acquire.errors import KeysError
from analyse.materials import MATERIALS, find_material
from analyse.replay import RowMaker


def load_configuration(path: str | Path) -> tuple[Rig, bytes]:
    """The configuration and the file's bytes. Raises ConfigError listing every mistake.

    The schema belongs to the floor below ``analyse`` and can't know its table of materials.
    """
    try:
        rig, config = load(path)
    except ConfigError as error:
        raise ConfigError(error.source, [*error.problems, *_materials(Path(path))]) from None
    if problems := _materials(Path(path)):
        raise ConfigError(str(path), problems)
    try:
        RowMaker(rig)
    except ValueError as error:
        raise ConfigError(str(path), [Problem("hall_bars", str(error))]) from None
    return rig, config


def check_keys(rig: Rig) -> None:
    """Raise ConfigError if there are not the keys that are needed to hear readers elsewhere."""
    problems = []
    for index, reader in enumerate(rig.readers):
        if reader.elsewhere is not None and reader.elsewhere.computer is not None:
            try:
                client_keys(rig.keys.folder, reader.elsewhere.computer)
            except KeysError as error:
                problems.append(Problem(f"readers[{index}].elsewhere.computer", str(error)))
    if problems:
        raise ConfigError("keys", problems)


def _materials(path: Path) -> list[Problem]:
    """The materials that are not known, also in a file that has other mistakes."""
    problems = []
    for index, bar in enumerate(_hall_bars(path)):
        material = bar.get("material") if isinstance(bar, dict) else None
        if isinstance(material, str):
            try:
                find_material(material)
            except ValueError:
                rule = "not in the table of materials; give effective_mass and its source instead"
                nearest = nearest_name(material, list(MATERIALS))
                where = f"hall_bars[{index}].material"
                problems.append(Problem(where, rule, repr(material), nearest))
    return problems


def _hall_bars(path: Path) -> list[Any]:
    try:
        bars = tomli.loads(path.read_text("utf-8")).get("hall_bars")
    except (OSError, ValueError):  # told already
        return []
    return bars if isinstance(bars, list) else []
