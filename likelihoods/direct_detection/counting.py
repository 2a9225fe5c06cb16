"""Counts in bins with uncertain backgrounds: the Poisson likelihood, profiled or marginalised.

With signal s, expected background b and independent standard-normal nuisances z,

    L(s, z) = prod_k Poisson(n_k | s_k + b_k exp(sum_j L_kj z_j)) prod_j phi(z_j),

every factor normalised: the factorials and the 1/sqrt(2 pi) of each nuisance are there. The loading L (n_bins,
n_nuisances) holds the logarithmic uncertainties and their correlation. ``profile`` maximises over z, ``marginal``
integrates over it:

* no nuisance: nothing to do;
* one nuisance, for instance a shared normalisation: Gauss-Hermite quadrature centred on the maximum and scaled by the
  curvature there, measured against brute force to 1e-9 in ln L for uncertainties of 40 %, 1e-6 for a factor two;
* several: Laplace's approximation with its next order (third and fourth derivatives), measured to 3e-5 in ln L for
  uncertainties of 20 % per bin, 2e-3 for 40 % and 5e-3 for a factor two.

Counts may be fractional, as in an Asimov data set (arXiv:1007.1727).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from typing import Final

import numpy as np
from numba import njit
from scipy.special import gammaln, roots_hermite

from scanfit.contracts import InnerNuisances
from scanfit.priors import FloatArray

_HERMITE_NODES, _HERMITE_WEIGHTS = roots_hermite(32)
_LOG_HERMITE: Final = np.log(_HERMITE_WEIGHTS) + _HERMITE_NODES**2
_LARGEST_STEP: Final = 2.0
"""Largest change of any log background in one Newton step; exponentials overtake longer ones."""


@dataclass(frozen=True)
class BinnedCounts:
    """Observed counts and the expected background of each bin.

    Parameters
    ----------
    observed : ndarray, shape (n_bins,)
        Counts, not negative.
    background : ndarray, shape (n_bins,)
        Median of the expected background, not negative.
    loading : ndarray, shape (n_bins, n_nuisances)
        Response of the log backgrounds to the nuisances.
    treatment : {"marginal", "profile"}
        How the nuisances are removed.
    """

    observed: FloatArray
    background: FloatArray
    loading: FloatArray
    treatment: InnerNuisances = "marginal"

    @cached_property
    def _log_factorials(self) -> float:
        return float(gammaln(self.observed + 1.0).sum())

    def log_likelihood(self, signal: FloatArray) -> float:
        """Log-likelihood of expected signal counts, shape (n_bins,); -inf where events appear without any source."""
        profile = self.treatment == "profile"
        value = log_likelihood_of_counts(signal, self.background, self.observed, self.loading, profile)
        return float(value - self._log_factorials)

    def most_likely_background(self, signal: FloatArray) -> FloatArray:
        """Background in each bin, shape (n_bins,), that maximises the likelihood for this signal."""
        nuisances = _best_nuisances(signal, self.background, self.observed, self.loading)
        return np.asarray(self.background * np.exp(self.loading @ nuisances))

    def draw(self, signal: FloatArray, rng: np.random.Generator) -> BinnedCounts:
        """Pseudo-data: backgrounds varied within their uncertainty, then Poisson counts. The expectations stay."""
        nuisances = rng.standard_normal(self.loading.shape[1])
        background = self.background * np.exp(self.loading @ nuisances)
        counts = rng.poisson(signal + background).astype(float)
        return BinnedCounts(counts, self.background, self.loading, self.treatment)

    def asimov(self, signal: FloatArray) -> BinnedCounts:
        """Return the data set whose counts equal their expectation, with the backgrounds at their medians."""
        return BinnedCounts(signal + self.background, self.background, self.loading, self.treatment)


@njit(cache=True, fastmath=False, error_model="numpy")
def log_likelihood_of_counts(
    signal: FloatArray, background: FloatArray, observed: FloatArray, loading: FloatArray, profile: bool
) -> float:
    """Log-likelihood without the factorials; arguments as in `BinnedCounts`."""
    n_nuisances: int = loading.shape[1]
    for k in range(observed.size):
        if observed[k] > 0.0 and signal[k] + background[k] <= 0.0:
            return -math.inf
    best = _best_nuisances(signal, background, observed, loading)
    lowest: float = _cost(signal, background, observed, loading, best)
    if profile:
        return -lowest - 0.5 * n_nuisances * math.log(2.0 * math.pi)
    if n_nuisances == 0:
        return -lowest
    hessian = _curvature(signal, background, observed, loading, best, False)
    half_log_determinant = _factor(hessian)
    if n_nuisances > 1:
        return -lowest - half_log_determinant + _next_order(signal, background, observed, loading, best, hessian)
    scale = math.sqrt(2.0) * math.exp(-half_log_determinant)
    shifted, exponents = np.empty(1), np.empty(_HERMITE_NODES.size)
    for node in range(_HERMITE_NODES.size):
        shifted[0] = best[0] + scale * _HERMITE_NODES[node]
        exponents[node] = _LOG_HERMITE[node] - _cost(signal, background, observed, loading, shifted)
    highest: float = exponents.max()
    total: float = np.exp(exponents - highest).sum()
    return highest + math.log(total * scale / math.sqrt(2.0 * math.pi))


@njit(cache=True, fastmath=False, error_model="numpy")
def _cost(
    signal: FloatArray, background: FloatArray, observed: FloatArray, loading: FloatArray, nuisances: FloatArray
) -> float:
    """Negative log of the integrand without its constants: sum(mu - n ln mu) + |z|^2/2."""
    cost = 0.0
    for j in range(nuisances.size):
        cost += 0.5 * nuisances[j] * nuisances[j]
    for k in range(observed.size):
        exponent = 0.0
        for j in range(nuisances.size):
            exponent += loading[k, j] * nuisances[j]
        expected = signal[k] + background[k] * math.exp(exponent)
        cost += expected
        if observed[k] > 0.0:
            cost -= observed[k] * math.log(expected)
    return cost


@njit(cache=True, fastmath=False, error_model="numpy")
def _curvature(
    signal: FloatArray,
    background: FloatArray,
    observed: FloatArray,
    loading: FloatArray,
    nuisances: FloatArray,
    positive: bool,
) -> FloatArray:
    """Second derivatives of `_cost`; `positive` replaces a bin's negative curvature by its expected one."""
    n = nuisances.size
    hessian = np.eye(n)
    for k in range(observed.size):
        share, varied = _background_share(signal[k], background[k], loading[k], nuisances)
        second = varied - observed[k] * share * (1.0 - share)
        if positive and second < 0.0:
            second = varied * share
        for i in range(n):
            for j in range(n):
                hessian[i, j] += second * loading[k, i] * loading[k, j]
    return hessian


