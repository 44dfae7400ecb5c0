"""What terminal and page say alike about holding the field."""

from __future__ import annotations

from acquire.config.hold import HoldSection
from acquire.reply import escaped

CAUTIONS = (
    "Holding keeps the magnet at field: its stored energy, its stray field (iron, implants, cards) "
    "and its use of cryogens stay as they are until somebody ramps it down.",
    "A superconducting magnet can quench while it is held, too: voltages, forces, and much helium "
    "gas at once. Cryogens displace the oxygen that you breathe without a warning (asphyxiation), "
    "burn the skin, and burst what keeps them in when they boil.",
    "This sends one line to the supply, once, and then only looks at the field readings. It is no "
    "safety device: it does not watch the magnet, and it can fail. Be able to pause by hand.",
    "The rules of your own laboratory, and the people trained for its magnet, decide whether this "
    "may be used and whether the field may be left standing; nothing that this program shows does.",
)
"""The cautions for whoever is about to arm it. README and configs/ carry the same in their words."""

GOOD_ENOUGH = "The answer is good enough: pause the ramp."

STATES = {
    "off": "not armed",
    "armed": "armed",
    "begun": "about to ask the supply",
    "checking": "asked; does the field stand?",
    "held": "held",
    "alarm": "ALARM",
}
"""States of the keeper in words."""


def what_is_sent(section: HoldSection) -> str:
    """The bytes that go out, and where to, for a person to look at."""
    line = escaped(section.command + section.write_termination, 300)
    return f'"{line}" to {section.resource}'


def what_is_expected(section: HoldSection) -> str:
    """The reply that is waited for."""
    if section.reply:
        return f'a reply that matches "{section.reply}" within {section.timeout_ms} ms'
    again = escaped(section.identity.query)
    return f"no reply; {again} is asked again after it, to see that the supply still answers"


def what_stands(section: HoldSection) -> str:
    """What proves that the field is held."""
    if section.standing_T is not None:
        limit = f"all field readings lie within {section.standing_T:g} T of each other"
    else:
        limit = f"the field readings move by less than {section.standing_T_per_min:g} T/min"
    return f"{limit} for {section.standing_for_s:g} s, within {section.stands_within_s:g} s"
