"""``rampside read CONFIG READER``: one reader alone, with a run folder of its own.

Meant for another computer: a watch whose configuration says ``elsewhere`` for this reader has its
readings on record, too, through a relay.
"""

from __future__ import annotations

import argparse
import time
from dataclasses import replace

from acquire.address import Address, parse_address
from acquire.bus import Endpoint, Subscriber, free_endpoints
from acquire.bus.addresses import check_address
from acquire.bus.keys import KeyFolder
from acquire.config import ConfigError, Rig
from acquire.config.problems import Problem, nearest_name
from acquire.config.reader import ReaderSection
from acquire.errors import KeysError, UsageError
from acquire.readings import stream_of
from acquire.relay.far_side import endpoint_elsewhere
from acquire.run_folder import RunFolder, create_run
from acquire.tables import Row, Table
from dashboard.child import python
from dashboard.configuration import load_configuration
from dashboard.earlier_runs import EarlierRuns
from dashboard.interrupts import asked_to_end
from dashboard.ports import has_address
from dashboard.streams import reading_tables
from dashboard.supervisor import ProcessNews, Role, Supervisor

LOOK_S = 0.2
END_S = 1.5
LINE_EVERY_S = 5.0


def run(arguments: argparse.Namespace) -> int:
    """Read until Ctrl-C, or for as long as asked; exit status 0."""
    rig, config = load_configuration(arguments.config)
    reader = _reader(rig, arguments.reader)
    endpoint = _endpoint(rig, reader, arguments)
    table = reading_tables(rig)[stream_of(reader.name)]
    run_folder = create_run(rig, config, [table], arguments.folder)
    with asked_to_end() as wish:
        live = run_folder.write_live({table.stream: endpoint}, "")
        end = float("inf") if arguments.seconds is None else live.monotonic_start + arguments.seconds
        with (
            Subscriber(run_folder.run_id, live.endpoints, {table.stream: table}) as subscriber,
            EarlierRuns(run_folder.path.parent, "rampside read", _say),
        ):
            one = _One(run_folder, reader, table, subscriber)
            try:
                one.start(endpoint)
                while not wish.is_set() and time.monotonic() < end:
                    one.look()
            finally:
                one.end()
    return 0


def _reader(rig: Rig, name: str) -> ReaderSection:
    names = [reader.name for reader in rig.readers]
    if name not in names:
        near = nearest_name(name, names)
        hint = f"did you mean {near}?" if near else f"it has {', '.join(names) or 'none'}."
        raise UsageError(f"The configuration has no reader {name!r}; {hint}")
    reader = rig.reader(name)
    needed = ("resource", "write_termination", "read_termination", "queries")
    missing = [key for key in needed if not getattr(reader, key)]
    if missing:
        raise ConfigError(
            f"reader {name}", [Problem(f"readers.{key}", "missing, to read here") for key in missing]
        )
    return reader


def _endpoint(rig: Rig, reader: ReaderSection, arguments: argparse.Namespace) -> Endpoint:
    """The addresses: as asked for, else as configured, else free ones on loopback.

    Raises ConfigError for keys that can't be used, BusError for an address that can't.
    """
    given = reader.elsewhere
    endpoint = free_endpoints([reader.name])[reader.name]
    if given is not None:
        endpoint = endpoint_elsewhere(rig, reader)
    publish = _address(endpoint.publish, arguments.host, arguments.publish_port)
    answer = _address(endpoint.answer, arguments.host, arguments.answer_port)
    if publish == answer:
        raise UsageError("--publish-port and --answer-port must differ.")
    if not endpoint.keys and not parse_address(publish).loopback:
        endpoint = replace(endpoint, keys=str(KeyFolder(rig.keys.folder).path))
    if endpoint.keys:
        try:
            name = KeyFolder(endpoint.keys).own_name()
            KeyFolder(endpoint.keys).for_server(endpoint.computer or name)
        except KeysError as error:
            raise ConfigError(f"reader {reader.name}", [Problem("keys", str(error))]) from None
        endpoint = replace(endpoint, computer=name)
    for text in (publish, answer):
        address = check_address(text, bool(endpoint.keys))
        if not has_address(address.host):
            raise UsageError(f"{text}: is not an address of this computer; see to --host.")
    return replace(endpoint, publish=publish, answer=answer)


def _address(text: str, host: str | None, port: int | None) -> str:
    """An address with another host or port in its place, where they are given."""
    address = parse_address(text)
    return str(replace(address if host is None else _host(host), port=port or address.port))


def _host(text: str) -> Address:
    written = f"[{text}]" if ":" in text else text
    try:
        return parse_address(f"tcp://{written}:0")
    except ValueError as error:
        raise UsageError(f"--host {text}: {error}.") from None


class _One:
    """The reader's process and what it says."""

    def __init__(
        self, run: RunFolder, reader: ReaderSection, table: Table, subscriber: Subscriber
    ) -> None:
        self._run, self._reader, self._table = run, reader, table
        self._subscriber = subscriber
        self._role = f"reader {reader.name}"
        command = python("acquire.reader", run.path, reader.name)
        self._supervisor = Supervisor(
            [Role(self._role, command, self._ready)], self._tell, lambda role, line: _say(line)
        )
        self._newest: Row | None = None
        self._count, self._shown = 0, 0.0

    def start(self, endpoint: Endpoint) -> None:
        """Start reading, and say where."""
        _say(f"Readings at {endpoint.publish}, missed ones at {endpoint.answer}")
        if endpoint.keys:
            _say(f"For the computers in {endpoint.keys}; this is {endpoint.computer!r}.")
        _say(f"Run: {self._run.path}\nCtrl-C ends it.")
        self._supervisor.start()

    def look(self) -> None:
        """Take what has come, look after the process, say how it goes now and then."""
        for _, row in self._subscriber.receive(LOOK_S):
            self._count += row[3] == "ok"
            self._newest = row
        self._supervisor.poll()
        if self._newest is not None and time.monotonic() - self._shown >= LINE_EVERY_S:
            self._shown = time.monotonic()
            _say(f"{self._count} readings; {self._words(self._newest)}")

    def end(self) -> None:
        """End the process in order and close the run."""
        try:
            self._supervisor.stop([self._role], END_S)
        finally:
            self._supervisor.close()
            self._run.end_live()

    def _ready(self, since: float) -> bool:
        heard = self._subscriber.health()[self._table.stream].last_heard_monotonic
        return heard is not None and heard > since

    def _tell(self, news: ProcessNews) -> None:
        if news.happening != "ready":
            _say(f"{news.text}.")

    def _words(self, row: Row) -> str:
        if row[3] != "ok":
            return f"{row[3]}: {row[4] or 'settings and identity were asked'}"
        return ", ".join(
            f"{value.name} {number * value.scale:.6g} {value.unit}"
            for value, number in zip(self._reader.values, row[5:])
            if isinstance(number, float)
        )


def _say(text: str) -> None:
    print(text, flush=True)
