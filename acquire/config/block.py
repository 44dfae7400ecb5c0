"""Readings that an instrument hands over many at a time, as ``[readers.block]``."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from acquire.config.sections import Name, NotNegative, Positive, Section

Format = Literal["text", "int16", "int32", "float32", "float64"]


class Block(Section):
    """A buffer that the reader's one query empties: samples in a row, oldest first.

    Each sample is ``fields`` numbers, which the values' positions count. As ``text`` they are
    parted by ``separator``; all other formats are the payload of a definite-length block of
    IEEE 488.2, after which the line's terminator comes if it is ``terminated``.

    The instrument takes a sample every ``sample_period_s``, or by a setting of its own: a period
    in seconds or a rate in hertz. With ``counter_position`` each sample has its number, which goes
    up by one. The newest sample is as old as ``latency_s`` when the query comes, at least.

    With ``unasked`` the blocks come by themselves once the query, if there is one, was sent; each
    is on its way for ``latency_s``, and for up to ``jitter_s`` longer.
    """

    format: Format
    byte_order: Literal["little", "big"] = "big"
    sample_period_s: Positive | None = None
    sample_period_setting: Name | None = None
    sample_rate_setting: Name | None = None
    counter_position: Annotated[int, Field(ge=1, le=64)] | None = None
    latency_s: NotNegative = 0.0
    terminated: bool = True
    unasked: bool = False
    jitter_s: Positive = 0.05

    @model_validator(mode="after")
    def _one_period(self) -> Block:
        ways = (self.sample_period_s, self.sample_period_setting, self.sample_rate_setting)
        if sum(way is not None for way in ways) != 1:
            raise ValueError(
                "give exactly one of sample_period_s, sample_period_setting, sample_rate_setting"
            )
        return self
