"""A case: one simulated ramp, what is true of it, and what must be said of it.

Each draw is a function of (scenario, index) alone. ``covered`` promises that the intervals hold
the truth at stopping, and ``always`` at every point (not where something in the way, as a peak at
zero field, can't be known before it is passed); ``forbidden`` that nothing may be called stable. ``required``: at least one of these
cautions must be shown at some time; ``allowed``: cautions that are no mistake. Any other one is
counted as false.
"""

from __future__ import annotations

import zlib
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np

from bench.generator import Rig, Streams, simulate
from bench.profile import Profile
from bench.sample import Sample
from bench.setting import Setting, one_way

SEED = 20310514

Codes = tuple[str, ...]


@dataclass(frozen=True)
class Case:
    """One simulated ramp with its truth. ``told`` is what the estimator is told of the rig, where
    that differs from how it is; ``level_bends``: rho_xx has a part quadratic in field;
    ``clean``: nothing is the matter with rig or readings, so that cautions have no reason;
    ``exact_line``: all is as the plain model says, so that the efficiency at the end has sense."""

    scenario: str
    index: int
    setting: Setting
    sample: Sample
    rig: Rig
    profile: Profile
    streams: Streams
    covered: bool = True
    always: bool = True
    forbidden: bool = False
    required: Codes = ()
    allowed: Codes = ()
    told: Rig | None = None
    level_bends: bool = False
    exact_line: bool = False
    clean: bool = True
    relative_uncertainty: dict[str, float] = field(default_factory=dict)

    def swept_at(self, time_s: float) -> float:
        """Field passed over until a moment, in T."""
        return float(self.profile.swept(np.array([time_s]))[0])


Draw = Callable[[np.random.Generator], dict[str, object]]
SCENARIOS: dict[str, Draw] = {}


def scenario(draws: Draw) -> Draw:
    """Put a draw into the list under its own name."""
    SCENARIOS[draws.__name__] = draws
    return draws


def generators(name: str, index: int) -> tuple[np.random.Generator, np.random.Generator]:
    """(for parameters, for noise) of one ramp: from the name and the index alone."""
    seed = np.random.SeedSequence([SEED, zlib.crc32(name.encode()), index])
    one, two = seed.spawn(2)
    return np.random.default_rng(one), np.random.default_rng(two)


def make(name: str, index: int) -> Case:
    """The ramp of that number of a scenario. KeyError for an unknown name."""
    rng, noise = generators(name, index)
    facts = SCENARIOS[name](rng)
    spoil = facts.pop("spoil", None)
    setting: Setting = facts.pop("setting")  # type: ignore[assignment]
    sample = facts.pop("sample", setting.sample)
    rig = facts.pop("rig", setting.rig)
    profile = facts.pop("profile", None) or one_way(setting, rng)
    streams = simulate(sample, rig, profile, noise)  # type: ignore[arg-type]
    case = Case(name, index, setting, sample, rig, profile, streams, **facts)  # type: ignore
    if spoil is not None:
        spoil(case, rng)  # type: ignore[operator]
    return case


def moment(case: Case, swept_T: float) -> float:
    """Time in s at which that much field has been passed over in a one-way ramp."""
    return case.profile.start_s + swept_T / case.setting.rate_T_per_s
