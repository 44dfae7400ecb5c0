"""From TOML text to a frozen :class:`Rig`, or to every mistake at once."""

from __future__ import annotations

import json
import re
from collections.abc import Iterable
from dataclasses import replace
from pathlib import Path
from types import UnionType
from typing import Any, Union, get_args, get_origin

import tomli
from pydantic import BaseModel, ValidationError

from acquire.config.problems import ConfigError, Problem, nearest_name
from acquire.config.references import check_references
from acquire.config.rig import Rig

BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")
LONGEST_FOUND = 80


def load(path: str | Path) -> tuple[Rig, bytes]:
    """Read and validate a configuration file.

    Returns the frozen configuration and the file's bytes, which a run keeps as they are.
    Raises :class:`ConfigError` listing every mistake, also when the file can't be read.
    """
    path = Path(path)
    try:
        data = path.read_bytes()
    except OSError as error:
        reason = error.strerror or str(error)
        raise ConfigError(str(path), [Problem("file", f"can't be read: {reason}")]) from None
    return parse(data, str(path)), data


def parse(data: bytes, source: str = "configuration") -> Rig:
    """Validate the bytes of a configuration. Raises :class:`ConfigError`."""
    try:
        raw = tomli.loads(data.decode("utf-8-sig"))  # some editors put a mark of it in front
    except UnicodeDecodeError as error:
        raise ConfigError(source, [Problem(f"byte {error.start}", "is not UTF-8")]) from None
    except (ValueError, RecursionError) as error:  # numbers too long, arrays in arrays in...
        raise ConfigError(source, [Problem("TOML", str(error))]) from None
    return validate(raw, source)


def validate(raw: dict[str, Any], source: str = "configuration") -> Rig:
    """Validate a configuration that is a dict already. Raises :class:`ConfigError`."""
    problems: list[Problem] = []
    rig = None
    try:
        rig = Rig.model_validate(raw)
    except ValidationError as error:
        problems += _merged(_problem(dict(item), raw) for item in error.errors(include_url=False))
    problems += check_references(raw)
    if problems:
        raise ConfigError(source, problems)
    assert rig is not None
    return rig


def _problem(item: dict[str, Any], raw: dict[str, Any]) -> Problem:
    place = _inside(item["loc"], raw)
    path = _path(place)
    kind = item["type"]
    if kind == "extra_forbidden":
        known = _known_keys(place[:-1])
        return Problem(path, "unknown key", None, nearest_name(str(place[-1]), known))
    if kind == "missing":
        return Problem(path, "missing")
    rule = item["msg"].removeprefix("Value error, ")
    return Problem(path, rule[:1].lower() + rule[1:], _shown(item["input"]))


def _merged(problems: Iterable[Problem]) -> list[Problem]:
    """One problem a place: where several kinds of values are allowed, each has its rule."""
    merged: dict[str, Problem] = {}
    for problem in problems:
        if problem.path in merged:
            rule = f"{merged[problem.path].rule}, or {problem.rule}"
            problem = replace(merged[problem.path], rule=rule)
        merged[problem.path] = problem
    return list(merged.values())


def _shown(value: object) -> str | None:
    """A value that was found, in one short line; None for a table or an array."""
    if isinstance(value, dict | list | tuple):
        return None
    try:
        text = repr(value)
    except ValueError:
        return "a number of thousands of digits"
    return text if len(text) <= LONGEST_FOUND else f"{text[:LONGEST_FOUND]}..."


def _inside(place: tuple[str | int, ...], raw: Any) -> tuple[str | int, ...]:
    """The part of pydantic's location that is in the file: branches of unions are not."""
    real: list[str | int] = []
    node = raw
    for position, part in enumerate(place):
        in_array = isinstance(node, list) and isinstance(part, int) and part < len(node)
        if in_array or (isinstance(node, dict) and part in node):
            node = node[part]
        elif position == len(place) - 1 and isinstance(node, dict):
            node = None
        else:
            continue
        real.append(part)
    return tuple(real)


def _path(place: tuple[str | int, ...]) -> str:
    text = ""
    for part in place:
        if isinstance(part, int):
            text += f"[{part}]"
        else:
            key = part if BARE_KEY.fullmatch(part) else json.dumps(part)
            text += f".{key}" if text else key
    return text or "configuration"


def _known_keys(place: tuple[str | int, ...]) -> list[str]:
    model: type[BaseModel] | None = Rig
    for part in place:
        if isinstance(part, int) or model is None:
            continue
        field = model.model_fields.get(part)
        model = _model_in(field.annotation) if field is not None else None
    return list(model.model_fields) if model is not None else []


def _model_in(annotation: object) -> type[BaseModel] | None:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    if get_origin(annotation) in (tuple, Union, UnionType):
        for inner in get_args(annotation):
            found = _model_in(inner)
            if found is not None:
                return found
    return None
