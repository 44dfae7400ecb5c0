"""``rampside replay``: logged readings, or tables measured elsewhere, through the estimator."""

from __future__ import annotations

import argparse
import json
import sys

from acquire.config import load
from acquire.errors import UsageError
from acquire.run_folder import open_run
from analyse.estimate_table import ESTIMATES
from dashboard.progress_bar import counted
from dashboard.replay import Replayed, count_readings, logged_readings, replay
from dashboard.words import told


def run(arguments: argparse.Namespace) -> int:
    """Replay and print what came out; exit status 0."""
    replayed = _of_tables(arguments) if arguments.config is not None else _of_run(arguments)
    if arguments.json:
        print(json.dumps(replayed.result, indent=2, allow_nan=False))
    else:
        print(told(replayed.summary))
    return 0


def _of_run(arguments: argparse.Namespace) -> Replayed:
    if len(arguments.source) > 1:
        raise UsageError("Several tables need --config CONFIG; runs are replayed one at a time.")
    run = open_run(arguments.source[0])
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
    from acquire.table import read_table

    rig, _ = load(arguments.config)
    if rig.table is None:
        raise UsageError(
            f"{arguments.config} has no [table] that says what the columns are; "
            "a run is replayed without --config."
        )
    table = read_table(rig.table, arguments.source)
    return replay(
        arguments.source[0].stem,
        rig,
        lambda maker: counted(table.readings, len(table.readings), "readings"),
        copy=arguments.estimates,
    )


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
    print(text, file=sys.stderr)
