"""Energy that annihilation injects around recombination, as a limit from the cosmic microwave background."""

from __future__ import annotations

import copy
import math
from collections.abc import Mapping, Sequence
from typing import Final, Literal, Self

import numpy as np
from pydantic import Field, PositiveFloat, field_validator

from scanfit import validation
from scanfit.contracts import BuildContext, Observable, Term
from scanfit.priors import FloatArray

from .candidate import CHANNELS, Candidate
from .constants import GEV_M2_TO_CM3_S

# Mass in GeV and efficiency, arXiv:0906.1197, table 1, from memory. Later curves (arXiv:1506.03811) are lower.
_ELECTRON: Final = ((1.0, 0.85), (10.0, 0.77), (100.0, 0.60), (1000.0, 0.58))
_MUON: Final = ((1.0, 0.30), (10.0, 0.29), (100.0, 0.23), (1000.0, 0.20))
_TAU: Final = ((200.0, 0.19), (1000.0, 0.19))
_W: Final = ((200.0, 0.26), (1000.0, 0.24))
_BOTTOM: Final = ((200.0, 0.31), (1000.0, 0.28))
_LIGHT_QUARK: Final = ((200.0, 0.29), (1000.0, 0.28))
_HIGGS: Final = ((200.0, 0.30), (1000.0, 0.28))

EFFICIENCY: Final[Mapping[str, tuple[tuple[float, float], ...]]] = {
    "ee": _ELECTRON, "mumu": _MUON, "tautau": _TAU, "WW": _W, "bb": _BOTTOM, "hh": _HIGGS,
    "uu": _LIGHT_QUARK, "dd": _LIGHT_QUARK, "ss": _LIGHT_QUARK, "cc": _LIGHT_QUARK,
    # Stand-ins: the table has no entry for these.
    "tt": _BOTTOM, "gg": _LIGHT_QUARK, "ZZ": _W, "Zh": _W, "gammagamma": _ELECTRON,
    "nunu": ((1.0, 0.0),), "dark": ((1.0, 0.0),),
}  # fmt: skip
"""Fraction of the released energy that ionises and heats the gas, by channel: (mass in GeV, value) pairs."""

_TO_STANDARD_DEVIATION: Final = {"posterior": 1.959964, "profile": 1.644854}


class CmbAnnihilationOptions(validation.Options):
    """Keys of the term."""

    limit: PositiveFloat = 3.2e-28
    """95 % upper limit on p_ann in cm^3 s^-1 GeV^-1; the default is that of arXiv:1807.06209, from memory."""
    limit_kind: Literal["posterior", "profile"] = "posterior"
    """How the limit was drawn: from a posterior on p_ann >= 0 (limit = 1.96 sigma), or one-sided (1.645 sigma)."""
    efficiency: Mapping[str, float] = Field(default_factory=dict)
    """Efficiencies that replace the built-in ones, by channel."""

    @field_validator("efficiency")
    @classmethod
    def _known_channels(cls, value: Mapping[str, float]) -> Mapping[str, float]:
        for channel, efficiency in value.items():
            if channel not in CHANNELS:
                raise ValueError(f"unknown channel {channel!r}; allowed: {', '.join(CHANNELS)}")
            if not 0.0 <= efficiency <= 1.0:
                raise ValueError(f"the efficiency of {channel!r} must lie between 0 and 1, not {efficiency!r}")
        return value


class CmbAnnihilation(Term[Candidate]):
    """Half-Gaussian likelihood of p_ann = f_eff <sigma v>/m at zero velocity.

    The efficiency-weighted rate halves for a Dirac or complex particle and scales with the square of the candidate's
    fraction of the dark matter. ln L = -(1/2) ((p_ann - d)/sigma)^2 - ln(sqrt(2 pi) sigma) for p_ann > d, with d = 0
    for the published limit; below d it is constant.
    """

    Options = CmbAnnihilationOptions
    name = "cmb-annihilation"
    summary = "energy injected around recombination, p_ann, against the limit from the cosmic microwave background"
    cost = 1.1
    caveats = (
        "Efficiencies f_eff are those of arXiv:0906.1197, table 1, from memory, interpolated in ln m and constant "
        "outside; top quarks, gluons, Z and photons borrow the nearest entry. Later values are lower, so the limit is "
        "a little too strong.",
        "The limit on p_ann is turned into a half-Gaussian that peaks at zero.",
    )

    def __init__(self, options: CmbAnnihilationOptions, context: BuildContext) -> None:
        self.options = options
        self.best = 0.0
        self.sigma = options.limit / _TO_STANDARD_DEVIATION[options.limit_kind]

    def efficiencies(self, channels: Sequence[str], mass: float) -> FloatArray:
        """f_eff by channel at `mass` in GeV, shape (n_channels,)."""
        values = []
        for channel in channels:
            if channel in self.options.efficiency:
                values.append(self.options.efficiency[channel])
            else:
                masses, table = zip(*EFFICIENCY[channel], strict=True)
                values.append(float(np.interp(math.log(mass), np.log(masses), table)))
        return np.array(values)

    def p_ann(self, candidate: Candidate) -> float:
        """f_eff <sigma v>/m in cm^3 s^-1 GeV^-1, the fraction squared and the counting of pairs included."""
        at_rest = np.array([4.0 * candidate.mass**2])
        sigma_v = candidate.annihilation.sigma_v(at_rest)[:, 0] * GEV_M2_TO_CM3_S
        pairs = 1.0 if candidate.self_conjugate else 0.5
        efficiency = self.efficiencies(candidate.annihilation.channels, candidate.mass)
        return float(pairs * candidate.dm_fraction**2 * (efficiency @ sigma_v) / candidate.mass)

    def loglike(self, prediction: Candidate, values: Mapping[str, float]) -> float:
        pull = max(0.0, self.p_ann(prediction) - self.best) / self.sigma
        return -0.5 * pull * pull - math.log(math.sqrt(2.0 * math.pi) * self.sigma)

    def explain(self, prediction: Candidate, values: Mapping[str, float]) -> Sequence[Observable]:
        unit = "cm³/s/GeV"
        return (Observable("p_ann", self.p_ann(prediction), limit=self.options.limit, unit=unit, note="95 % limit"),)

    def simulate(self, prediction: Candidate, values: Mapping[str, float], rng: np.random.Generator) -> Self:
        return self._holding(rng.normal(self.p_ann(prediction), self.sigma))

    def expected(self, prediction: Candidate, values: Mapping[str, float]) -> Self:
        return self._holding(self.p_ann(prediction))

    def _holding(self, best: float) -> Self:
        other = copy.copy(self)
        other.best = max(0.0, best)
        return other
