"""The two tables that the estimator writes: estimates and events."""

from __future__ import annotations

from acquire.tables import SEQ, TIME, Column, Table

NUMBERS = (
    ("sheet_density_per_m2", "m^-2", "sheet density"),
    ("mobility_m2_per_V_s", "m^2/(V s)", "mobility"),
    ("scattering_time_s", "s", "scattering time"),
)
"""The three numbers: column, unit, name."""


def _number(name: str, unit: str, text: str) -> tuple[Column, ...]:
    return (
        Column(name, "number", unit, text),
        Column(f"{name}_u", "number", unit, f"combined standard uncertainty of the {text}"),
        Column(f"{name}_low", "number", unit, f"{text}: lower end, valid however often looked at"),
        Column(f"{name}_high", "number", unit, f"{text}: upper end, valid however often looked at"),
    )


ESTIMATES = Table(
    "estimates",
    "estimates.csv",
    "one row a field point and Hall bar; empty cells are not known yet",
    (
        SEQ,
        TIME,
        Column("hall_bar", "string", "", "name of the Hall bar"),
        Column("field_T", "number", "T", "field that the field point stands for"),
        Column("rho_xx_ohm", "number", "Ohm", "longitudinal resistivity, mean over the field point"),
        Column("rho_xy_ohm", "number", "Ohm", "Hall resistivity, mean over the field point"),
        Column("field_points", "integer", "", "field points so far"),
        Column("used", "integer", "", "1 if the field point lies in the window of the fit"),
        *(column for number in NUMBERS for column in _number(*number)),
        Column("rho_0_ohm", "number", "Ohm", "zero-field resistivity (sheet resistance)"),
        Column("rho_0_u", "number", "Ohm", "its combined standard uncertainty"),
        Column("hall_slope_ohm_per_T", "number", "Ohm/T", "slope of the Hall line, signed"),
        Column("hall_slope_u", "number", "Ohm/T", "its combined standard uncertainty"),
        Column("hall_offset_ohm", "number", "Ohm", "Hall resistivity of the line at zero field"),
        Column("carriers", "string", "", "electrons, holes, or empty while not known"),
        Column("window_low_T", "number", "T", "window of the fit, lower magnitude of field"),
        Column("window_high_T", "number", "T", "window of the fit, upper magnitude of field"),
        Column("quick_density_per_m2", "number", "m^-2", "from the field at 6.25 kOhm"),
        Column("quick_mobility_m2_per_V_s", "number", "m^2/(V s)", "from rho_xx = rho_xy"),
        Column("verdict", "string", "", "converging or stable"),
        Column("time_to_target_s", "number", "s", "time left to the target, as the ramp goes on"),
        Column("field_to_target_T", "number", "T", "magnitude of field at which it is expected"),
        Column("field_to_target_low_T", "number", "T", "the earliest that it may be"),
        Column("field_to_target_high_T", "number", "T", "the latest; empty if not in this ramp"),
        Column("cautions", "string", "", "codes of the open cautions, joined by blanks"),
        Column("waiting_for", "string", "", "what is between this and stable"),
    ),
)

EVENTS = Table(
    "events",
    "events.csv",
    "verdicts, cautions, notes, restarts",
    (
        SEQ,
        TIME,
        Column("kind", "string", "", "verdict, caution, caution_over, note, process, run"),
        Column("hall_bar", "string", "", "the Hall bar that it concerns, empty for the run"),
        Column("code", "string", "", "stable code"),
        Column("text", "string", "", "one sentence"),
        Column("estimate_seq", "integer", "", "seq of the field point from which it holds"),
        Column("id", "string", "", "of a request, so that one sent twice is written once"),
    ),
)