@njit(cache=True, fastmath=False, error_model="numpy")
def _background_share(
    signal: float, background: float, loading: FloatArray, nuisances: FloatArray
) -> tuple[float, float]:
    """Background's share of the expectation in one bin, and the varied background itself."""
    exponent = 0.0
    for j in range(nuisances.size):
        exponent += loading[j] * nuisances[j]
    varied = background * math.exp(exponent)
    return (varied / (signal + varied) if varied > 0.0 else 0.0), varied


@njit(cache=True, fastmath=False, error_model="numpy")
def _factor(matrix: FloatArray) -> float:
    """Cholesky-factor `matrix` in place (lower triangle) and return half the log of its determinant.

    Pivots are held above 1e-12: at the minimum of `_cost` the matrix is positive definite up to rounding.
    """
    half_log_determinant = 0.0
    for i in range(matrix.shape[0]):
        for j in range(i + 1):
            value = matrix[i, j]
            for m in range(j):
                value -= matrix[i, m] * matrix[j, m]
            if i == j:
                pivot = max(value, 1e-12)
                matrix[i, i] = math.sqrt(pivot)
                half_log_determinant += 0.5 * math.log(pivot)
            else:
                matrix[i, j] = value / matrix[j, j]
    return half_log_determinant


@njit(cache=True, fastmath=False, error_model="numpy")
def _solve(factor: FloatArray, right: FloatArray) -> FloatArray:
    """Solve with a factor from `_factor`."""
    n = right.size
    solution = right.copy()
    for i in range(n):
        for j in range(i):
            solution[i] -= factor[i, j] * solution[j]
        solution[i] /= factor[i, i]
    for i in range(n - 1, -1, -1):
        for j in range(i + 1, n):
            solution[i] -= factor[j, i] * solution[j]
        solution[i] /= factor[i, i]
    return solution


