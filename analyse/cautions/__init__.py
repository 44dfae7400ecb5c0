"""Cautions: each with a stable code, one sentence of what is seen, the likely cause, what to do.

Pure: numbers in, texts out. ``readings`` looks at one signal's readings, ``field`` at the field,
``drift`` at what happens while it stands, ``fit`` at what the fit shows.
"""

from analyse.cautions.drift import DriftWatch
from analyse.cautions.field import FieldWatch
from analyse.cautions.fit import FitFacts, fit_cautions
from analyse.cautions.readings import RoleWatch

NOTES = frozenset((
    "oscillations", "ramp_too_fast", "field_offset", "contacts_misaligned", "coarse_digit", "short_bar",
    "quick_readings_apart",
))
"""Codes of cautions that never touch the answer: told, but in the way of nothing."""

__all__ = ["NOTES", "DriftWatch", "FieldWatch", "FitFacts", "RoleWatch", "fit_cautions"]
