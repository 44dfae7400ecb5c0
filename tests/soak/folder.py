"""The folder of a run at its end: all rows there, all heard there, all of it again by a replay."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass, field

from acquire.cells import RowCodec
from acquire.readings import stream_of
from acquire.run_folder import RunFolder
from acquire.tables import Row
from analyse.estimate_table import ESTIMATES, EVENTS
from analyse.replay import replay_readings
from analyse.row_maker import DETERMINED, RowMaker
from dashboard.replay import logged_readings
from dashboard.streams import run_tables


@dataclass
class Found:
    """What the folder holds, by stream; ``faults``: what must not be."""

    rows: dict[str, list[Row]] = field(default_factory=dict)
    statuses: Counter[str] = field(default_factory=Counter)
    events: Counter[str] = field(default_factory=Counter)
    heard: int = 0
    faults: list[str] = field(default_factory=list)


def look_at(run: RunFolder, heard: Mapping[str, list[Row]]) -> Found:
    """Read all tables and compare them with what was heard and with a replay."""
    found = Found()
    for stream, table in run_tables(run.rig).items():
        rows = found.rows[stream] = list(run.rows(table))  # raises where a number is missing
        if run.journal_path(table).read_bytes()[-1:] != b"\n":
            found.faults.append(f"{table.path} ends in a torn line")
        _compare_heard(found, stream, rows, heard[stream])
        if stream.startswith("readings/"):
            found.statuses.update(str(row[3]) for row in rows)
    found.events.update(f"{row[2]} {row[4]}" for row in found.rows[EVENTS.stream])
    _compare_replay(found, run)
    _compare_notes(found, run)
    left = [path.name for path in run.path.rglob("*") if path.name.startswith(".")]
    if left or (run.path / "live.json").exists():
        found.faults.append(f"left in the folder: {left or 'live.json'}")
    return found


def _compare_heard(found: Found, stream: str, rows: list[Row], heard: list[Row]) -> None:
    found.heard += len(heard)
    if [row[0] for row in heard] != list(range(len(heard))):
        found.faults.append(f"{stream}: heard with gaps or twice")
    lost = sum(a != b for a, b in zip(heard, rows)) + max(len(heard) - len(rows), 0)
    if lost:
        found.faults.append(f"{stream}: {lost} rows were published and are not on record")


def _compare_replay(found: Found, run: RunFolder) -> None:
    maker = RowMaker(run.rig)
    made: dict[str, list[Row]] = {ESTIMATES.stream: [], EVENTS.stream: []}
    codecs = {ESTIMATES.stream: RowCodec(ESTIMATES), EVENTS.stream: RowCodec(EVENTS)}
    for record in replay_readings(maker, logged_readings(run, maker.readers)):
        made[record.stream].append(codecs[record.stream].canonical(record.cells))
    logged = {
        ESTIMATES.stream: [row[1:] for row in found.rows[ESTIMATES.stream]],
        EVENTS.stream: [row[1:] for row in found.rows[EVENTS.stream] if row[2] in DETERMINED],
    }
    for stream, rows in made.items():
        if rows != logged[stream]:
            differing = sum(a != b for a, b in zip(rows, logged[stream]))
            counts = f"{len(rows)} replayed, {len(logged[stream])} logged, {differing} differ"
            found.faults.append(f"{stream}: other than a replay makes them ({counts})")


def _compare_notes(found: Found, run: RunFolder) -> None:
    """Each settings row has its entry in instruments.json."""
    noted = {(entry["reader"], entry["seq"]) for entry in run.instruments()}
    for reader in run.rig.readers:
        rows = found.rows[stream_of(reader.name)]
        told = {(reader.name, row[0]) for row in rows if row[3] == "settings"}
        if told - noted:
            found.faults.append(f"settings that are not in instruments.json: {told - noted}")

