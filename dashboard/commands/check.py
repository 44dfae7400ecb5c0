"""``rampside check CONFIG``: try a configuration on the instruments, changing nothing."""

from __future__ import annotations

import argparse

from acquire.config import Rig
from acquire.config.hold import HoldSection
from acquire.config.reader import ReaderSection
from acquire.hold.words import what_is_expected, what_is_sent, what_stands
from acquire.probe import Exchange, Probe, probe
from acquire.reply import escaped
from dashboard.configuration import check_keys, load_configuration
from dashboard.outlook import lag_lines, target_lines


def run(arguments: argparse.Namespace) -> int:
    """Check and say what was found; exit status 1 if an instrument failed."""
    rig, _ = load_configuration(arguments.config)
    check_keys(rig)
    print(f"{arguments.config}: no mistakes. {_contents(rig)}")
    if rig.table is not None:
        print("It describes a table: nothing to ask. Try it by rampside replay TABLE --config.")
        return 0
    probes = {}
    for reader in rig.readers:
        print(f"\n{_heading(reader)}", flush=True)
        if reader.elsewhere is None:
            probes[reader.name] = probe(reader)
            print("\n".join(probe_lines(probes[reader.name])))
    if rig.hold is not None:
        print("\n" + "\n".join(hold_lines(rig.hold)))
    print("\n" + "\n".join([*lag_lines(rig, probes), *target_lines(rig, probes)]))
    failed = [name for name, one in probes.items() if not one.good]
    print("\n" + _verdict(failed, rig))
    return 1 if failed else 0


def hold_lines(hold: HoldSection) -> list[str]:
    """How the field would be held; nothing is opened or sent for it."""
    return [
        f"hold: not tried. Sent once, when armed and stable, or when armed and asked for: "
        f"{what_is_sent(hold)}",
        f"  before it: {escaped(hold.identity.query)}, to be answered by something that has "
        f'"{escaped(hold.identity.pattern)}" in it',
        f"  expected: {what_is_expected(hold)}",
        f"  held if: {what_stands(hold)}",
    ]


def probe_lines(one: Probe) -> list[str]:
    """What was asked of an instrument, what came back, and what it was read as."""
    return [line for exchange in one.exchanges for line in _exchange_lines(exchange)]


def _exchange_lines(exchange: Exchange) -> list[str]:
    took = f"{1000 * exchange.took_s:.0f} ms"
    reply = f'"{escaped(exchange.raw)}"' if exchange.raw else "no reply"
    first = f"  {exchange.what}: asked {escaped(exchange.asked)}, got {reply} after {took}"
    if exchange.error is not None:
        return [first, f"    FAILED: {exchange.error}"]
    return [first, f"    read as {escaped(exchange.meaning or 'nothing', 200)}"]


def _contents(rig: Rig) -> str:
    bars = ", ".join(bar.name for bar in rig.hall_bars)
    readers = ", ".join(reader.name for reader in rig.readers)
    return f"Hall bars: {bars}." + (f" Readers: {readers}." if readers else "")


def _heading(reader: ReaderSection) -> str:
    if reader.elsewhere is not None:
        return (
            f"{reader.name}: read elsewhere, heard at {reader.elsewhere.publish}; not asked here"
        )
    each = f"a reading every {reader.period_s:g} s, waiting up to {reader.timeout_ms} ms a question"
    return f"{reader.name} at {reader.resource}: {each}"


def _verdict(failed: list[str], rig: Rig) -> str:
    if not failed:
        return "All instruments answered as configured. Nothing was changed on any of them."
    text = f"Failed: {', '.join(failed)}. Mend what is said above and check again."
    if rig.laboratory is not None:
        text += " The simulated laboratory runs only during rampside demo."
    return text
