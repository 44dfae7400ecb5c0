"""From a configuration to estimators, and from readers' rows to their channels."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from acquire.config.hall_bar import HallBarSection
from acquire.config.hall_bar import Signal as SignalSection
from acquire.config.rig import Rig
from acquire.readings import NO_READING, Reading
from analyse.estimate import Estimate
from analyse.estimator import Estimator
from analyse.hall_bar import HallBar
from analyse.instrument_settings import (
    SettingChanges,
    SignalSettings,
    numbers_in,
    refers_to_settings,
    settings_in,
    stages_of,
)
from analyse.setup import Excitation, FieldSource, Ramp, Signal, Target, Window


@dataclass(frozen=True)
class _Route:
    """One channel of one Hall bar, fed from columns of one reader."""

    bar: str
    channel: str
    x: int
    x_scale: float
    y: int | None = None
    y_scale: float = 1.0
    section: SignalSection | None = None


class RigEstimator:
    """All Hall bars of a configuration.

    Rows of each reader must come in the order of seq; the readers may come in any order relative
    to each other. What is returned for one Hall bar does not depend on that order.
    Raises ValueError for a material that is not known.
    """

    def __init__(self, rig: Rig) -> None:
        self._rig = rig
        self.estimators = {bar.name: _estimator(rig, bar) for bar in rig.hall_bars}
        self._routes = _routes(rig)
        self._settings = {
            (route.bar, route.channel): SignalSettings(
                route.section, _signal_of(self.estimators[route.bar], route.channel)
            )
            for routes in self._routes.values()
            for route in routes
            if route.section is not None and refers_to_settings(route.section)
        }
        self.changes = SettingChanges(
            {name: [r.bar for r in routes if r.channel in ("longitudinal", "hall")]
             for name, routes in self._routes.items()}
        )

    @property
    def readers(self) -> tuple[str, ...]:
        """Names of the readers that any channel needs."""
        return tuple(self._routes)

    def take(self, reading: Reading) -> Iterator[tuple[str, Estimate]]:
        """Take one row of a reader; yields (Hall bar, estimate) for what it completes."""
        routes = self._routes.get(reading.reader, ())
        if reading.status == "settings":
            self._use_settings(reading, routes)
        if reading.status in NO_READING:
            return
        for route in routes:
            values = self._values(reading, route)
            for estimate in self.estimators[route.bar].advance(route.channel, *values):
                yield route.bar, estimate

    def end(self) -> Iterator[tuple[str, Estimate]]:
        """No more readings come from any reader; yields (Hall bar, estimate) as before."""
        for bar, estimator in self.estimators.items():
            for estimate in estimator.end():
                yield bar, estimate

    def _values(
        self, reading: Reading, route: _Route
    ) -> tuple[float, float | None, float | None, str]:
        settings = self._settings.get((route.bar, route.channel))
        if settings is not None and not settings.known:
            return reading.time_s, None, None, "no_answer"
        x = reading.values[route.x]
        y = reading.values[route.y] if route.y is not None else None
        return (
            reading.time_s,
            None if x is None else x * route.x_scale,
            None if y is None else y * route.y_scale,
            reading.status,
        )

    def _use_settings(self, reading: Reading, routes: tuple[_Route, ...]) -> None:
        known = settings_in(reading.detail)
        self.changes.take(reading, known)
        numbers = numbers_in(known)
        for route in routes:
            settings = self._settings.get((route.bar, route.channel))
            signal = settings.take(numbers, reading.time_s) if settings is not None else None
            if signal is not None:
                self.estimators[route.bar].change_signal(route.channel, *signal)


def _signal_of(estimator: Estimator, channel: str) -> Signal:
    if channel != "current":
        return estimator.setup.longitudinal if channel == "longitudinal" else estimator.setup.hall
    excitation = estimator.setup.excitation
    assert excitation is not None and excitation.measured is not None
    return excitation.measured


def _signal(section: SignalSection, resistance: bool, timed: bool) -> Signal:
    stages = None
    if section.filter is not None and timed:
        stages = stages_of(section.filter, {})
    return Signal(
        stages, section.detection, section.phase_deg, section.gain, section.sign, resistance,
        section.relative_standard_uncertainty,
    )


def _estimator(rig: Rig, bar: HallBarSection) -> Estimator:
    units = _units(rig)
    timed = rig.table is None or rig.table.time is not None

    def signal(section: SignalSection) -> Signal:
        return _signal(section, units[section.reader][section.x] == "Ohm", timed)

    excitation = None
    if bar.excitation is not None:
        given = bar.excitation
        measured = given.measured
        excitation = Excitation(
            given.current_A, given.source_V, given.series_ohm, given.contact_ohm,
            given.source_to_drain_squares,
            signal(measured) if measured is not None else None,
            measured.shunt_ohm if measured is not None else None,
            given.relative_standard_uncertainty,
        )
    ramp = rig.ramp
    target = rig.target
    return Estimator(
        HallBar(
            bar.number_of_squares, bar.material, bar.effective_mass, bar.effective_mass_source,
            bar.spin_degeneracy, bar.valley_degeneracy, bar.squares_relative_standard_uncertainty,
            bar.effective_mass_relative_standard_uncertainty,
        ),
        longitudinal=signal(bar.longitudinal),
        hall=signal(bar.hall),
        excitation=excitation,
        field=FieldSource(
            rig.field.delay_s, _longest_gap_s(rig), rig.field.relative_standard_uncertainty
        ),
        target=Target(
            target.confidence, target.sheet_density_relative, target.mobility_relative,
            target.scattering_time_relative, target.past_equal_resistivities,
        ),
        ramp=None if ramp is None else Ramp(ramp.path_T, ramp.rate_T_per_min),
        window=Window(rig.window.low_T, rig.window.high_T),
        expected_carriers=bar.expected_carriers,
    )


def _longest_gap_s(rig: Rig) -> float | None:
    if rig.field.longest_gap_s is not None:
        return rig.field.longest_gap_s
    if rig.table is not None:
        return None
    return 5.0 * rig.reader(rig.field.reader).period_s


def _units(rig: Rig) -> dict[str, dict[str, str]]:
    units: dict[str, dict[str, str]] = {
        reader.name: {value.name: value.unit for value in reader.values} for reader in rig.readers
    }
    if rig.table is not None:
        units["table"] = {value.name: value.unit for value in rig.table.values}
    return units


def _routes(rig: Rig) -> dict[str, tuple[_Route, ...]]:
    columns = {
        reader.name: [(value.name, value.scale) for value in reader.values]
        for reader in rig.readers
    }
    if rig.table is not None:
        columns["table"] = [(value.name, value.scale) for value in rig.table.values]
    routes: dict[str, list[_Route]] = {}

    def find(reader: str, name: str) -> tuple[int, float]:
        names = [known for known, _ in columns[reader]]
        index = names.index(name)
        return index, columns[reader][index][1]

    for bar in rig.hall_bars:
        field = rig.field
        routes.setdefault(field.reader, []).append(
            _Route(bar.name, "field", *find(field.reader, field.value))
        )
        sections = [("longitudinal", bar.longitudinal), ("hall", bar.hall)]
        if bar.excitation is not None and bar.excitation.measured is not None:
            sections.append(("current", bar.excitation.measured))
        for channel, section in sections:
            y = (None, 1.0) if section.y is None else find(section.reader, section.y)
            routes.setdefault(section.reader, []).append(
                _Route(bar.name, channel, *find(section.reader, section.x), *y, section)
            )
    return {reader: tuple(found) for reader, found in routes.items()}
