"""The term ``gamma-dwarfs``: photons from annihilation in dwarf satellites."""

from __future__ import annotations

import copy
import math
from collections.abc import Mapping, Sequence
from typing import Final, Self

import numpy as np

from scanfit.contracts import BuildContext, Observable, Term
from scanfit.priors import FloatArray
from scanfit.validation import Options

from ..candidate import Candidate
from .likelihood import DwarfLikelihood
from .spectra import LINE, TABLE_CHANNELS, TABLE_COLUMN, PhotonTable, photon_table
from .telescope import read_observation

_BADLY_KNOWN: Final = 0.25
_COVERAGE: Final = (
    "J-factors with errors up to {:g} dex are profiled: one-sided 95 % limits then exclude a true signal in 7 to 13 % "
    "of pseudo-experiments instead of 5 %"
)


class GammaDwarfsOptions(Options):
    """Keys of a ``gamma-dwarfs`` table in the run file."""

    data: str
    """Telescope and targets, a TOML file; relative paths start at the run file. See `telescope`."""


class GammaDwarfs(Term[Candidate]):
    """Joint Poisson likelihood of dwarf satellites, J-factors and backgrounds removed inside.

    Per energy bin and unit of J the flux is <sigma v> f^2 N / (4 pi k m^2) with k = 2 for self-conjugate
    particles and 4 otherwise, f the fraction of the dark matter, and N the photons per annihilation (weighted
    by cross sections at dwarf velocities, so p-wave annihilation is as weak as it should be).

    A point whose mass lies outside the table of photon spectra (3 GeV to 100 TeV) and that annihilates into
    anything but neutrinos, dark states and two photons raises `PointError`: spectra are never extrapolated. Set
    the range of the mass accordingly, or the result will lack those points, and say so.
    """

    Options = GammaDwarfsOptions
    name = "gamma-dwarfs"
    summary = "gamma rays from dwarf satellites"
    cost = 2.0

    def __init__(self, options: GammaDwarfsOptions, context: BuildContext) -> None:
        path = context.folder / options.data
        observation = read_observation(path)
        self.data_files = (path,)
        self.likelihood = DwarfLikelihood(observation, context.inner_nuisances)
        self._table: PhotonTable = photon_table()
        j_error = max(float(observation.j_minus.max()), float(observation.j_plus.max()))
        badly_known = context.inner_nuisances == "profile" and j_error > _BADLY_KNOWN
        self.caveats = (
            *((f"{observation.title}: invented demo data, not a measurement",) if observation.invented else ()),
            "photon spectra contain no electroweak shower: too soft for masses above about 1 TeV, for leptons most",
            *((_COVERAGE.format(j_error),) if badly_known else ()),
            "points with masses outside 3 GeV to 100 TeV fail: photon spectra are not extrapolated",
        )

    def loglike(self, prediction: Candidate, values: Mapping[str, float]) -> float:
        """Log-likelihood of all targets.

        Raises
        ------
        PointError
            If the mass is outside the table of photon spectra.
        """
        return self.likelihood.total(self.flux_per_j(prediction))

    def flux_per_j(self, candidate: Candidate) -> FloatArray:
        """Photons per cm^2, s and GeV^2 cm^-5 in each energy bin, shape (n_bins,)."""
        weights, line_weight = _weights(candidate)
        photons = self.likelihood.observation.response.photons(self._table, weights, line_weight, candidate.mass)
        return annihilation_factor(candidate) * photons

    def explain(self, prediction: Candidate, values: Mapping[str, float]) -> Sequence[Observable]:
        """Cross section against its limit, counts, and how much the data prefer the signal."""
        data, flux = self.likelihood.observation, self.flux_per_j(prediction)
        signal = self.likelihood.signal(flux)
        effective = prediction.dm_fraction**2 * prediction.sigma_v_today
        limit = self.likelihood.upper_limit(flux) * effective
        nothing = self.likelihood.by_target(np.zeros_like(flux))
        gain = 2.0 * (self.likelihood.by_target(flux) - nothing)
        removed = "profiled" if self.likelihood.inner == "profile" else "integrated out"
        strongest = int(np.argmax(signal.sum(axis=1)))
        note = f"95 % CL for this mass and these final states, J-factors {removed}"
        return (
            Observable(
                "annihilation cross section times velocity, scaled by f^2",
                effective,
                limit=limit if math.isfinite(limit) else None,
                unit="cm³/s",
                note=note if math.isfinite(limit) else "no photons in the energy range: no limit",
            ),
            Observable(
                "photons in all targets",
                float(signal.sum() + data.background.sum()),
                observed=float(data.observed.sum()),
                uncertainty=math.sqrt(float(data.background.sum())),
                note=f"of which {signal.sum():.3g} from annihilation at the measured J-factors",
            ),
            Observable(
                f"photons from annihilation in {data.names[strongest]}",
                float(signal[strongest].sum()),
                note=f"the strongest target; {data.observed[strongest].sum():g} photons seen, "
                f"{data.background[strongest].sum():.4g} expected without annihilation",
            ),
            Observable(
                "2 ln(likelihood ratio) to no annihilation",
                float(gain.sum()),
                note="positive where the data prefer this signal",
            ),
        )

    def simulate(self, prediction: Candidate, values: Mapping[str, float], rng: np.random.Generator) -> Self:
        """The same term with pseudo-data; see `DwarfLikelihood.simulate` for what fluctuates."""
        return self._holding(self.likelihood.simulate(self.flux_per_j(prediction), rng))

    def expected(self, prediction: Candidate, values: Mapping[str, float]) -> Self:
        """The same term with the expected data."""
        return self._holding(self.likelihood.expected(self.flux_per_j(prediction)))

    def _holding(self, likelihood: DwarfLikelihood) -> Self:
        other = copy.copy(self)
        other.likelihood = likelihood
        return other


_PAIR_FACTOR: Final = {True: 2.0, False: 4.0}


def annihilation_factor(candidate: Candidate) -> float:
    """f^2 / (4 pi k m^2) in GeV^-2, k = 2 for self-conjugate particles and 4 otherwise."""
    pairs = _PAIR_FACTOR[candidate.self_conjugate]
    return candidate.dm_fraction**2 / (4.0 * math.pi * pairs * candidate.mass**2)


def _weights(candidate: Candidate) -> tuple[FloatArray, float]:
    """Cross sections times velocity in cm^3/s by column of the photon table, and that into two photons."""
    weights, line_weight = np.zeros(len(TABLE_CHANNELS)), 0.0
    for channel, sigma_v in zip(candidate.annihilation.channels, candidate.sigma_v_channels, strict=True):
        if channel in TABLE_COLUMN:
            weights[TABLE_COLUMN[channel]] += sigma_v
        elif channel == LINE:
            line_weight += float(sigma_v)
    return weights, line_weight
