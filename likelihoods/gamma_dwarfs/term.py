"""The term ``gamma-dwarfs``: photons from annihilation in dwarf satellites."""

from __future__ import annotations

import copy
import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Final, Self

import numpy as np
from pydantic import Field

from scanfit.contracts import BuildContext, InnerNuisances, LimitCurve, Observable, Term
from scanfit.priors import FloatArray
from scanfit.validation import Options, read_toml

from ..candidate import DWARF_VELOCITY, Candidate
from ..constants import GEV_M2_TO_CM3_S
from .curves import CURVES, limit_curve
from .flux_table import FluxLikelihood, read_flux_table
from .likelihood import DwarfLikelihood
from .limits import TargetExcess, target_excesses, upper_limit
from .spectra import LINE, TABLE_CHANNELS, TABLE_COLUMN, PhotonTable, photon_table
from .telescope import read_observation

_BADLY_KNOWN: Final = 0.25
_COVERAGE: Final = (
    "J-factors with errors up to {:g} dex are profiled: limits meant for 95 % exclude a true signal in up to 9 % of "
    "pseudo-experiments if J is measured again in each (inner_nuisances = 'marginal' does not)"
)


class GammaDwarfsOptions(Options):
    """Keys of a ``gamma-dwarfs`` table in the run file."""

    data: str
    """A TOML file; relative paths start at the run file. Telescope, targets and counts (see `telescope`), or targets
    and a table of log-likelihoods against flux (see `flux_table`)."""
    calibration: int = Field(default=0, ge=0)
    """Pseudo-experiments per mass with which `limit_curve` calibrates profiled limits; 0 for asymptotic ones."""


