"""Counts in correlated bins: Poisson statistics with Gaussian, possibly skewed, background uncertainties.

The expected background of bin I follows arXiv:1809.05548, eqs. 2.9-2.12,

    n_I(theta) = a_I + b_I theta_I + c_I theta_I^2,   theta ~ Normal(0, rho),

with a, b, c and rho fixed by the mean, covariance and diagonal third moments of the background; without third moments
c = 0, which is the plain multivariate Gaussian. The signal s_I carries one further nuisance, common to all bins, of
log-normal shape. Writing theta = L z with rho = L L^T makes every nuisance a standard normal variate, z ~ Normal(0, 1):

    ln L(z) = sum_I ln Poisson(N_I | s_I exp(u_I z_0) + n_I(theta)) - z^2/2.

Backgrounds are kept positive by n -> (n + sqrt(n^2 + 4 e^2))/2 with e = b/1000, a smooth form of clipping at zero.

Profiled: the maximum over z, with the constraint normalised to one at its peak. Marginalised: the integral over the
normalised density of z, by Laplace's method with the next order of the expansion (third and fourth derivatives).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.special import gammaln, xlogy

from scanfit.errors import InputError, Problem
from scanfit.priors import FloatArray

from .nuisance_removal import POSITIVE_WIDTH, maximise


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
        peak, log_volume, correction, _ = self._solve(signal, log_uncertainty, volume=True)
        return self._saturated + peak + log_volume + correction

    def laplace_correction(self, signal: FloatArray, log_uncertainty: FloatArray | None = None) -> float:
        """What the next order adds to Laplace's ln L; what is left out is of the order of its square."""
        return self._solve(signal, log_uncertainty, volume=True)[2]

    def best_background(self, signal: FloatArray, log_uncertainty: FloatArray | None = None) -> FloatArray:
        """Expected background counts at the maximum of ln L, shape (n,)."""
        z = self._solve(signal, log_uncertainty, volume=False)[3]
        return self.background.expected(self.background.lower @ z[:-1])

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
