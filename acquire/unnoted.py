"""Settings that stand in a reader's table and not in ``instruments.json``.

A row of settings is published first and noted second; who is killed in between, or while the disk
is full, leaves the note to the next one.
"""

from __future__ import annotations

import json
from datetime import datetime, timedelta
from typing import Any

from acquire.clock import utc_text
from acquire.config.reader import ReaderSection
from acquire.journal_reader import rows_with
from acquire.readings import Reading, reading_table
from acquire.run_folder import RunFolder


def unnoted_settings(run: RunFolder, section: ReaderSection) -> list[dict[str, Any]]:
    """The entries that are missing for a reader, in order. Raises JournalError or RunError."""
    name = section.name
    table = reading_table(name, section)
    noted = {entry.get("seq") for entry in run.instruments() if entry.get("reader") == name}
    rows = rows_with(run.journal_path(table), table, b",settings,")
    readings = [Reading.from_row(name, row) for row in rows]
    return [
        _entry(run, section, one)
        for one in readings
        if one.status == "settings" and one.seq not in noted
    ]


def _entry(run: RunFolder, section: ReaderSection, row: Reading) -> dict[str, Any]:
    try:
        known = dict(json.loads(row.detail))
    except (ValueError, TypeError):  # of a reader elsewhere that says it otherwise
        known = {}
    moment = datetime.fromisoformat(run.started_utc) + timedelta(seconds=row.time_s)
    about = {"reader": row.reader, "seq": row.seq, "time_s": row.time_s, "utc": utc_text(moment)}
    resource = section.resource or (section.elsewhere.publish if section.elsewhere else "")
    return {**about, "resource": resource, "identity": None, "settings": None, **known}
