"""Lines of text to replies, in the manner of IEEE 488.2.

A line holds one command or several, parted by ``;``; a command is a word, in capitals or not, and
behind a blank what it needs. One that ends with ``?`` is a question. The answers to all questions
of a line come in one line, parted by ``;``. Every instrument knows

==================  ==========================================================
``*IDN?``           who it is: maker, model, serial number, version
``*CLS``            forget all errors
``*ESR?``           which kinds of errors there were (bits), and forget them
``*OPC?``           1, when all before it is done
``SYSTEM:ERROR?``   the oldest error, ``0,"No error"`` if there is none
==================  ==========================================================

A command that is not understood is answered at once, other than on most real instruments:
``ERROR -113,"Undefined header"`` (numbers and words of SCPI 1999.0, volume 2, chapter 21), so that
whoever writes a configuration sees what is wrong with it.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Callable, Mapping
from dataclasses import dataclass

MOST_ERRORS = 20
_COMMAND_ERROR, _EXECUTION_ERROR = 32, 16  # bits of the event status register


@dataclass(frozen=True)
class Moment:
    """When a command is carried out, and whether the instrument has to pretend an overload."""

    time_s: float
    overload: bool = False


Command = Callable[[Moment, str], str | None]


class CommandError(Exception):
    """A command that can't be carried out: SCPI's number and words for it."""

    def __init__(self, number: int, words: str) -> None:
        super().__init__(f'{number},"{words}"')
        self.bit = _COMMAND_ERROR if number > -200 else _EXECUTION_ERROR


class Interpreter:
    """Understands the commands of one instrument. ``commands``: by word, in capitals."""

    def __init__(self, identity: str, commands: Mapping[str, Command]) -> None:
        self._commands: dict[str, Command] = {
            "*IDN?": lambda moment, text: identity,
            "*CLS": self._forget,
            "*ESR?": self._events,
            "*OPC?": lambda moment, text: "1",
            "SYSTEM:ERROR?": self._oldest,
            **commands,
        }
        self._errors: deque[str] = deque(maxlen=MOST_ERRORS)
        self._bits = 0

    def answer(self, line: str, moment: Moment, obeys: bool = True) -> str | None:
        """Carry out a line; the reply, or None if nothing was asked.

        Without ``obeys`` only questions are.
        """
        replies = []
        for command in line.split(";"):
            if command.strip() and (obeys or is_question(command)):
                replies.append(self._one(command, moment))
        told = [reply for reply in replies if reply is not None]
        return ";".join(told) if told else None

    def _one(self, text: str, moment: Moment) -> str | None:
        word, _, rest = text.strip().partition(" ")
        try:
            command = self._commands.get(word.upper())
            if command is None:
                raise CommandError(-113, "Undefined header")
            if is_question(word) and rest.strip():
                raise CommandError(-108, "Parameter not allowed")
            return command(moment, rest.strip())
        except CommandError as error:
            self._errors.append(str(error))
            self._bits |= error.bit
            return f"ERROR {error}"

    def _forget(self, moment: Moment, text: str) -> None:
        self._errors.clear()
        self._bits = 0

    def _events(self, moment: Moment, text: str) -> str:
        bits, self._bits = self._bits, 0
        return str(bits)

    def _oldest(self, moment: Moment, text: str) -> str:
        return self._errors.popleft() if self._errors else '0,"No error"'


def is_question(command: str) -> bool:
    """Whether a command asks for an answer."""
    return command.strip().partition(" ")[0].endswith("?")


def asks(line: str) -> bool:
    """Whether any command of a line does."""
    return any(is_question(command) for command in line.split(";"))


def number(text: str) -> float:
    """The finite number that a command needs. Raises CommandError."""
    if not text:
        raise CommandError(-109, "Missing parameter")
    try:
        value = float(text)
    except ValueError:
        raise CommandError(-104, "Data type error") from None
    if not math.isfinite(value):
        raise CommandError(-222, "Data out of range")
    return value


def place(text: str, count: int) -> int:
    """The whole number from 0 to ``count`` - 1 that a command needs. Raises CommandError."""
    value = number(text)
    if not (value.is_integer() and 0 <= value < count):
        raise CommandError(-222, "Data out of range")
    return int(value)
