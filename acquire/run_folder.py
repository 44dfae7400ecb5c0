"""A run on disk: a folder that a person can read, copy and open in anything.

``datapackage.json`` is written last, so a folder that has one is a run. ``live.json`` is there
while the run goes on; when its supervisor has gone without removing it, the run has crashed.
"""

from __future__ import annotations

import fcntl
import json
import os
import shutil
import time
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import asdict, replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from acquire.bus import Endpoint
from acquire.cells import RowCodec
from acquire.clock import utc_text
from acquire.config import ConfigError, Rig, parse
from acquire.data_package import descriptor
from acquire.disk import sync_folder, write_whole
from acquire.errors import RunError
from acquire.journal import read_rows
from acquire.live_run import LiveRun, boot_id
from acquire.tables import Row, Table

__all__ = ["LiveRun", "RunFolder", "boot_id", "create_run", "open_run"]


class RunFolder:
    """One run. Made by :func:`create_run` or :func:`open_run`.

    ``monotonic_start`` is ``time.monotonic()`` at the run's start where this process has
    created the run, else None.
    """

    def __init__(
        self,
        path: Path,
        started_utc: str,
        rig: Rig,
        config_bytes: bytes,
        monotonic_start: float | None = None,
    ) -> None:
        self.path = path
        self.run_id = path.name
        self.started_utc = started_utc
        self.rig = rig
        self.config_bytes = config_bytes
        self.monotonic_start = monotonic_start

    def journal_path(self, table: Table) -> Path:
        """Where a table lies. Raises RunError if that is outside the run."""
        path = self.path / table.path
        if not path.resolve().is_relative_to(self.path.resolve()):
            raise RunError(f"{table.path}: is outside the run {self.path}.")
        return path

    def rows(self, table: Table, start: int = 0) -> Iterator[Row]:
        """The complete rows of a table from number ``start`` on. Raises JournalError."""
        return read_rows(self.journal_path(table), table, start)

    def live(self) -> LiveRun | None:
        """What ``live.json`` says; None for a run that has ended in order.

        Whether somebody still watches it is :attr:`LiveRun.alive`. Raises RunError if the file
        can't be read.
        """
        path = self.path / "live.json"
        try:
            raw = json.loads(path.read_bytes())
            endpoints = {name: Endpoint(**pair) for name, pair in raw.pop("endpoints").items()}
            return LiveRun(endpoints=endpoints, **raw)
        except FileNotFoundError:
            return None
        except (OSError, ValueError, TypeError, KeyError, AttributeError) as error:
            raise RunError(f"{path}: can't be used ({error}); remove it if nothing runs.") from None

    def write_live(
        self,
        endpoints: Mapping[str, Endpoint],
        requests: str,
        monotonic_start: float | None = None,
        pid: int | None = None,
        hold: str = "",
    ) -> LiveRun:
        """Say that the run goes on, and where. Without start and pid: as this process knows them.

        Raises RunError if it can't be written.
        """
        start = self.monotonic_start if monotonic_start is None else monotonic_start
        if start is None:
            raise RunError(f"{self.path}: was not created here, so monotonic_start is needed.")
        pid = os.getpid() if pid is None else pid
        about = self.run_id, pid, start, self.started_utc, dict(endpoints), requests
        live = LiveRun(*about, boot_id(), hold)
        self._write_live(live)
        return live

    def keep_live(self, live: LiveRun) -> None:
        """Put ``live.json`` back if it is gone: without it no process could be started again.

        Raises RunError if it can't be written.
        """
        if not (self.path / "live.json").exists():
            self._write_live(live)

    def leave_unfinished(self, live: LiveRun) -> None:
        """Say that the run has ended in order, but that estimates are to be made yet.

        Raises RunError if it can't be written.
        """
        self._write_live(replace(live, unfinished=True))

    def _write_live(self, live: LiveRun) -> None:
        """What is empty is left out."""
        content = asdict(live)
        for key in ("hold", "unfinished"):
            if not content[key]:
                del content[key]
        for stream, endpoint in content["endpoints"].items():
            content["endpoints"][stream] = {key: one for key, one in endpoint.items() if one}
        self._write("live.json", content)

    def end_live(self) -> None:
        """Say that the run has ended in order. Raises RunError."""
        try:
            (self.path / "live.json").unlink(missing_ok=True)
            sync_folder(self.path)
        except OSError as error:
            raise _run_error(self.path / "live.json", "can't be removed", error) from None

    def instruments(self) -> list[dict[str, Any]]:
        """What the instruments said of themselves, in the order in which it was noted."""
        path = self.path / "instruments.json"
        try:
            entries = json.loads(path.read_bytes())
        except OSError as error:
            raise _run_error(path, "can't be read", error) from None
        except ValueError as error:
            raise RunError(f"{path}: is not JSON ({error}); put it back from a copy.") from None
        if not isinstance(entries, list):
            raise RunError(f"{path}: is not a list; put it back from a copy.")
        return entries

    def note_instrument(self, entry: Mapping[str, Any]) -> None:
        """Add an entry to ``instruments.json``; several processes may do so at once.

        It takes the place of an entry for the same reader and row (``seq``), if there is one.
        Raises RunError if it can't be written.
        """
        try:
            with open(self.path / "config.toml", "rb") as lock:  # a file that is never replaced
                fcntl.flock(lock, fcntl.LOCK_EX)
                before = self.instruments() if (self.path / "instruments.json").exists() else []
                self._write("instruments.json", _with(before, dict(entry)))
        except OSError as error:
            raise _run_error(self.path / "instruments.json", "can't be locked", error) from None

    def _write(self, name: str, content: object) -> None:
        try:
            write_whole(self.path / name, _json(content))
        except OSError as error:
            raise _run_error(self.path / name, "can't be written", error) from None


