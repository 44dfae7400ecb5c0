"""What the simulated instruments truly answered, on record, for whoever wants to compare.

A CSV file: ``monotonic_s`` (``time.monotonic()`` of this machine), ``instrument``, ``question``,
``reply`` as the instrument meant it, ``spoiled``: the misbehaviour by which it was no true reading
or did not leave as it was meant, empty where nothing acted. A late or split reply is not spoiled.
"""

from __future__ import annotations

import csv
import io
import os
from pathlib import Path

from acquire.closing import Closing
from acquire.errors import LaboratoryError
from acquire.laboratory.faults import Treatment

COLUMNS = ("monotonic_s", "instrument", "question", "reply", "spoiled")


class TruthLog(Closing):
    """Adds to a file, so that one laboratory after the other may write it; each line is there
    before its reply leaves.

    ``began`` : ``time.monotonic()`` at the laboratory's start. Raises LaboratoryError.
    """

    def __init__(self, path: Path, began: float) -> None:
        self._began = began
        try:
            self._fd = os.open(path, os.O_WRONLY | os.O_APPEND | os.O_CREAT, 0o644)
        except OSError as error:
            raise LaboratoryError(f"{path}: can't be opened ({error.strerror}).") from None
        if not os.fstat(self._fd).st_size:
            self._write(COLUMNS)

    def add(
        self, instrument: str, question: str, reply: str, time_s: float, treatment: Treatment
    ) -> None:
        """A reply that is about to leave, or not, at ``time_s`` of the laboratory."""
        spoiled = [
            name
            for name, acts in (
                ("overload", treatment.overload),
                ("garble", treatment.garble is not None),
                ("drop", treatment.drop),
                ("disconnect", treatment.cut),
            )
            if acts
        ]
        moment = repr(self._began + time_s)
        self._write((moment, instrument, question, reply, " ".join(spoiled)))

    def close(self) -> None:
        """Close the file."""
        os.close(self._fd)

    def _write(self, cells: tuple[str, ...]) -> None:
        line = io.StringIO()
        csv.writer(line, lineterminator="\n").writerow(cells)
        os.write(self._fd, line.getvalue().encode())
