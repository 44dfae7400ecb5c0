"""``rampside replay``: logged readings, or tables measured elsewhere, through the estimator."""

from __future__ import annotations

import argparse
import json
import sys

from acquire.errors import UsageError
from acquire.run_folder import open_run
from acquire.table import MeasuredTable, read_table
from analyse.estimate_table import ESTIMATES
from dashboard.bad_end import close_if_ended_badly
from dashboard.configuration import load_configuration
from dashboard.progress_bar import counted
from dashboard.replay import Replayed, count_readings, logged_readings, replay
from dashboard.words import fitting, told

BAD_ROWS_SHOWN = 5


def run(arguments: argparse.Namespace) -> int:
    """Replay and print what came out; exit status 0."""
    replayed = _of_tables(arguments) if arguments.config is not None else _of_run(arguments)
    if arguments.json:
        print(json.dumps(replayed.result, indent=2, allow_nan=False))
    else:
        print(fitting(told(replayed.summary), sys.stdout.encoding))
    return 0


def _of_run(arguments: argparse.Namespace) -> Replayed:
    if len(arguments.source) > 1:
        raise UsageError("Several tables need --config CONFIG; runs are replayed one at a time.")
    run = open_run(arguments.source[0])
    _say(close_if_ended_badly(run, "rampside replay"))
    total = count_readings(run)
    replayed = replay(
        run.run_id,
        run.rig,
        lambda maker: counted(logged_readings(run, maker.readers), total, "readings"),
        run.rows(ESTIMATES),
        arguments.estimates,
    )
    _say(compared(replayed))
    return replayed


def _of_tables(arguments: argparse.Namespace) -> Replayed:
    rig, _ = load_configuration(arguments.config)
    if rig.table is None:
        raise UsageError(
            f"{arguments.config} has no [table] that says what the columns are; "
            "a run is replayed without --config."
        )
    table = read_table(rig.table, arguments.source)
    _say("\n".join([*table.notes, *bad_rows(table)]))
    return replay(
        arguments.source[0].stem,
        rig,
        lambda maker: counted(table.readings, len(table.readings), "readings"),
        copy=arguments.estimates,
    )


def bad_rows(table: MeasuredTable) -> list[str]:
    """The first rows that can't be used, and how many more there are."""
    shown = [f"  {row}" for row in table.bad_rows[:BAD_ROWS_SHOWN]]
    left = len(table.bad_rows) - len(shown)
    return [*shown, f"  and {left} more rows that can't be used"] if left else shown


def compared(replayed: Replayed) -> str:
    """What a replay says of the estimates that were logged."""
    if replayed.differs_at is not None:
        return (
            f"The estimates differ from those in the run's folder from row {replayed.differs_at} "
            "on; were they made by another version of rampside?"
        )
    more = replayed.estimates - (replayed.logged or 0)
    text = f"All {replayed.logged} estimates in the run's folder came out again to the last bit"
    return f"{text}, and {more} that it does not have." if more else f"{text}."


def _say(text: str) -> None:
    if text:
        print(text, file=sys.stderr)
