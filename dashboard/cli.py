"""The command line: ``rampside COMMAND ...``.

Exit status: 0 good, 1 failed, 2 wrong usage or configuration. An error is told in its own words
on stderr; a traceback comes only with ``--debug``. What a command does stands in its own module
of :mod:`dashboard.commands`, imported when it is called, so that ``--help`` answers at once.
"""

from __future__ import annotations

import argparse
import importlib
import io
import os
import sys
import traceback
from collections.abc import Sequence
from importlib.metadata import version
from pathlib import Path
from typing import TypeAlias

from acquire.config.keys import DEFAULT_KEYS
from acquire.config.problems import ConfigError
from acquire.errors import RampsideError, UsageError

GOOD, FAILED, WRONG_USAGE = 0, 1, 2

DEFAULT_PAGE_PORT = 5410


def main(words: Sequence[str] | None = None) -> int:
    """Obey one command line (``sys.argv`` by default) and return the exit status."""
    arguments = parser().parse_args(words)
    _never_fail_on_a_letter()
    try:
        command = importlib.import_module(f"dashboard.commands.{arguments.command}")
        status = int(command.run(arguments))
        sys.stdout.flush()
        return status
    except KeyboardInterrupt:
        return _told("Stopped before the end.", FAILED, arguments.debug)
    except (ConfigError, UsageError) as error:
        return _told(str(error), WRONG_USAGE, arguments.debug)
    except RampsideError as error:
        return _told(str(error), FAILED, arguments.debug)
    except BrokenPipeError:
        _forget_stdout()
        return FAILED
    except OSError as error:
        return _told(_of_the_system(error), FAILED, arguments.debug)
    except Exception as error:  # noqa: BLE001  the last door: whatever comes is told in a sentence
        what = f"Unexpected {type(error).__name__}: {error}. This is a fault of rampside"
        return _told(f"{what}: run again with --debug and report it.", FAILED, arguments.debug)


def _never_fail_on_a_letter() -> None:
    """Names, notes and tables may hold letters that the terminal's encoding does not have."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="backslashreplace")


def _told(text: str, status: int, debug: bool) -> int:
    if debug:
        traceback.print_exc()
    print(f"rampside: {text}", file=sys.stderr)
    return status


def _of_the_system(error: OSError) -> str:
    reason = error.strerror or str(error) or type(error).__name__
    where = f" ({error.filename})" if error.filename else ""
    return f"The system refused: {reason}{where}. Mend that and run again."


def _forget_stdout() -> None:
    """Nobody reads us any more (``rampside ... | head``): no complaint about it at the end."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def parser() -> argparse.ArgumentParser:
    """Everything that can be typed."""
    root = argparse.ArgumentParser(
        prog="rampside",
        description="Sheet density, mobility and scattering time of a Hall bar "
        "while the magnet ramps.",
        epilog="Exit status: 0 good, 1 failed, 2 wrong usage or configuration.",
    )
    root.add_argument("--version", action="version", version=f"rampside {version('rampside')}")
    commands = root.add_subparsers(
        dest="command", metavar="COMMAND", required=True, title="commands"
    )
    _add_demo(commands)
    _add_watch(commands)
    _add_check(commands)
    _add_replay(commands)
    _add_read(commands)
    _add_page(commands)
    _add_keys(commands)
    return root


Commands: TypeAlias = "argparse._SubParsersAction[argparse.ArgumentParser]"  # no public name


def _add(commands: Commands, name: str, summary: str, more: str = "") -> argparse.ArgumentParser:
    text = f"{summary[:1].upper()}{summary[1:]}. {more}".strip()
    command = commands.add_parser(name, help=summary, description=text)
    command.add_argument(
        "--debug", action="store_true", help="show tracebacks and what the processes say"
    )
    return command


def _add_demo(commands: Commands) -> None:
    more = "The same processes, sockets and VISA traffic as with real instruments."
    demo = _add(commands, "demo", "watch a ramp on a simulated laboratory", more)
    demo.add_argument(
        "--config",
        metavar="CONFIG",
        type=Path,
        help="a rig with another [laboratory] than the one that comes along",
    )
    _add_watching(demo)


def _add_watch(commands: Commands) -> None:
    more = (
        "Starts a reader for each instrument, the estimator and the page, restarts what dies, "
        "and ends all of them on Ctrl-C. Nothing is changed on any instrument, unless [hold] says "
        "how the field is held and you arm it."
    )
    watch = _add(commands, "watch", "watch a ramp on your own instruments", more)
    watch.add_argument("config", metavar="CONFIG", type=Path, help="the rig, a TOML file")
    _add_watching(watch)


