"""Run the bench: ``python tests/bench/run.py [--ramps 500] [--scenario NAME] [--jobs 2]``.

Every ramp is a function of its scenario's name and its number, so a run with other numbers of
jobs or of ramps gives the same ramps. ``--index`` runs single ramps and says all about them.
A whole run takes hours; with ``--keep FOLDER`` it goes on where it was broken off.
"""

from __future__ import annotations

import argparse
import os
import sys
import time
from collections.abc import Iterator
from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context
from pathlib import Path

for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")          # the cores go to the ramps
for _folder in Path(__file__).resolve().parents[1:3]:     # tests/, and the top for analyse
    if str(_folder) not in sys.path:
        sys.path.insert(0, str(_folder))

from bench import table
from bench.scenarios import make, names
from bench.store import Store
from bench.trial import Outcome, run

BATCH = 10

Found = dict[str, list[Outcome]]


def one(job: tuple[str, int]) -> Outcome:
    """One ramp of a scenario."""
    return run(make(*job))


def outcomes(scenarios: list[str], ramps: int, jobs: int, store: Store) -> Found:
    """All ramps of the scenarios, over processes; says on stderr when a scenario is done."""
    found: Found = {}
    for name in scenarios:
        found[name] = store.load(name, ramps)
    work = [(name, index) for name in scenarios for index in range(len(found[name]), ramps)]
    start = time.monotonic()
    for done in _all(work, jobs):
        so_far = found[done.scenario]
        so_far.append(done)
        if len(so_far) == ramps:
            store.save(done.scenario, so_far)
            missed = "; ".join(table.failings(so_far)) or "kept"
            print(f"{time.monotonic() - start:7.0f} s  {done.scenario}: {missed}",
                  file=sys.stderr, flush=True)
    return {name: found[name] for name in scenarios}


def _all(work: list[tuple[str, int]], jobs: int) -> Iterator[Outcome]:
    """Outcomes in the order of the work."""
    if jobs <= 1:
        yield from map(one, work)
        return
    with ProcessPoolExecutor(jobs, mp_context=get_context("spawn")) as pool:
        yield from pool.map(one, work, chunksize=BATCH)


def report(found: Found, took_s: float) -> str:
    """Tables and notes as Markdown."""
    kept = table.markdown(table.PROMISES, [table.promises(ramps) for ramps in found.values()])
    beside = table.markdown(
        table.COMPARISONS, [table.comparisons(ramps) for ramps in found.values()]
    )
    lines = ["## What was promised", "", kept, "", EXPLAINED, "", "## In comparison", "", beside,
             "", COMPARED, "", "## Notes", ""]
    for name, ramps in found.items():
        lines += [f"- {name}: {note}" for note in table.notes(ramps)]
    each = [out.seconds for ramps in found.values() for out in ramps]
    per_ramp = 1e3 * sum(each) / len(each)
    took = f"{len(each)} ramps in {took_s:.0f} s; the estimator took {per_ramp:.0f} ms a ramp."
    lines += ["", took, ""]
    return "\n".join(lines)


EXPLAINED = (
    "Shares in per cent with Monte Carlo standard errors. \"held\": the interval held the truth; "
    "\"at every point\": all intervals of the whole ramp did, all three numbers. \"stop / oracle\": "
    "field swept at stopping over that at which an oracle that knows the noise is good to the "
    "target with a fixed-sample interval; \"stop / fair\": over the largest of that and what the "
    "rules on straightness, crossing and nearness of zero demand of the same oracle, and the field "
    "at which ten independent readings after settling have told the noise; medians and 90 % "
    "quantiles. Errors in per cent."
)
COMPARED = (
    "Coverage of the density's nominal 95 % interval where each rule stopped, in per cent, and the "
    "median of its field over the oracle's. The last two columns: variance at the end of the ramp "
    "over the Cramer-Rao bound."
)


def single(name: str, index: int) -> str:
    """All about one ramp."""
    case = make(name, index)
    out = run(case)
    rows = [f"{key}: {value}" for key, value in vars(out).items()]
    return "\n".join([repr(case.sample), repr(case.rig), repr(case.profile)[:600], *rows])


def main(arguments: list[str] | None = None) -> int:
    """The command. 0 if every bar is met, 1 if not, 2 for an unknown scenario."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").split("\n", 1)[0])
    parser.add_argument("--ramps", type=int, default=500)
    parser.add_argument("--scenario", action="append", metavar="NAME", help="may be given again")
    parser.add_argument("--jobs", type=int, default=os.cpu_count() or 1)
    parser.add_argument("--markdown", type=Path, metavar="FILE")
    parser.add_argument("--keep", type=Path, metavar="FOLDER",
                        help="keep outcomes here, and take those that this very code made before")
    parser.add_argument("--index", type=int, action="append", help="single ramps, in full")
    parser.add_argument("--list", action="store_true", help="name the scenarios and end")
    given = parser.parse_args(arguments)
    if given.list:
        print("\n".join(names()))
        return 0
    chosen = given.scenario or names()
    unknown = [name for name in chosen if name not in names()]
    if unknown:
        print(f"no such scenario: {', '.join(unknown)}; there are {', '.join(names())}",
              file=sys.stderr)
        return 2
    if given.index is not None:
        print("\n\n".join(single(name, index) for name in chosen for index in given.index))
        return 0
    start = time.monotonic()
    found = outcomes(chosen, given.ramps, given.jobs, Store(given.keep))
    text = report(found, time.monotonic() - start)
    print(text)
    if given.markdown is not None:
        given.markdown.write_text(text, encoding="utf-8")
    return 1 if any(table.failings(ramps) for ramps in found.values()) else 0


if __name__ == "__main__":
    raise SystemExit(main())
