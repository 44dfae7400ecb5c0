"""Watching one run from its folder's making to its end; what ``watch`` and ``demo`` both do."""

from __future__ import annotations

import time
import uuid
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from threading import Event

from acquire.bus import Endpoint, Subscriber, ask, free_endpoints
from acquire.config import Rig
from acquire.errors import BusError, RunError, UsageError
from acquire.run_folder import LiveRun, RunFolder, create_run
from analyse.estimate_table import ESTIMATES, EVENTS
from dashboard import roles
from dashboard.bad_end import complete
from dashboard.browser import open_page
from dashboard.configuration import check_keys
from dashboard.earlier_runs import EarlierRuns
from dashboard.event_sender import EventSender
from dashboard.hangs import Hangs
from dashboard.hold_watch import HoldWatch
from dashboard.page_address import HERE, PageAddress
from dashboard.ports import page_port
from dashboard.progress import Progress
from dashboard.ramp_end import RampEnd
from dashboard.streams import run_tables
from dashboard.summary import Summary
from dashboard.supervisor import ProcessNews, Role, Supervisor
from dashboard.view import Moment, View
from dashboard.words import told

LOOK_S = 0.1  # the longest wait between two looks at signals and processes
SHOW_S = 0.25
# The end, in order, has 3 s in all, of which our own interpreter needs some at its end. So much
# for all steps together, the least for the last of them, and at most so much for the others; on
# a machine with nothing else to do they need 0.5 s.
END_S, LAST_S, READERS_END_S, EVENTS_END_S, FINISH_S, COMPLETE_S = 2.0, 0.3, 1.1, 0.1, 0.6, 0.3
LABORATORY_S = 15.0  # how long the simulated instruments may take to be there


@dataclass(frozen=True)
class WatchPlan:
    """What is to be watched, and how. ``laboratory``: start the simulated one of the rig too;
    ``arm_hold``: let holding the field be armed at the start; ``bell``: ring when it is stable."""

    rig: Rig
    config: bytes
    folder: Path | None = None
    port: int = 0
    page: PageAddress = HERE
    browser: bool = False
    exit_when_over: bool = False
    seconds: float | None = None
    laboratory: bool = False
    arm_hold: bool = False
    bell: bool = False


def watch(plan: WatchPlan, view: View, wish: Event) -> tuple[RunFolder, Summary]:
    """Make a run, watch it until it is over or ``wish`` is set, and end everything in order.

    Raises UsageError for a configuration that has nothing to watch, ConfigError for keys of
    readers elsewhere that can't be used, and what can go wrong before anything was started; after
    that processes are restarted rather than given up.
    """
    if not plan.rig.readers:
        raise UsageError(
            "This configuration has a table, not readers: rampside replay TABLE --config CONFIG."
        )
    if plan.exit_when_over and plan.rig.ramp is None:
        raise UsageError("--exit needs a [ramp] in the configuration, which says when it is over.")
    if plan.arm_hold and plan.rig.hold is None:
        raise UsageError("--arm-hold needs a [hold] in the configuration, which says what is sent.")
    check_keys(plan.rig)
    port = page_port(plan.port, plan.page.address)
    endpoints, requests = endpoints_of(plan.rig)
    run = create_run(plan.rig, plan.config, list(run_tables(plan.rig).values()), plan.folder)
    with HoldWatch(run, view, plan.bell) as hold:
        live = run.write_live(endpoints, requests, hold=hold.address)
        watcher = _Watcher(plan, run, live, port, view, hold)
        try:
            watcher.go_on(wish)
        finally:
            watcher.end()
    return run, watcher.progress.summary


def endpoints_of(rig: Rig) -> tuple[dict[str, Endpoint], str]:
    """Where each stream meets its listeners, and the address of the estimator's inbox.

    Free addresses, all different. Raises BusError if there are none.
    """
    endpoints = free_endpoints([*run_tables(rig), "requests"])
    requests = endpoints.pop("requests").answer
    return endpoints, requests