def _add_watching(command: argparse.ArgumentParser) -> None:
    _add_page_options(command)
    _add_folder(command)
    command.add_argument("--exit", action="store_true", help="end when the ramp is over")
    command.add_argument("--seconds", metavar="N", type=_seconds, help="end after N seconds at most")
    command.add_argument("--bell", action="store_true", help="ring when the answer is good enough")
    command.add_argument(
        "--arm-hold",
        action="store_true",
        help="arm [hold] at the start, by the run's code: the field is held when it is stable",
    )


def _add_page_options(command: argparse.ArgumentParser) -> None:
    command.add_argument(
        "--port",
        metavar="N",
        type=_port,
        default=DEFAULT_PAGE_PORT,
        help="port of the page (default %(default)s; 0: any free one)",
    )
    command.add_argument("--no-browser", action="store_true", help="open no browser")
    command.add_argument(
        "--page-address",
        metavar="A",
        default="127.0.0.1",
        help="where the page listens (default %(default)s, this computer alone; others need a secret)",
    )
    command.add_argument(
        "--page-secret",
        metavar="FILE",
        type=Path,
        help="ask for the secret in this file; made if it is missing",
    )


def _add_folder(command: argparse.ArgumentParser) -> None:
    command.add_argument(
        "--folder", metavar="F", type=Path, help="where the run goes (default: as configured)"
    )


def _add_check(commands: Commands) -> None:
    more = (
        "Validates the file, asks each instrument once, and shows what was asked, the reply, "
        "what it was read as and how long it took. Nothing is changed on any instrument."
    )
    check = _add(commands, "check", "try a configuration on the instruments", more)
    check.add_argument("config", metavar="CONFIG", type=Path, help="the rig, a TOML file")


def _add_replay(commands: Commands) -> None:
    more = (
        "A run needs nothing else. Tables measured elsewhere need --config, which says what "
        "their columns are; several tables make one run, in the order given."
    )
    replay = _add(commands, "replay", "send logged readings through the estimator", more)
    replay.add_argument("source", metavar="RUN|TABLE", type=Path, nargs="+", help="a run, or tables")
    replay.add_argument("--config", metavar="CONFIG", type=Path, help="the rig, a TOML file")
    replay.add_argument("--json", action="store_true", help="print the result as JSON")
    replay.add_argument(
        "--estimates", metavar="FILE", type=Path, help="write the table of estimates to a new file"
    )


def _add_read(commands: Commands) -> None:
    more = (
        "For another computer, with a run folder of its own. A watch whose configuration says "
        "elsewhere for this reader takes its readings over."
    )
    read = _add(commands, "read", "run one reader alone", more)
    read.add_argument("config", metavar="CONFIG", type=Path, help="the rig, a TOML file")
    read.add_argument("reader", metavar="READER", help="the reader's name in the configuration")
    _add_folder(read)
    read.add_argument(
        "--host",
        metavar="ADDRESS",
        help="this computer's address to be heard at, a number (default: as configured, else "
        "127.0.0.1); any but loopback needs keys",
    )
    read.add_argument(
        "--publish-port", metavar="N", type=_port, help="where readings go out (default: as configured)"
    )
    read.add_argument(
        "--answer-port", metavar="N", type=_port, help="where gaps are filled (default: as configured)"
    )
    read.add_argument("--seconds", metavar="N", type=_seconds, help="end after N seconds at most")


def _add_page(commands: Commands) -> None:
    page = _add(commands, "page", "show a run in the browser", "Ctrl-C ends it.")
    page.add_argument("run_folder", metavar="RUN", type=Path, help="the folder of a run")
    _add_page_options(page)


def _add_keys(commands: Commands) -> None:
    more = "Needed only where readers run on other computers without an SSH tunnel."
    keys = _add(commands, "keys", "make and accept the keys of computers", more)
    actions = keys.add_subparsers(
        dest="action", metavar="ACTION", required=True, title="actions", help="what to do"
    )
    make = actions.add_parser("make", help="make this computer's keys; overwrites nothing")
    make.add_argument("name", metavar="NAME", help="what this computer is called in configurations")
    accept = actions.add_parser("accept", help="let another computer come in")
    accept.add_argument("file", metavar="COMPUTER.pub", type=Path, help="its public key")
    for action in (make, accept, actions.add_parser("list", help="show who may come in")):
        action.add_argument(
            "--folder",
            metavar="F",
            type=Path,
            default=DEFAULT_KEYS,
            help="where this computer's keys are (default %(default)s)",
        )


def _port(text: str) -> int:
    if not text.isascii() or not text.isdigit() or int(text) > 65535:
        raise argparse.ArgumentTypeError(f"{text!r} is no port: a whole number from 0 to 65535")
    return int(text)


def _seconds(text: str) -> float:
    try:
        seconds = float(text)
    except ValueError:
        seconds = 0.0
    if not 0 < seconds < 1e9:
        raise argparse.ArgumentTypeError(f"{text!r} is no time: a number of seconds above 0")
    return seconds


if __name__ == "__main__":
    sys.exit(main())
