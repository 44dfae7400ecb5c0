"""The streams of a run and their tables."""

from __future__ import annotations

from acquire.config import Rig
from acquire.readings import reading_table, stream_of
from acquire.tables import Table
from analyse.estimate_table import ESTIMATES, EVENTS


def reading_tables(rig: Rig) -> dict[str, Table]:
    """The table of each reader, by stream; the columns of a table measured elsewhere as one."""
    sources = {reader.name: reader for reader in rig.readers} | (
        {} if rig.table is None else {"table": rig.table}
    )
    return {stream_of(name): reading_table(name, source) for name, source in sources.items()}


def run_tables(rig: Rig) -> dict[str, Table]:
    """Every table of a run, by stream."""
    return reading_tables(rig) | {table.stream: table for table in (ESTIMATES, EVENTS)}
