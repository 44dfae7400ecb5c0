"""All named scenarios, in the order of the table: importing a module puts its own into the list."""

from __future__ import annotations

from bench import sample_scenarios, rig_scenarios  # isort: skip
from bench.case import SCENARIOS, Case, make

__all__ = ["SCENARIOS", "Case", "make", "names", "rig_scenarios", "sample_scenarios"]


def names() -> list[str]:
    """The scenarios' names, those by sample and ramp first."""
    return list(SCENARIOS)
