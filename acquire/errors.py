"""The tree of errors that a person may meet.

RampsideError                 its text says what happened and what to do next
  ConfigError                 acquire.config: mistakes in a configuration (exit status 2)
  UsageError                  a command line that can't be obeyed (exit status 2)
  InstrumentError             acquire.instrument: an exchange with an instrument failed
    ConnectError              nobody there, or somebody who does not prove to be the instrument
      OtherInstrument         another one than that with which the run began
    ReplyTimeout              no complete reply in time
    BadReply                  a reply that is not what was configured
    SessionLost               the line broke
  JournalError                acquire.journal: a table on disk can't be written or read
    RowError                  a row that its table does not take, whatever the disk
  BusError                    acquire.bus: an address can't be bound or used
    KeysError                 acquire.bus.keys: keys that are missing, malformed or open to others
  TableError                  acquire.table: a table measured elsewhere can't be used
  RunError                    acquire.run_folder: a folder that is not a run
  LaboratoryError             acquire.laboratory: a simulated instrument can't listen
"""

from __future__ import annotations


class RampsideError(Exception):
    """Base of all errors that are told to a person in one sentence."""


class UsageError(RampsideError):
    """A command line that can't be obeyed."""


class InstrumentError(RampsideError):
    """An exchange with an instrument failed; its session must not be used again."""


class ConnectError(InstrumentError):
    """Nobody answers at the resource, or somebody else does."""


class OtherInstrument(ConnectError):
    """Another instrument answers than that with which the run began."""


class ReplyTimeout(InstrumentError):
    """No complete reply within the configured time."""


class BadReply(InstrumentError):
    """A reply came that is not what the configuration describes."""


class SessionLost(InstrumentError):
    """The connection broke during an exchange."""


class JournalError(RampsideError):
    """A table on disk can't be written or read.

    ``reason`` says it in a few words (``disk full``) where the disk is to blame, else it is empty.
    """

    def __init__(self, text: str, reason: str = "") -> None:
        super().__init__(text)
        self.reason = reason


class RowError(JournalError):
    """A row that its table does not take; tried again it would be refused again."""


class BusError(RampsideError):
    """An address can't be bound or used."""


class KeysError(BusError):
    """Keys are missing, malformed or open to others."""


class KeyNameError(KeysError, UsageError):
    """What was given as a computer's name is none."""


class TableError(RampsideError):
    """A table measured elsewhere can't be used."""


class RunError(RampsideError):
    """A folder that is not a run, or a run that can't be used so."""


class LaboratoryError(RampsideError):
    """A simulated instrument can't listen."""
