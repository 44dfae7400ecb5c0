"""The soak test: ``python tests/soak/run.py [--disturbances 200] [--seed 1]``.

Watches a ramp on the simulated laboratory while processes are killed and frozen, links cut and held
up, instruments misbehave and the disk is filled; then looks for readings lost, wrong readings used,
estimates other than a replay makes them, and anything left over. Prints a table of figures. With an
even seed the watch itself is killed at the end, and the next ``rampside`` has to close its run.
Exit status 0 if nothing is wrong, 1 if something is.

The seed decides what is done, to whom and for how long; how the processes take it depends on the
machine. Killing the laboratory begins its ramp anew, which costs the answer, not the truth: what it
answered before stands in its file.
"""

from __future__ import annotations

import argparse
import shutil
import socket
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from dataclasses import dataclass, field
from pathlib import Path

for _folder in Path(__file__).resolve().parents[1:3]:  # tests/, and the top for the packages
    if str(_folder) not in sys.path:
        sys.path.insert(0, str(_folder))

import psutil
from running import RAMPSIDE

from acquire.readings import stream_of
from acquire.run_folder import LiveRun, open_run
from dashboard.ports import free_ports
from soak import folder, truth
from soak.disturbances import Disturbances
from soak.full_disk import FullDisk
from soak.laboratory import Laboratory
from soak.link import LOOPBACK, Link
from soak.listener import Listener
from soak.rig import INSTRUMENTS, configuration
from soak.watched import ESTIMATOR, ROLES, Watched, until

ENDS_WITHIN_S = 3.0
FILES_MORE = 2  # an exchange that is under way when it is looked at


@dataclass
class Report:
    """Figures, in the order in which they are told, and faults."""

    figures: dict[str, object] = field(default_factory=dict)
    faults: list[str] = field(default_factory=list)

    def check(self, good: bool, fault: str) -> None:
        """A fault, unless it is good."""
        if not good:
            self.faults.append(fault)

    def text(self) -> str:
        """The table."""
        width = max(map(len, self.figures))
        lines = [f"{name:<{width}}  {value}" for name, value in self.figures.items()]
        return "\n".join([*lines, *(f"FAULT: {fault}" for fault in self.faults)])


