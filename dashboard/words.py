"""The numbers of a run in words, for a terminal."""

from __future__ import annotations

from collections.abc import Iterator

from dashboard.quantities import NOT_KNOWN, QUANTITIES, ascii_text, write, write_interval
from dashboard.summary import BarSummary, Summary

NAMES = {column: quantity.name for column, quantity in QUANTITIES.items()}
"""The three numbers: column of the table of estimates, and what a person calls it."""


def told(summary: Summary) -> str:
    """What a run has found, in a few lines for each Hall bar."""
    return "\n".join(
        line for name, bar in summary.bars.items() for line in _bar_lines(name, bar, summary)
    )


def number(bar: BarSummary, column: str, units: int = 2) -> tuple[str, str]:
    """One of the three numbers with its standard uncertainty, and its interval.

    ``units``: in how many units the former is given, if it has so many.
    """
    value, u = bar.get(column), bar.get(f"{column}_u")
    if value is None or u is None:
        return NOT_KNOWN, ""
    texts = write(QUANTITIES[column], value, u).texts
    return " = ".join(texts[:units]), interval(bar, column)


def interval(bar: BarSummary, column: str) -> str:
    """The interval of one of the three numbers, without its unit; empty if it is not known."""
    value, low, high = (bar.get(f"{column}{end}") for end in ("", "_low", "_high"))
    if value is None or low is None or high is None:
        return ""
    return " to ".join(write_interval(QUANTITIES[column], value, low, high))


def numbers_of(bar: BarSummary) -> Iterator[str]:
    """The three numbers with their intervals, for one line."""
    for column, name in NAMES.items():
        value, ends = number(bar, column, 1)
        yield f"{name} {value} [{ends}]" if ends else f"{name} {value}"


def fitting(text: str, encoding: str | None) -> str:
    """Text for a file or terminal of this encoding: without what only Unicode has, if need be."""
    return text if (encoding or "").lower().startswith("utf") else ascii_text(text)


def field(field_T: float | None) -> str:
    """A field, or that there is none yet."""
    return "no field yet" if field_T is None else f"{field_T:+.4f} T"


def signed(number: float, decimals: int) -> str:
    """A number with its sign, minus as long as plus."""
    return f"{number:+.{decimals}f}".replace("-", "−")


def duration(seconds: float) -> str:
    """A time in minutes and seconds, or hours and minutes."""
    whole = round(seconds)
    if whole < 60:
        return f"{whole} s"
    if whole < 3600:
        return f"{whole // 60} min {whole % 60} s"
    return f"{whole // 3600} h {whole % 3600 // 60} min"


def left_to_target(bar: BarSummary) -> str:
    """When the target is expected to be met, as far as that is known; empty if not."""
    seconds, field_T = bar.get("time_to_target_s"), bar.get("field_to_target_T")
    if bar.verdict == "stable" or seconds is None:
        return ""
    where = "" if field_T is None else f", near {field_T:.2f} T{_range(bar)}"
    return f"about {duration(seconds)} left to the target{where}"


def _range(bar: BarSummary) -> str:
    low, high = bar.get("field_to_target_low_T"), bar.get("field_to_target_high_T")
    if low is None:
        return ""
    return f" ({low:.2f} to {high:.2f} T)" if high is not None else f" ({low:.2f} T or later)"


def _bar_lines(name: str, bar: BarSummary, summary: Summary) -> Iterator[str]:
    points = bar.get("field_points") or 0
    yield f"{name}: {_verdict(bar, summary.timed)}"
    for column, title in NAMES.items():
        value, ends = number(bar, column)
        inside = f"   {100 * summary.confidence:g} % interval {ends}" if ends else ""
        yield f"  {title:<16} {value}{inside}"
    low, high = bar.get("window_low_T"), bar.get("window_high_T")
    window = "" if low is None or high is None else f", window {low:.3f} to {high:.3f} T"
    yield f"  carriers {bar.get('carriers') or 'not known yet'}, {points} field points{window}"
    yield from _quick_lines(bar)
    for code, sentence in bar.cautions.items():
        yield f"  caution {code}: {sentence}"


def _quick_lines(bar: BarSummary) -> Iterator[str]:
    """The two quick readings of the trade, as a cross-check beside the fit (common practice)."""
    readings = (
        ("quick_density_per_m2", 1e15, "× 10¹⁵ m⁻² where the Hall resistivity is 6.25 kOhm"),
        ("quick_mobility_m2_per_V_s", 1.0, "m²/Vs where rho_xx = rho_xy"),
    )
    found = [
        f"{bar.get(column) / unit:.3g} {where}"
        for column, unit, where in readings
        if bar.get(column) is not None
    ]
    if found:
        yield f"  read off the curves {'; '.join(found)}"


def _verdict(bar: BarSummary, timed: bool) -> str:
    if bar.stable_at is not None:
        time_s, field_T = bar.stable_at
        when = f"{duration(time_s)} after the start" if timed else f"at row {time_s:.0f}"
        return f"stable since {field(field_T)}, {when}"
    waiting = bar.get("waiting_for")
    return f"converging: {waiting}" if waiting else bar.verdict

