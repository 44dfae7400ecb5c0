"""What all sections of a configuration have in common."""

from __future__ import annotations

from typing import Annotated, TypeVar

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field


class Section(BaseModel):
    """A frozen part of the configuration: types are not converted, unknown keys are refused."""

    model_config = ConfigDict(strict=True, extra="forbid", frozen=True, allow_inf_nan=False)


T = TypeVar("T")


def _as_tuple(value: object) -> object:
    return tuple(value) if isinstance(value, list) else value


Several = Annotated[tuple[T, ...], BeforeValidator(_as_tuple)]
"""A TOML array, kept as a tuple."""

Name = Annotated[str, Field(pattern=r"^[A-Za-z][A-Za-z0-9_-]{0,39}$")]
"""A name that is also a file name and a column name."""

Positive = Annotated[float, Field(gt=0)]
NotNegative = Annotated[float, Field(ge=0)]
Share = Annotated[float, Field(gt=0, lt=1)]
