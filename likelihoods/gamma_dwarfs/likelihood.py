"""Likelihood and pseudo-data of one observation, for any photon spectrum."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln, log_ndtr

from scanfit.contracts import InnerNuisances
from scanfit.priors import FloatArray

from . import j_factor
from .galaxies import SharedNuisance
from .statistics import target_log_likelihoods
from .telescope import Observation

NOTHING_SHARED: Mapping[str, float] = {}


@dataclass(frozen=True)
class DwarfLikelihood:
    """Joint likelihood of all targets.

    Parameters
    ----------
    observation : Observation
        Telescope and data.
    inner : {"marginal", "profile"}
        How J-factors and background levels are removed.

    Methods take values of shared nuisances by name; those that are not named stand at their measured values.
    """

    observation: Observation
    inner: InnerNuisances

    @property
    def shared(self) -> tuple[SharedNuisance, ...]:
        """What targets have in common."""
        return self.observation.shared

    def signal(self, flux_per_j: FloatArray, values: Mapping[str, float] = NOTHING_SHARED) -> FloatArray:
        """Expected signal counts at the measured J-factors, shape (n_targets, n_bins).

        Parameters
        ----------
        flux_per_j : ndarray, shape (n_bins,) or (n_targets, n_bins)
            Photons per cm^2, s and GeV^2 cm^-5 in each energy bin.
        values : mapping
            Shared nuisances.
        """
        log10_j = self.observation.log10_j
        for nuisance in self.shared:
            if nuisance.acts_on == "j":
                log10_j = log10_j + values.get(nuisance.name, nuisance.centre) * nuisance.response
        return self.observation.acceptance * ((10.0**log10_j)[:, None] * flux_per_j)

    def background(self, values: Mapping[str, float] = NOTHING_SHARED) -> FloatArray:
        """Expected background counts, shape (n_targets, n_bins)."""
        background = self.observation.background
        for nuisance in self.shared:
            if nuisance.acts_on == "background":
                factor = nuisance.background_factor(values.get(nuisance.name, nuisance.centre))
                background = background * factor[:, None]
        return background

    def by_target(self, flux_per_j: FloatArray, values: Mapping[str, float] = NOTHING_SHARED) -> FloatArray:
        """Log-likelihood of each target, constants included, shape (n_targets,)."""
        data = self.observation
        return self._constants + target_log_likelihoods(  # type: ignore[no-any-return]  # numba has no types
            self.signal(flux_per_j, values), data.observed, self._order, self.background(values), data.background_error,
            data.background_centre, data.j_minus, data.j_plus, self.inner == "marginal",
        )  # fmt: skip

    def total(self, flux_per_j: FloatArray, values: Mapping[str, float] = NOTHING_SHARED) -> float:
        """Sum of `by_target`."""
        return float(self.by_target(flux_per_j, values).sum())

    def photons(self, flux_per_j: FloatArray) -> float:
        """Signal photons in all targets: a scale for searches."""
        return float(self.signal(flux_per_j).sum())

    def simulate(
        self,
        flux_per_j: FloatArray,
        rng: np.random.Generator,
        values: Mapping[str, float] = NOTHING_SHARED,
        *,
        measure_j_again: bool = True,
    ) -> DwarfLikelihood:
        """Pseudo-data of this flux.

        The true J-factors and backgrounds are the file's central values. Counts fluctuate, and so do the
        measurements of J, of background levels and of shared nuisances, as if the whole campaign were repeated.
        Without `measure_j_again` the measured J-factors stay, as if only the telescope looked again.
        """
        data = self.observation
        observed = rng.poisson(self.background(values) + self.signal(flux_per_j, values)).astype(float)
        centre = 1.0 + data.background_error * rng.standard_normal(data.background_error.shape)
        # y = true - measured has the density of j_factor.
        log10_j = data.log10_j - j_factor.draw(data.j_minus, data.j_plus, rng) if measure_j_again else data.log10_j
        shared = tuple(
            dataclasses.replace(one, centre=values.get(one.name, one.centre) + one.error * float(rng.standard_normal()))
            for one in data.shared
        )
        changed = dataclasses.replace(data, observed=observed, background_centre=centre, log10_j=log10_j, shared=shared)
        return DwarfLikelihood(changed, self.inner)

    def expected(self, flux_per_j: FloatArray, values: Mapping[str, float] = NOTHING_SHARED) -> DwarfLikelihood:
        """The expected data of this flux: every count and measurement at its central value."""
        data = self.observation
        changed = dataclasses.replace(
            data,
            observed=self.background(values) + self.signal(flux_per_j, values),
            background_centre=np.ones_like(data.background_centre),
        )
        return DwarfLikelihood(changed, self.inner)

    @cached_property
    def _order(self) -> NDArray[np.int64]:
        return np.argsort(self.observation.observed, axis=1, kind="stable")

    @cached_property
    def _constants(self) -> FloatArray:
        data = self.observation
        constants = j_factor.log_normalisation(data.j_minus, data.j_plus) - gammaln(data.observed + 1.0).sum(axis=1)
        known = data.background_error == 0.0
        error = np.where(known, 1.0, data.background_error)
        # The background's normal density is cut at zero when it is integrated over; as a measurement it is not.
        if self.inner == "marginal":
            level = -log_ndtr(data.background_centre / error)
        else:
            level = -0.5 * math.log(2.0 * math.pi) - np.log(error)
        return np.asarray(constants + np.where(known, 0.0, level))
