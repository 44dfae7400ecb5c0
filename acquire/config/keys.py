"""Keys: where this computer's are."""

from __future__ import annotations

from typing import Annotated

from pydantic import Field

from acquire.config.sections import Section

DEFAULT_KEYS = "~/.config/rampside/keys"


class KeysSection(Section):
    """The folder that ``rampside keys`` fills; used where a reader elsewhere names a computer."""

    folder: Annotated[str, Field(min_length=1)] = DEFAULT_KEYS