@njit(cache=True, fastmath=False, error_model="numpy")
def _best_nuisances(
    signal: FloatArray, background: FloatArray, observed: FloatArray, loading: FloatArray
) -> FloatArray:
    """Minimise `_cost` by Newton steps, shortened until the cost falls; always started from zero."""
    n_bins, n = loading.shape
    nuisances = np.zeros(n)
    if n == 0:
        return nuisances
    cost = _cost(signal, background, observed, loading, nuisances)
    for _ in range(200):
        gradient = nuisances.copy()
        for k in range(n_bins):
            share, varied = _background_share(signal[k], background[k], loading[k], nuisances)
            slope = varied - observed[k] * share
            for j in range(n):
                gradient[j] += slope * loading[k, j]
        hessian = _curvature(signal, background, observed, loading, nuisances, True)
        _factor(hessian)
        step = -_solve(hessian, gradient)
        descent = 0.0
        for j in range(n):
            descent -= gradient[j] * step[j]
        if descent < 1e-12:
            # One last full step squares an error that the cost, a large sum, can no longer resolve.
            nuisances = nuisances + step
            break
        largest = 0.0
        for k in range(n_bins):
            change = 0.0
            for j in range(n):
                change += loading[k, j] * step[j]
            largest = max(largest, abs(change))
        length = min(1.0, _LARGEST_STEP / largest) if largest > 0.0 else 1.0
        improved = False
        for _ in range(40):
            trial = nuisances + length * step
            trial_cost = _cost(signal, background, observed, loading, trial)
            if trial_cost <= cost - 1e-4 * length * descent:
                improved = True
                break
            length *= 0.5
        if not improved:
            break  # rounding: no lower cost can be told apart
        nuisances, cost = trial, trial_cost
    return nuisances


@njit(cache=True, fastmath=False, error_model="numpy")
def _next_order(
    signal: FloatArray,
    background: FloatArray,
    observed: FloatArray,
    loading: FloatArray,
    best: FloatArray,
    factor: FloatArray,
) -> float:
    """Correction to the log of Laplace's integral from the third and fourth derivatives.

    Each bin depends on the nuisances through its own log background, so with the covariance V of those,
    ln I = Laplace - sum_k c4_k V_kk^2/8 + sum_kl c3_k c3_l (V_kk V_kl V_ll/8 + V_kl^3/12). Derived here by expanding
    the exponent to fourth order and taking Gaussian moments.
    """
    n_bins, n = loading.shape
    covariance = np.empty((n_bins, n_bins))
    third, fourth = np.empty(n_bins), np.empty(n_bins)
    for k in range(n_bins):
        column = _solve(factor, loading[k])
        for m in range(n_bins):
            covariance[m, k] = 0.0
            for j in range(n):
                covariance[m, k] += loading[m, j] * column[j]
        share, varied = _background_share(signal[k], background[k], loading[k], best)
        spread = observed[k] * share * (1.0 - share)
        third[k] = varied - spread * (1.0 - 2.0 * share)
        fourth[k] = varied - spread * (1.0 - 6.0 * share + 6.0 * share * share)
    correction = 0.0
    for k in range(n_bins):
        correction -= fourth[k] * covariance[k, k] ** 2 / 8.0
        for m in range(n_bins):
            moments = covariance[k, k] * covariance[k, m] * covariance[m, m] / 8.0 + covariance[k, m] ** 3 / 12.0
            correction += third[k] * third[m] * moments
    # Beyond one the expansion has broken down: the data lie absurdly far outside the background's uncertainty.
    return min(max(correction, -1.0), 1.0)
