"""From what a block holds to samples: equally many numbers each."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from acquire.config.block import Block
from acquire.config.reader import ReaderSection
from acquire.errors import BadReply
from acquire.reply import escaped, split_fields

Sample = Sequence[str | float]

_KINDS = {"int16": "i2", "int32": "i4", "float32": "f4", "float64": "f8"}


def samples_in(section: ReaderSection, block: Block, data: bytes) -> list[Sample]:
    """The samples of a block, oldest first, each of ``section.fields`` texts or numbers.

    Raises BadReply if the block does not hold whole samples.
    """
    if block.format == "text":
        return _texts(section, data)
    size = np.dtype(_KINDS[block.format]).itemsize * section.fields
    if len(data) % size:
        raise BadReply(
            f"a block of {len(data)} bytes does not hold whole samples of {size} bytes "
            f"({section.fields} {block.format} each): was it cut, or is fields or format wrong?"
        )
    order = "<" if block.byte_order == "little" else ">"
    numbers = np.frombuffer(data, order + _KINDS[block.format]).astype(float)
    return list(numbers.reshape(-1, section.fields).tolist())


def _texts(section: ReaderSection, data: bytes) -> list[Sample]:
    try:
        text = data.decode(section.encoding)
    except UnicodeError:
        raise BadReply(f"the block {escaped(data)!r} is not {section.encoding}") from None
    if not text.strip():
        return []
    fields = split_fields(section, text)
    if len(fields) % section.fields:
        raise BadReply(
            f"{len(fields)} fields are no whole samples of {section.fields}: {escaped(text)!r}"
        )
    return [
        fields[begin : begin + section.fields] for begin in range(0, len(fields), section.fields)
    ]