class Soak:
    """One soak test in a folder of its own."""

    def __init__(self, place: Path, seed: int, count: int, mean_s: float, kill: bool) -> None:
        self.report = Report()
        self._place, self._seed, self._count = place, seed, count
        self._mean_s, self._kill = mean_s, kill
        self._truth = place / "truth.csv"

    def run(self, tell: Callable[[str], None]) -> Report:
        """Do it all."""
        began = time.monotonic()
        with ExitStack() as stack:
            ports = dict(zip(INSTRUMENTS, free_ports(3)))
            links = {name: stack.enter_context(Link(port)) for name, port in ports.items()}
            config = self._place / "soak.toml"
            ramp_s = self._count * self._mean_s + 20.0
            through = {name: link.port for name, link in links.items()}
            config.write_text(configuration(self._seed, ramp_s, ports, through))
            (self._place / "disk").mkdir()
            disk = FullDisk(self._place / "disk", lambda: watched.everything())
            stack.enter_context(disk)
            laboratory = stack.enter_context(Laboratory(config, self._truth, ports))
            laboratory.start()
            watched = stack.enter_context(Watched(config, disk.folder))
            try:
                self._disturb(watched, laboratory, links, disk, tell)
            finally:
                if self.report.faults or sys.exc_info()[0] is not None:
                    (self._place / "said.txt").write_text(watched.text)
                    shutil.copytree(disk.folder, self._place / "kept")
            self.report.figures["the disk was"] = disk.how
            self.report.figures["laboratories, one after the other"] = laboratory.lives
        self.report.figures["duration"] = f"{time.monotonic() - began:.0f} s"
        return self.report

    def _disturb(
        self,
        watched: Watched,
        laboratory: Laboratory,
        links: dict[str, Link],
        disk: FullDisk,
        tell: Callable[[str], None],
    ) -> None:
        watched.wait_until_all_work()
        run = open_run(watched.run)
        live = run.live()
        assert live is not None
        with Listener(run, live) as listener:
            self._until_calm(watched, listener)
            before, memory = watched.open_files(), _memory(watched)
            disturbances = Disturbances(self._seed, watched, laboratory, links, disk)
            disturbances.go_on(self._count, self._mean_s, tell)
            self._until_calm(watched, listener)
            self._look_at_processes(watched, before, memory)
            self._end(watched)
        figures = self.report.figures
        figures["disturbances"] = disturbances.counts.total()
        figures.update({f"  {what}": n for what, n in disturbances.counts.most_common()})
        self._look_for_left_overs(live, run.path)
        self._replay(run.path)
        self._look_at_folder(listener, live, watched.run)

    def _until_calm(self, watched: Watched, listener: Listener) -> None:
        """All processes are there, readings and estimates come, the page opens."""
        streams = [*map(stream_of, INSTRUMENTS), "estimates"]
        until(lambda: set(watched.processes()) == set(ROLES), "all processes are there")
        counts = {stream: len(listener.heard[stream]) for stream in streams}

        def more() -> bool:
            newest = [listener.heard[stream][-1] for stream in streams if listener.heard[stream]]
            grown = all(len(listener.heard[s]) >= counts[s] + 20 for s in streams)
            return grown and all(row[3] == "ok" for row in newest[:-1])

        until(more, f"readings and estimates come; the watch said:\n{watched.text[-3000:]}")
        until(watched.page_answers, "the page opens")

    def _look_at_processes(
        self, watched: Watched, before: dict[str, int], memory: dict[str, int]
    ) -> None:
        def grown() -> dict[str, tuple[int, int]]:
            after = watched.open_files()
            return {
                name: (count, after.get(name, 0))
                for name, count in before.items()
                if after.get(name, 0) > count + FILES_MORE
            }

        try:  # connections of peers that are gone need a moment
            until(lambda: not grown(), "", 20.0)
        except AssertionError:
            self.report.faults.append(f"open files (before, after) have grown: {grown()}")
        after, figures = watched.open_files(), self.report.figures
        for name, count in before.items():
            figures[f"open files of {name}, before and after"] = f"{count} {after.get(name)}"
        now = _memory(watched)
        for name in ("supervisor", ESTIMATOR):
            figures[f"memory of {name}, before and after"] = f"{memory[name]} {now[name]} MB"

    def _end(self, watched: Watched) -> None:
        figures = self.report.figures
        if self._kill:
            figures["its processes outlived the killed watch by (s)"] = watched.kill()
            return
        status, took_s = watched.end_in_order()
        figures["ended in order after Ctrl-C within"] = f"{took_s:.1f} s"
        self.report.check(status == 0, f"the watch ended with status {status}")
        self.report.check(took_s < ENDS_WITHIN_S, f"the end took {took_s:.1f} s")

    def _look_for_left_overs(self, live: LiveRun, path: Path) -> None:
        left = [
            " ".join(process.info["cmdline"] or ())
            for process in psutil.process_iter(["cmdline"])
            if str(path) in (process.info["cmdline"] or ())
        ]
        self.report.figures["processes left over"] = len(left)
        self.report.check(not left, f"processes left over: {left}")
        taken = [address for address in _addresses(live) if not _is_free(address)]
        self.report.figures["addresses left taken"] = len(taken)
        self.report.check(not taken, f"addresses left taken: {taken}")

    def _replay(self, path: Path) -> None:
        line = [str(RAMPSIDE), "replay", str(path)]
        done = subprocess.run(line, capture_output=True, text=True, timeout=600, check=False)
        same = "came out again to the last bit." in done.stderr and done.returncode == 0
        self.report.figures["rampside replay"] = done.stderr.strip().replace("\n", " ")
        self.report.check(same, f"rampside replay: {done.stderr}{done.stdout}")
        if self._kill:
            self.report.check("ended badly" in done.stderr, "the run was not closed and marked")

    def _look_at_folder(self, listener: Listener, live: LiveRun, path: Path) -> None:
        run, figures = open_run(path), self.report.figures
        found = folder.look_at(run, listener.heard)
        compared = truth.compare(run, live.monotonic_start, self._truth)
        for stream, rows in found.rows.items():
            figures[f"rows of {stream}"] = len(rows)
        figures["rows by status"] = dict(found.statuses.most_common())
        figures["events"] = dict(found.events.most_common())
        figures["rows heard by an independent subscriber"] = found.heard
        figures["answers of the instruments, spoiled ones"] = (compared.answers, compared.spoiled)
        figures["readings used"] = compared.ok
        figures["readings lost"] = sum("on record" in fault for fault in found.faults)
        figures["wrong readings used"] = len(compared.wrong)
        self.report.faults += found.faults + compared.wrong[:10]
        rewound = {s: h.rewound for s, h in listener.health.items() if h.rewound}
        self.report.check(not rewound, f"publishers went back: {rewound}")


def _memory(watched: Watched) -> dict[str, int]:
    processes = {"supervisor": watched.supervisor, **watched.processes()}
    return {name: one.memory_info().rss >> 20 for name, one in processes.items()}


def _addresses(live: LiveRun) -> Iterator[str]:
    yield live.requests
    for endpoint in live.endpoints.values():
        yield from (endpoint.publish, endpoint.answer)


def _is_free(address: str) -> bool:
    with socket.socket() as trial:
        trial.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            trial.bind((LOOPBACK, int(address.rpartition(":")[2])))
            trial.listen()
        except OSError:
            return False
    return True


def main(arguments: list[str] | None = None) -> int:
    """The command."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").split("\n\n", 2)[1])
    parser.add_argument("--disturbances", type=int, default=200)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--mean", type=float, default=1.2, help="seconds from one to the next")
    parser.add_argument("--quiet", action="store_true", help="do not tell each disturbance")
    given = parser.parse_args(arguments)
    place = Path(tempfile.mkdtemp(prefix="soak-"))
    soak = Soak(place, given.seed, given.disturbances, given.mean, given.seed % 2 == 0)

    def tell(text: str) -> None:
        if not given.quiet:
            print(text, file=sys.stderr, flush=True)

    report = soak.run(tell)
    print(report.text())
    if report.faults:
        print(f"Kept: {place}")
        return 1
    shutil.rmtree(place)
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
