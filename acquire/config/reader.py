"""Readers: where an instrument is, what to ask it, how to read its reply."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, field_validator, model_validator

from acquire.address import KEYS_NEEDED, parse_address
from acquire.config.block import Block
from acquire.config.sections import Name, NotNegative, Positive, Section, Several

Unit = Literal["V", "A", "T", "Ohm", "K", "Hz", "s", "1"]


class Value(Section):
    """One number in a reply. ``position`` counts the reply's fields from 1.

    The journal keeps the number as read; number times ``scale`` is in ``unit``, and so are
    ``lowest``, ``highest`` and ``overload_above`` (a magnitude).
    """

    name: Name
    position: Annotated[int, Field(ge=1, le=64)]
    scale: float = 1.0
    unit: Unit = "V"
    lowest: float | None = None
    highest: float | None = None
    overload_texts: Several[str] = ()
    overload_above: Positive | None = None

    @field_validator("scale")
    @classmethod
    def _not_zero(cls, scale: float) -> float:
        if scale == 0:
            raise ValueError("must not be zero")
        return scale

    @model_validator(mode="after")
    def _range(self) -> Value:
        if self.lowest is not None and self.highest is not None and self.lowest >= self.highest:
            raise ValueError("lowest must be below highest")
        return self


class OverloadBits(Section):
    """A field of the reply that is a status word: any of ``bits`` set means overload."""

    position: Annotated[int, Field(ge=1, le=64)]
    bits: Annotated[int, Field(ge=1)]


class Setting(Section):
    """A setting to ask the instrument for, with a table from code to value where it has codes."""

    name: Name
    query: Annotated[str, Field(min_length=1)]
    unit: str = ""
    scale: float = 1.0
    codes: dict[str, float | int | str] | None = None


class Identity(Section):
    """The question that proves who is there. The reply must match ``pattern`` (regular expression,
    searched for)."""

    query: Annotated[str, Field(min_length=1)] = "*IDN?"
    pattern: str = ""

    @field_validator("pattern")
    @classmethod
    def _compiles(cls, pattern: str) -> str:
        import re

        try:
            re.compile(pattern)
        except re.error as error:
            raise ValueError(f"is not a regular expression: {error}") from None
        return pattern


class Proof(Section):
    """A question, sent after those of each reading, that has one answer only: ``reply``."""

    query: Annotated[str, Field(min_length=1)]
    reply: Annotated[str, Field(min_length=1)]


class SerialLine(Section):
    """Settings of a serial line (ASRL resources only)."""

    baud_rate: Annotated[int, Field(gt=0)] = 9600
    data_bits: Annotated[int, Field(ge=5, le=8)] = 8
    stop_bits: Literal[1, 2] = 1
    parity: Literal["none", "odd", "even"] = "none"


class Connection(Section):
    """How an instrument is reached, how lines end, and the question that proves who is there."""

    resource: str = ""
    visa_library: str = "@py"
    write_termination: str = ""
    read_termination: str = ""
    encoding: Literal["ascii", "latin-1", "utf-8"] = "ascii"
    timeout_ms: Annotated[int, Field(ge=10, le=60_000)] = 1000
    serial: SerialLine | None = None
    identity: Identity = Identity()


class ReaderSection(Connection):
    """One instrument, read by one process.

    ``queries`` are sent one after the other for each reading; the fields of their replies,
    split at ``separator``, are counted through. ``fields`` is how many there must be.
    With ``block`` the one query empties a buffer of many samples, each of ``fields`` numbers.
    With ``elsewhere`` (publish and answer address) the reader runs on its own, started by
    ``rampside read``, and its stream is only listened to.
    """

    name: Name
    queries: Several[Annotated[str, Field(min_length=1)]] = ()
    separator: Annotated[str, Field(min_length=1)] = ","
    fields: Annotated[int, Field(ge=1, le=64)] = 1
    period_s: Annotated[float, Field(ge=0.005, le=3600)] = 0.2
    values: Several[Value]
    overload: OverloadBits | None = None
    proof: Proof | None = None
    block: Block | None = None
    settings: Several[Setting] = ()
    settings_period_s: NotNegative = 0.0
    elsewhere: Elsewhere | None = None

    @model_validator(mode="after")
    def _complete(self) -> ReaderSection:
        if not self.values:
            raise ValueError("values: a reader needs at least one value")
        if self.elsewhere is None:
            needed = ["resource", "write_termination", "read_termination", "queries"]
            if self.block is not None and self.block.unasked:
                needed.remove("queries")
            missing = [key for key in needed if not getattr(self, key)]
            if missing:
                raise ValueError(f"missing: {', '.join(missing)}")
        last = max(value.position for value in self.values)
        if self.overload is not None:
            last = max(last, self.overload.position)
        if self.block is not None:
            last = max(last, self.block.counter_position or 0)
            self._check_block(self.block)
        if last > self.fields:
            raise ValueError(f"position {last} is beyond the reply's fields = {self.fields}")
        return self

    def _check_block(self, block: Block) -> None:
        if len(self.queries) > 1:
            raise ValueError("block: one query empties the buffer; take the others away")
        if block.unasked and (self.settings_period_s or self.proof is not None):
            raise ValueError(
                "block.unasked: nothing can be asked while blocks come by themselves; take "
                "settings_period_s and proof away"
            )
        name = block.sample_period_setting or block.sample_rate_setting
        if name is not None and name not in [setting.name for setting in self.settings]:
            raise ValueError(f"block: {name!r} is none of the reader's settings")


class Elsewhere(Section):
    """The two addresses of a reader that was started by itself (``rampside read``).

    ``computer``: the one that it runs on, known by the public key of this name; needed for
    addresses that are not on loopback.
    """

    publish: str
    answer: str
    computer: Name | None = None

    @field_validator("publish", "answer")
    @classmethod
    def _is_an_address(cls, text: str) -> str:
        if parse_address(text).port == 0:
            raise ValueError("needs a port from 1 on, which both sides know")
        return text

    @model_validator(mode="after")
    def _two(self) -> Elsewhere:
        if self.publish == self.answer:
            raise ValueError("publish and answer must be different addresses")
        for text in (self.publish, self.answer):
            if self.computer is None and not parse_address(text).loopback:
                raise ValueError(f"{text} is {KEYS_NEEDED}")
        return self


ReaderSection.model_rebuild()
