"""A table measured elsewhere: how its text is cut into numbers and what the columns are."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, field_validator, model_validator

from acquire.config.reader import Unit
from acquire.config.sections import Name, Positive, Section, Several

Column = Annotated[str, Field(pattern=r"\S")] | Annotated[int, Field(ge=1)]
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


IN_NUMBERS = frozenset("0123456789+-.eEdD")


class TableSection(Section):
    """How to read delimited text. Signals refer to it as the reader named ``table``.

    ``heading``: whether a line above the numbers has the columns' headings; without one, columns
    are given by number.
    """

    delimiter: Literal["auto", "tab", "comma", "semicolon", "space"] | Annotated[
        str, Field(min_length=1, max_length=1)
    ] = "auto"
    decimal: Literal[".", ","] = "."
    comment: str = "#"
    encoding: str = "auto"
    heading: bool = True
    values: Several[TableValue]
    time: TimeColumn | None = None

    @field_validator("delimiter")
    @classmethod
    def _separates(cls, delimiter: str) -> str:
        if delimiter in IN_NUMBERS or delimiter in '"\r\n':
            raise ValueError("must not be a character of numbers, a quote or a line's end")
        return delimiter

    @field_validator("comment")
    @classmethod
    def _not_in_numbers(cls, comment: str) -> str:
        if comment != comment.strip() or comment in IN_NUMBERS or comment in ('"', ","):
            raise ValueError("must not be blank, a quote or a character of numbers")
        return comment

    @field_validator("encoding")
    @classmethod
    def _known(cls, encoding: str) -> str:
        if encoding != "auto":
            try:
                "1".encode(encoding)
            except (LookupError, UnicodeError):
                raise ValueError("is not an encoding of text that Python knows") from None
        return encoding

    @model_validator(mode="after")
    def _fits_together(self) -> TableSection:
        if not self.values:
            raise ValueError("values: a table needs at least one value")
        columns = [value.column for value in self.values]
        if self.time is not None:
            columns.append(self.time.column)
        named = [column for column in columns if isinstance(column, str)]
        if named and not self.heading:
            raise ValueError(f"heading = false needs columns by number, not {named[0]!r}")
        if self.comment and self.comment == self.delimiter:
            raise ValueError("comment and delimiter must differ")
        return self
