"""A table measured elsewhere: how its text is cut into numbers and what the columns are."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, field_validator

from acquire.config.reader import Unit
from acquire.config.sections import Name, Positive, Section, Several

Column = str | Annotated[int, Field(ge=1)]
"""A column by its heading, or by its number counted from 1."""


class TableValue(Section):
    """One column. The run keeps the number as read; number times ``scale`` is in ``unit``."""

    name: Name
    column: Column
    scale: float = 1.0
    unit: Unit = "V"

    @field_validator("scale")
    @classmethod
    def _not_zero(cls, scale: float) -> float:
        if scale == 0:
            raise ValueError("must not be zero")
        return scale


class TimeColumn(Section):
    """The column with the time; number times ``scale`` is in seconds."""

    column: Column
    scale: Positive = 1.0


class TableSection(Section):
    """How to read delimited text. Signals refer to it as the reader named ``table``."""

    delimiter: Literal["auto", "tab", "comma", "semicolon", "space"] | Annotated[
        str, Field(min_length=1, max_length=1)
    ] = "auto"
    decimal: Literal[".", ","] = "."
    comment: str = "#"
    encoding: str = "auto"
    heading: bool = True
    values: Several[TableValue]
    time: TimeColumn | None = None

    @field_validator("encoding")
    @classmethod
    def _known(cls, encoding: str) -> str:
        import codecs

        if encoding != "auto":
            try:
                codecs.lookup(encoding)
            except LookupError:
                raise ValueError("is not an encoding that Python knows") from None
        return encoding
