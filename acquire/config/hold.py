"""Holding the field: how the magnet supply is asked to pause its ramp, and what proves that it did.

Nothing here is ever sent unless a person armed it for the run; see :mod:`acquire.hold`.
"""

from __future__ import annotations

import re
from typing import Annotated, Any

from pydantic import Field, field_validator, model_validator

from acquire.config.problems import Problem
from acquire.config.reader import Connection
from acquire.config.sections import Positive

LEAST_READINGS = 6
"""So many field readings are needed to call a field standing."""

SLOWER = 0.5
"""A standing field must move less than this share of the planned ramp."""


class HoldSection(Connection):
    """The one line that pauses the ramp, and the field readings that prove it.

    ``reply``: a regular expression that the whole reply must match; empty where none comes.
    The field stands when, over ``standing_for_s``, it moves by less than ``standing_T_per_min``
    in either half, or all readings lie within ``standing_T`` of each other. It has to do so
    within ``stands_within_s`` after the command.
    """

    command: Annotated[str, Field(min_length=1, max_length=200)]
    reply: str = ""
    stands_within_s: Annotated[float, Field(gt=0, le=600)]
    standing_for_s: Positive = 3.0
    standing_T_per_min: Positive | None = None
    standing_T: Positive | None = None

    @field_validator("command")
    @classmethod
    def _one_line(cls, command: str) -> str:
        if not command.isprintable() or command != command.strip():
            raise ValueError("must be one line of printable characters without blanks at its ends")
        return command

    @field_validator("reply")
    @classmethod
    def _compiles(cls, reply: str) -> str:
        try:
            re.compile(reply)
        except re.error as error:
            raise ValueError(f"is not a regular expression: {error}") from None
        return reply

    @model_validator(mode="after")
    def _complete(self) -> HoldSection:
        keys = ("resource", "write_termination", "read_termination")
        missing = [key for key in keys if not getattr(self, key)]
        if missing:
            raise ValueError(f"missing: {', '.join(missing)}")
        if any(end in self.command for end in (self.write_termination, self.read_termination)):
            raise ValueError("command: must not contain what ends a line; it is added when sent")
        try:
            self.command.encode(self.encoding)
        except UnicodeError:
            raise ValueError(f"command: can't be written as encoding = {self.encoding!r}") from None
        if not self.identity.pattern:
            raise ValueError("identity.pattern: needed here, so that nobody else gets the command")
        if (self.standing_T_per_min is None) == (self.standing_T is None):
            raise ValueError("give either standing_T_per_min or standing_T")
        if self.stands_within_s <= self.standing_for_s:
            raise ValueError("stands_within_s must be longer than standing_for_s")
        return self


def check_hold(raw: dict[str, Any]) -> list[Problem]:
    """What is wrong between [hold] and the rest of a configuration. Never raises."""
    hold = raw.get("hold")
    if not isinstance(hold, dict):
        return []
    problems = []
    if not raw.get("readers"):
        problems.append(Problem("hold", "needs [[readers]]: field readings prove that it stands"))
    if "ramp" not in raw:
        problems.append(Problem("hold", "needs a [ramp]: it tells what is expected of the field"))
    return problems + _too_loose(hold, raw) + _too_few_readings(hold, raw) + _shared(hold, raw)


def _too_loose(hold: dict[str, Any], raw: dict[str, Any]) -> list[Problem]:
    """A field that ramps as planned must not count as standing."""
    rate, for_s = _number(raw.get("ramp"), "rate_T_per_min"), _number(hold, "standing_for_s", 3.0)
    if rate is None or for_s is None:
        return []
    limits = {"standing_T_per_min": SLOWER * rate, "standing_T": SLOWER * rate * for_s / 60.0}
    return [
        Problem(f"hold.{key}", f"must be below {limit:.3g}: the planned ramp would pass for standing",
                repr(hold[key]))
        for key, limit in limits.items()
        if (found := _number(hold, key)) is not None and found > limit
    ]  # fmt: skip


def _too_few_readings(hold: dict[str, Any], raw: dict[str, Any]) -> list[Problem]:
    for_s, field = _number(hold, "standing_for_s", 3.0), raw.get("field")
    name = field.get("reader") if isinstance(field, dict) else None
    periods = [
        _number(reader, "period_s", 0.2)
        for reader in _tables(raw.get("readers"))
        if name is not None and reader.get("name") == name
    ]
    needed_s = LEAST_READINGS * max((period or 0.0 for period in periods), default=0.0)
    if for_s is None or for_s >= needed_s:
        return []
    rule = f"must hold {LEAST_READINGS} field readings: {needed_s:g} s"
    return [Problem("hold.standing_for_s", rule, f"{for_s:g}")]


def _shared(hold: dict[str, Any], raw: dict[str, Any]) -> list[Problem]:
    """A serial line has room for one program."""
    resource = hold.get("resource")
    if not isinstance(resource, str) or not resource.upper().startswith("ASRL"):
        return []
    return [
        Problem("hold.resource", f"reader {reader.get('name')!r} has this serial line already, "
                "which takes one program at a time", repr(resource))
        for reader in _tables(raw.get("readers"))
        if str(reader.get("resource")).upper() == resource.upper()
    ]  # fmt: skip


def _number(section: object, key: str, default: float | None = None) -> float | None:
    value = section.get(key, default) if isinstance(section, dict) else None
    if not isinstance(value, int | float) or isinstance(value, bool):
        return None
    return float(value) if 0 < value < 1e300 else None


def _tables(node: object) -> list[dict[str, Any]]:
    return [item for item in node if isinstance(item, dict)] if isinstance(node, list) else []