class _Watcher:
    """One run under way: the processes, what they say, and when to stop."""

    def __init__(
        self, plan: WatchPlan, run: RunFolder, live: LiveRun, port: int, view: View, hold: HoldWatch
    ) -> None:
        self._plan, self._run, self._live, self._view = plan, run, live, view
        self._hold = hold
        self._address, self._address_told = plan.page.url(port), plan.page.told(port)
        self.progress = Progress(run.run_id, plan.rig)
        ramp = plan.rig.ramp
        self._ramp_end = None if ramp is None else RampEnd(ramp.path_T, ramp.duration_s)
        self._field_time_s = -1.0
        self._said_over = False
        self._finished = False
        self._to_open = plan.browser
        self._hangs = Hangs(plan.rig, time.monotonic())
        self._subscriber = Subscriber(run.run_id, live.endpoints, run_tables(plan.rig))
        self._health = self._subscriber.health()
        self._events = EventSender(live.requests, ask)
        self._supervisor = Supervisor(self._roles(port), self._process_news, self._hear)
        self._earlier: EarlierRuns | None = None

    def go_on(self, wish: Event) -> None:
        """Start everything and look after it until something ends it."""
        self._view.say(f"Page: {self._address_told}\nRun:  {self._run.path}")
        if self._plan.laboratory:
            self._start_laboratory(wish)
        self._hold.begin(self._events.send, self._plan.arm_hold, wish)
        if not wish.is_set():
            names = self._supervisor.names
            self._supervisor.start(name for name in names if name != roles.LABORATORY)
            self._earlier = EarlierRuns(self._run.path.parent, "rampside watch", self._view.say)
        shown = 0.0
        while not (wish.is_set() or self._time_is_up() or self._ended_with_the_ramp()):
            self._listen()
            self._supervisor.poll()
            for role, why in self._hangs.look(self._health, time.monotonic()):
                self._supervisor.replace(role, why)
            over = self._ramp_end is not None and self._ramp_end.over
            self._hold.look(self.progress, over, self._states())
            if time.monotonic() - shown >= SHOW_S:
                shown = time.monotonic()
                self._view.show(self.progress, self._moment())
                with suppress(RunError):  # the whole folder is gone: that is told by who writes there
                    self._run.keep_live(self._live)

    def _start_laboratory(self, wish: Event) -> None:
        """Have the instruments there before anybody asks them; go on without if they don't come."""
        deadline = time.monotonic() + LABORATORY_S
        self._supervisor.start([roles.LABORATORY])
        while self._supervisor.state(roles.LABORATORY) != "ready":
            if time.monotonic() > deadline or wish.wait(0.05):
                return
            self._supervisor.poll()

    def end(self) -> None:
        """End all processes in order within 3 s, and leave the run's folder whole."""
        deadline = time.monotonic() + END_S
        try:
            self._end_in_order(deadline)
        finally:
            self._supervisor.close()
            self._subscriber.close()
            left_s = deadline + COMPLETE_S - time.monotonic()
            if self._finished or complete(self._run, self._live, left_s):
                self._run.end_live()
            else:
                with suppress(RunError):
                    self._run.leave_unfinished(self._live)
                self._view.say(
                    "The last estimates are missing: rampside replay "
                    f"{self._run.path} makes them out of the readings and closes the run."
                )
        self._catch_up()

    def _end_in_order(self, deadline: float) -> None:
        if self._earlier is not None:
            self._earlier.close()
        readers = [roles.reader_role(reader) for reader in self._plan.rig.readers]
        self._hold.end()
        self._supervisor.ask_to_end([roles.PAGE])  # it has nothing to lose, and takes its time
        killed = self._supervisor.stop(readers, READERS_END_S)
        spare_s = deadline - LAST_S - FINISH_S - time.monotonic()
        unsent = self._events.close(max(EVENTS_END_S, spare_s))
        self._finished = self._finish_estimates(min(FINISH_S, deadline - LAST_S - time.monotonic()))
        others = [name for name in self._supervisor.names if name not in readers]
        killed += self._supervisor.stop(others, deadline - time.monotonic())
        if killed:
            self._view.say(f"Had to be killed, did not end in time: {', '.join(killed)}.")
        if unsent:
            self._view.say(f"{unsent} of the messages above are not in the run's events.")

    def _catch_up(self) -> None:
        """Take the rows that were written after the last look, from the run's folder."""
        for table in (ESTIMATES, EVENTS):
            first = self._health[table.stream].last_seq + 1
            for row in self._run.rows(table, first):
                self.progress.take(table.stream, row)

    def _finish_estimates(self, within_s: float) -> bool:
        """Have the estimator work up all that the readers have written."""
        if self._supervisor.pid(roles.ESTIMATOR) is None:
            return self._supervisor.state(roles.ESTIMATOR) == "not started"
        message = {"kind": "run", "code": "finish", "text": "the run ends", "id": uuid.uuid4().hex}
        try:
            reply = ask(self._live.requests, message, within_s)
        except BusError:
            return False
        if not reply["ok"]:
            return False
        if reply.get("differing"):
            self._view.say(
                f"{reply['differing']} rows came out otherwise after a restart than before it: "
                "this is a fault of rampside; keep the run's folder and report it."
            )
        return True

    def _roles(self, port: int) -> list[Role]:
        found = roles.roles_of(self._run, port, self._last_heard, self._plan.page)
        if self._plan.laboratory:
            config = self._run.path / "config.toml"
            ports = roles.laboratory_ports(self._plan.rig)
            found.insert(0, roles.laboratory_role(config, ports))
        return found

    def _last_heard(self, stream: str) -> float | None:
        return self._health[stream].last_heard_monotonic

    def _listen(self) -> None:
        for stream, row in self._subscriber.receive(LOOK_S):
            self.progress.take(stream, row)
            self._hangs.news(stream, time.monotonic())
            self._note_field()
        self._health = self._subscriber.health()
        self._note_recording()

    def _note_recording(self) -> None:
        """Have in the run's events who could not record; they are written once there is room."""
        begun, over = self.progress.hear(self._health)
        for stream in begun:
            why = self.progress.unrecorded[stream]
            text = f"{stream}: cannot record, so nothing is published ({why})"
            self._events.send("process", "cannot_record", text)
            self._hold.unexpected(text)
        for stream in over:
            self._events.send("process", "recorded_again", f"{stream}: is recorded again")

    def _note_field(self) -> None:
        time_s, field_T = self.progress.field_time_s, self.progress.field_T
        if time_s is not None and field_T is not None and time_s > self._field_time_s:
            self._field_time_s = time_s
            self._hold.field(time_s, field_T)
            if self._ramp_end is not None:
                self._ramp_end.add(time_s, field_T)

    def _ended_with_the_ramp(self) -> bool:
        if self._ramp_end is None or not self._ramp_end.over:
            return False
        if not self._said_over:
            self._said_over = True
            self._view.say("The ramp is over.")
            if not self._plan.exit_when_over:
                self._view.say(told(self.progress.summary))
                self._view.say(f"Run:  {self._run.path}\nCtrl-C ends the watch and the page.")
        return self._plan.exit_when_over

    def _time_is_up(self) -> bool:
        seconds = self._plan.seconds
        return seconds is not None and time.monotonic() - self._live.monotonic_start >= seconds

    def _states(self) -> dict[str, str]:
        return {name: self._supervisor.state(name) for name in self._supervisor.names}

    def _moment(self) -> Moment:
        time_s = time.monotonic() - self._live.monotonic_start
        return Moment(time_s, self._states(), self._supervisor.restarts, self._hold.alarm)

    def _process_news(self, news: ProcessNews) -> None:
        self._hangs.begins_anew(news.role, time.monotonic())
        if news.happening != "ready":
            self._view.say(f"{news.text}.")
            self._events.send("process", news.happening, news.in_full)
            if news.happening != "back":
                self._hold.unexpected(news.text)
        if news.role == roles.PAGE and news.happening in ("ready", "back"):
            self._show_page()

    def _show_page(self) -> None:
        if self._to_open:
            self._to_open = False
            if not open_page(self._address):
                self._view.say(f"No browser to open here: open {self._address} yourself.")

    def _hear(self, role: str, line: str) -> None:
        self._view.say(line if line.startswith(f"{role}:") else f"{role}: {line}")
