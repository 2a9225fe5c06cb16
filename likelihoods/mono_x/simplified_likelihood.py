"""Counts in correlated bins: Poisson statistics with Gaussian, possibly skewed, background uncertainties.

The expected background of bin I follows arXiv:1809.05548, eqs. 2.9-2.12,

    n_I(theta) = a_I + b_I theta_I + c_I theta_I^2,   theta ~ Normal(0, rho),

with a, b, c and rho fixed by the mean, covariance and diagonal third moments of the background; without third moments
c = 0, which is the plain multivariate Gaussian. The signal s_I carries one further nuisance, common to all bins, of
log-normal shape. Writing theta = L z with rho = L L^T makes every nuisance a standard normal variate, z ~ Normal(0, 1):

    ln L(z) = sum_I ln Poisson(N_I | s_I exp(u_I z_0) + n_I(theta)) - z^2/2.

Backgrounds are kept positive by n -> (n + sqrt(n^2 + 4 e^2))/2 with e = b/1000, a smooth form of clipping at zero.

Profiled: the maximum over z, with the constraint normalised to one at its peak. Marginalised: the integral over the
normalised density of z, by Laplace's method with the next order of the expansion (third and fourth derivatives); or,
where a background's uncertainty reaches down to zero within three standard deviations and no expansion holds, by
importance sampling on a fixed set of quasi-random points, some ten times slower.
"""

from __future__ import annotations

import copy
import functools
import math
from dataclasses import dataclass
from typing import Any, Final, Self

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln, ndtri, xlogy
from scipy.stats import qmc

from scanfit.errors import InputError, Problem
from scanfit.priors import FloatArray

from .nuisance_removal import POSITIVE_WIDTH, maximise
from .nuisance_sampling import sampled_volume

SAMPLES: Final = 2048
"""Points of the importance sampling."""


@dataclass(frozen=True)
class CorrelatedBackground:
    """Expected background as a function of its nuisance parameters; make one with `from_moments`.

    Parameters
    ----------
    constant, slope, curvature : ndarray, shape (n,)
        a, b and c of the polynomial, in events.
    correlation : ndarray, shape (n, n)
        rho, of the nuisance parameters (not of the counts, unless c = 0).
    lower : ndarray, shape (n, n)
        Lower Cholesky factor of rho.
    """

    constant: FloatArray
    slope: FloatArray
    curvature: FloatArray
    correlation: FloatArray
    lower: FloatArray

    @classmethod
    def from_moments(
        cls, mean: FloatArray, covariance: FloatArray, third_moments: FloatArray | None = None
    ) -> CorrelatedBackground:
        """Solve arXiv:1809.05548, eqs. 2.9-2.12.

        Parameters
        ----------
        mean : ndarray, shape (n,)
            Expected counts, including the mean of any skewed part.
        covariance : ndarray, shape (n, n)
            Of the expected counts (systematic uncertainty only).
        third_moments : ndarray, shape (n,), optional
            Central third moments of the expected counts, bin by bin.

        Raises
        ------
        InputError
            If the covariance is not symmetric and positive definite, or the third moments are too large for this form.
        """
        mean, covariance = np.asarray(mean, dtype=float), np.asarray(covariance, dtype=float)
        problems = []
        if not np.allclose(covariance, covariance.T, rtol=1e-9, atol=0.0):
            problems.append(Problem("covariance", "must be symmetric"))
        elif cholesky_or_none(covariance) is None:
            smallest = float(np.linalg.eigvalsh(covariance).min())
            problems.append(
                Problem("covariance", f"must be positive definite; its smallest eigenvalue is {smallest:.4g}")
            )
        if problems:
            raise InputError(problems)
        variance = np.diag(covariance)
        skew = np.zeros_like(mean) if third_moments is None else np.asarray(third_moments, dtype=float)
        for index in np.flatnonzero(8.0 * variance**3 < skew**2):
            largest = math.sqrt(8.0 * variance[index] ** 3)
            rule = f"a quadratic of a Gaussian reaches a third moment of at most {largest:.4g} with this variance"
            problems.append(Problem(f"third_moments.{index}", rule, float(skew[index])))
        if problems:
            raise InputError(problems)
        curvature = np.zeros_like(mean)
        for index in np.flatnonzero(skew):
            spread = math.sqrt(8.0 * variance[index] ** 3 / skew[index] ** 2 - 1.0)
            angle = 4.0 * math.pi / 3.0 + math.atan(spread) / 3.0
            curvature[index] = -math.copysign(math.sqrt(2.0 * variance[index]), skew[index]) * math.cos(angle)
        slope = np.sqrt(variance - 2.0 * curvature**2)
        # The published expression times its conjugate: finite, and exact, where a curvature vanishes.
        slopes = np.outer(slope, slope)
        correlation = 2.0 * covariance / (
            np.sqrt(slopes**2 + 8.0 * np.outer(curvature, curvature) * covariance) + slopes
        )  # fmt: skip
        lower = cholesky_or_none(correlation) if np.all(np.isfinite(correlation)) else None
        if lower is None:
            rule = "with these, the correlation of the nuisance parameters is not positive definite"
            raise InputError([Problem("third_moments", rule)])
        return cls(mean - curvature, slope, curvature, correlation, lower)

    @property
    def count(self) -> int:
        """Number of bins."""
        return len(self.constant)

    def near_zero(self) -> NDArray[np.intp]:
        """Bins whose expectation falls below a hundredth of its centre within three standard deviations."""
        lowest = np.minimum(self.expected(-3.0 * np.ones(self.count)), self.constant)
        return np.flatnonzero(lowest < 0.01 * self.constant)

    def expected(self, theta: FloatArray) -> FloatArray:
        """Expected counts at nuisance parameters `theta`, shape (n,), kept positive as described above."""
        raw = self.constant + self.slope * theta + self.curvature * theta**2
        return np.asarray(0.5 * (raw + np.sqrt(raw**2 + 4.0 * (POSITIVE_WIDTH * self.slope) ** 2)))