class GammaDwarfs(Term[Candidate]):
    """Joint likelihood of dwarf satellites, J-factors and backgrounds removed inside.

    What targets share, a background level or the systematic of their J-factors, are nuisance parameters of the scan.

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
    curves = CURVES

    def __init__(self, options: GammaDwarfsOptions, context: BuildContext) -> None:
        path = context.folder / options.data
        self.likelihood = read_likelihood(path, context.inner_nuisances)
        observation = self.likelihood.observation
        table = (path.parent / read_toml(path)["flux_table"]["file"],) if self._tabulated else ()
        self.data_files = (path, *table)
        self._calibration = options.calibration
        self.nuisances = tuple(nuisance.parameter for nuisance in observation.shared)
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
        return self.likelihood.total(self.flux_per_j(prediction), values)

    @property
    def _tabulated(self) -> bool:
        return isinstance(self.likelihood, FluxLikelihood)

    def flux_per_j(self, candidate: Candidate) -> FloatArray:
        """Photons per cm^2, s and GeV^2 cm^-5 in each energy bin, shape (n_bins,).

        Where the file gives targets velocities, shape (n_targets, n_bins). With a table of energy fluxes, GeV instead
        of photons.
        """
        response, velocity = self.likelihood.observation.response, self.likelihood.observation.velocity
        factor = annihilation_factor(candidate)
        if velocity is None:
            weights, line_weight = _weights(candidate, candidate.sigma_v_channels)
            return factor * response.photons(self._table, weights, line_weight, candidate.mass)
        at = np.where(np.isnan(velocity), DWARF_VELOCITY, velocity)
        by_target = candidate.annihilation.sigma_v(4.0 * candidate.mass**2 / (1.0 - 0.25 * at**2)) * GEV_M2_TO_CM3_S
        return factor * np.array(
            [response.photons(self._table, *_weights(candidate, sigma_v), candidate.mass) for sigma_v in by_target.T]
        )

    def target_excesses(self, prediction: Candidate) -> list[TargetExcess]:
        """How much each target alone prefers the spectrum of this candidate, strongest first."""
        return target_excesses(self.likelihood, self.flux_per_j(prediction), self.likelihood.observation.names)

    def explain(self, prediction: Candidate, values: Mapping[str, float]) -> Sequence[Observable]:
        """Cross section against its limit, counts, and how much the data prefer the signal."""
        flux = self.flux_per_j(prediction)
        effective = prediction.dm_fraction**2 * prediction.sigma_v_today
        limit = upper_limit(self.likelihood, flux) * effective
        gain = 2.0 * (self.likelihood.total(flux, values) - self.likelihood.total(np.zeros_like(flux), values))
        removed = "profiled" if self.likelihood.inner == "profile" else "integrated out"
        kind = "CL" if self.likelihood.inner == "profile" else "credibility, prior flat in the cross section,"
        note = f"95 % {kind} for this mass and these final states, J-factors {removed}"
        excess = self.target_excesses(prediction)[0]
        return (
            Observable(
                "annihilation cross section times velocity, scaled by f^2",
                effective,
                limit=limit if math.isfinite(limit) else None,
                unit="cm³/s",
                note=note if math.isfinite(limit) else "no photons in the energy range: no limit",
            ),
            *self._photons(flux, values),
            Observable(
                "2 ln(likelihood ratio) to no annihilation",
                gain,
                note="positive where the data prefer this signal",
            ),
            Observable(
                "largest 2 ln(likelihood ratio) of one target, cross section free",
                excess.test_statistic,
                note=f"{excess.name}, local p = {excess.local_p_value:.2g} with this spectrum, "
                f"one of {len(self.likelihood.observation.names)} targets",
            ),
        )

    def _photons(self, flux: FloatArray, values: Mapping[str, float]) -> Sequence[Observable]:
        if isinstance(self.likelihood, FluxLikelihood):
            return ()
        data, background = self.likelihood.observation, self.likelihood.background(values)
        signal = self.likelihood.signal(flux, values)
        strongest = int(np.argmax(signal.sum(axis=1)))
        return (
            Observable(
                "photons in all targets",
                float(signal.sum() + background.sum()),
                observed=float(data.observed.sum()),
                uncertainty=math.sqrt(float(background.sum())),
                note=f"of which {signal.sum():.3g} from annihilation at the measured J-factors",
            ),
            Observable(
                f"photons from annihilation in {data.names[strongest]}",
                float(signal[strongest].sum()),
                note=f"the strongest target; {data.observed[strongest].sum():g} photons seen, "
                f"{background[strongest].sum():.4g} expected without annihilation",
            ),
        )

    def limit_curve(
        self,
        curve: str,
        *,
        level: float | None = None,
        points: int = 40,
        pseudo_experiments: int = 200,
        rng: np.random.Generator | None = None,
    ) -> LimitCurve:
        """Limits on sigma v into one final state; see `curves`. Shared nuisances are profiled."""
        return limit_curve(
            self.likelihood, self._table, curve, level, points, pseudo_experiments, rng, self.caveats,
            self._calibration,
        )  # fmt: skip

    def simulate(self, prediction: Candidate, values: Mapping[str, float], rng: np.random.Generator) -> Self:
        """The same term with pseudo-data; see `DwarfLikelihood.simulate` for what fluctuates.

        Priors of shared nuisances belong to the run and stay where they are.
        """
        return self._holding(self.likelihood.simulate(self.flux_per_j(prediction), rng, values))

    def expected(self, prediction: Candidate, values: Mapping[str, float]) -> Self:
        """The same term with the expected data."""
        return self._holding(self.likelihood.expected(self.flux_per_j(prediction), values))

    def _holding(self, likelihood: DwarfLikelihood) -> Self:
        other = copy.copy(self)
        other.likelihood = likelihood
        return other


_PAIR_FACTOR: Final = {True: 2.0, False: 4.0}


def annihilation_factor(candidate: Candidate) -> float:
    """f^2 / (4 pi k m^2) in GeV^-2, k = 2 for self-conjugate particles and 4 otherwise."""
    pairs = _PAIR_FACTOR[candidate.self_conjugate]
    return candidate.dm_fraction**2 / (4.0 * math.pi * pairs * candidate.mass**2)


def read_likelihood(path: Path, inner: InnerNuisances) -> DwarfLikelihood | FluxLikelihood:
    """Read a data file of either kind."""
    if "flux_table" in read_toml(path):
        return FluxLikelihood(read_flux_table(path), inner)
    return DwarfLikelihood(read_observation(path), inner)


def _weights(candidate: Candidate, sigma_v_channels: FloatArray) -> tuple[FloatArray, float]:
    """Cross sections times velocity in cm^3/s by column of the photon table, and that into two photons."""
    weights, line_weight = np.zeros(len(TABLE_CHANNELS)), 0.0
    for channel, sigma_v in zip(candidate.annihilation.channels, sigma_v_channels, strict=True):
        if channel in TABLE_COLUMN:
            weights[TABLE_COLUMN[channel]] += sigma_v
        elif channel == LINE:
            line_weight += float(sigma_v)
    return weights, line_weight