def _with(entries: list[dict[str, Any]], entry: dict[str, Any]) -> list[dict[str, Any]]:
    place = [entry.get("reader"), entry.get("seq")]
    for index in range(len(entries) - 1, -1, -1):
        if None not in place and [entries[index].get("reader"), entries[index].get("seq")] == place:
            return [*entries[:index], entry, *entries[index + 1 :]]
    return [*entries, entry]


def create_run(
    rig: Rig, config_bytes: bytes, tables: Sequence[Table], folder: Path | None = None
) -> RunFolder:
    """Make the folder of a new run, which starts now.

    It goes into ``folder``, or else where the configuration says, and is named by the start in
    UTC and the run's title. Raises RunError if it can't be made.
    """
    monotonic_start, started = time.monotonic(), datetime.now(UTC)
    parent = Path(rig.run.folder) if folder is None else Path(folder)
    path: Path | None = None
    try:
        path = _new_folder(parent, f"{started:%Y-%m-%d_%H%M%S}_{rig.run.title}")
        sync_folder(path.parent)
        run = RunFolder(path, utc_text(started), rig, config_bytes, monotonic_start)
        (path / "readings").mkdir()
        write_whole(path / "config.toml", config_bytes)
        write_whole(path / "instruments.json", _json([]))
        for table in tables:
            target = run.journal_path(table)
            target.parent.mkdir(parents=True, exist_ok=True)
            write_whole(target, RowCodec(table).header)
        package = descriptor(run.run_id, rig.run.title, run.started_utc, tables)
        write_whole(path / "datapackage.json", _json(package))
    except OSError as error:
        if path is not None:
            shutil.rmtree(path, ignore_errors=True)  # what is not whole is no run, and was made here
        raise _run_error(parent, "a run can't be made there", error) from None
    return run


def open_run(path: str | Path) -> RunFolder:
    """Open a run that has ended, goes on, or has crashed. Raises RunError if it is not a run."""
    path = Path(path).absolute()
    try:
        package = json.loads((path / "datapackage.json").read_bytes())
        started_utc = package["created"]
        datetime.fromisoformat(started_utc)
        config_bytes = (path / "config.toml").read_bytes()
        rig = parse(config_bytes, str(path / "config.toml"))
    except ConfigError as error:
        raise RunError(f"{path}: its configuration is not accepted. {error}") from None
    except OSError as error:
        raise _run_error(path, "is not a run", error) from None
    except (ValueError, TypeError, KeyError) as error:
        raise RunError(f"{path}: its datapackage.json is not that of a run ({error!r}).") from None
    return RunFolder(path, started_utc, rig, config_bytes)


def _new_folder(parent: Path, name: str) -> Path:
    """A folder that was not there before: -2, -3 and so on are added to a name that was."""
    parent = parent.absolute()
    parent.mkdir(parents=True, exist_ok=True)
    number = 1
    while True:
        path = parent / (name if number == 1 else f"{name}-{number}")
        try:
            path.mkdir()
        except FileExistsError:
            number += 1
            continue
        return path


def _json(content: object) -> bytes:
    return (json.dumps(content, indent=2, ensure_ascii=False, allow_nan=False) + "\n").encode()


def _run_error(path: Path, what: str, error: OSError) -> RunError:
    return RunError(f"{path}: {what} ({error.strerror or error}).")