def cholesky_or_none(matrix: FloatArray) -> FloatArray | None:
    """Lower Cholesky factor, or None when the matrix is not (numerically) positive definite."""
    try:
        lower = np.linalg.cholesky(matrix)
    except np.linalg.LinAlgError:
        return None
    return np.ascontiguousarray(lower)


class SimplifiedLikelihood:
    """Observed counts over a `CorrelatedBackground`.

    Parameters
    ----------
    background : CorrelatedBackground
        Expectation without signal.
    observed : ndarray, shape (n,)
        Counts; those of an Asimov data set need not be whole numbers.
    """

    def __init__(self, background: CorrelatedBackground, observed: FloatArray) -> None:
        self.background = background
        self.observed = np.ascontiguousarray(observed, dtype=float)
        # ln Poisson at its largest, where the expectation equals the count; the kernel adds the (small) rest.
        counts = self.observed
        self._saturated = float((xlogy(counts, counts) - counts - gammaln(counts + 1.0)).sum())
        self.sampled = len(background.near_zero()) > 0
        """Whether the marginal likelihood is sampled rather than expanded."""

    def profile(self, signal: FloatArray, log_uncertainty: FloatArray | None = None) -> float:
        """Maximum of ln L over all nuisances.

        Parameters
        ----------
        signal : ndarray, shape (n,)
            Expected signal counts.
        log_uncertainty : ndarray, shape (n,), optional
            u of the signal's nuisance; none by default.
        """
        return self._saturated + self._solve(signal, log_uncertainty, volume=False)[0]

    def marginal(self, signal: FloatArray, log_uncertainty: FloatArray | None = None) -> float:
        """Ln of the likelihood integrated over all nuisances; arguments as for `profile`."""
        if self.sampled:
            peak, _, _, z = self._solve(signal, log_uncertainty, volume=False)
            return self._saturated + peak + self._sample(signal, log_uncertainty, z)[0]
        peak, log_volume, correction, _ = self._solve(signal, log_uncertainty, volume=True)
        return self._saturated + peak + log_volume + correction

    def laplace_correction(self, signal: FloatArray, log_uncertainty: FloatArray | None = None) -> float:
        """What the next order adds to Laplace's ln L; what is left out is of the order of its square."""
        return self._solve(signal, log_uncertainty, volume=True)[2]

    def best_background(self, signal: FloatArray, log_uncertainty: FloatArray | None = None) -> FloatArray:
        """Expected background counts at the maximum of ln L, shape (n,)."""
        z = self._solve(signal, log_uncertainty, volume=False)[3]
        return self.background.expected(self.background.lower @ z[:-1])

    def effective_samples(self, signal: FloatArray, log_uncertainty: FloatArray | None = None) -> float:
        """Effective number of points of the importance sampling, at most `SAMPLES`."""
        z = self._solve(signal, log_uncertainty, volume=False)[3]
        return self._sample(signal, log_uncertainty, z)[1]

    def central(self) -> tuple[FloatArray, FloatArray]:
        """Background with every nuisance at its centre, and its standard deviation."""
        b = self.background
        return b.expected(np.zeros(b.count)), np.hypot(b.slope, math.sqrt(2.0) * b.curvature)

    def drawn(self, signal: FloatArray, log_uncertainty: FloatArray, rng: np.random.Generator) -> Self:
        """Return pseudo-data: nuisances from their densities, then Poisson counts."""
        mean = self.background.expected(self.background.lower @ rng.standard_normal(self.background.count))
        mean = mean + signal * np.exp(log_uncertainty * rng.standard_normal())
        return self._with_counts(rng.poisson(mean).astype(float))

    def asimov(self, signal: FloatArray) -> Self:
        """Return the counts expected with every nuisance at its centre."""
        return self._with_counts(self.central()[0] + signal)

    def _with_counts(self, counts: FloatArray) -> Self:
        other: Any = copy.copy(self)
        other.__init__(self.background, counts)
        return other  # type: ignore[no-any-return]

    def _sample(self, signal: FloatArray, log_uncertainty: FloatArray | None, z: FloatArray) -> tuple[float, float]:
        if log_uncertainty is None:
            log_uncertainty = np.zeros(len(self.observed))
        b = self.background
        volume, effective = sampled_volume(
            self.observed, signal, log_uncertainty, b.constant, b.slope, b.curvature, b.lower, z, _nodes(b.count + 1)
        )
        return volume, effective

    def _solve(
        self, signal: FloatArray, log_uncertainty: FloatArray | None, volume: bool
    ) -> tuple[float, float, float, FloatArray]:
        if log_uncertainty is None:
            log_uncertainty = np.zeros(len(self.observed))
        b = self.background
        peak, log_volume, correction, z = maximise(
            self.observed, signal, log_uncertainty, b.constant, b.slope, b.curvature, b.lower, volume
        )
        return peak, log_volume, correction, z


@functools.lru_cache
def _nodes(dimension: int) -> FloatArray:
    """Standard normal variates behind the importance sampling, shape (SAMPLES, dimension): always the same."""
    points = qmc.Sobol(dimension, scramble=True, rng=np.random.default_rng(1)).random(SAMPLES)
    return np.ascontiguousarray(ndtri(np.clip(points, 1e-12, 1.0 - 1e-12)))
