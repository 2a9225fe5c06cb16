"""Upper limits on a signal of known shape, from counts in bins.

Two methods serve any number of bins. `flat_prior` integrates the likelihood over a signal that is not negative; for one
bin and a known background it equals the CLs limit, and without events it is 2.303 at 90 % whatever the background.
`likelihood_ratio` is the one-sided profile-likelihood limit in its asymptotic form (arXiv:1007.1727): usual, but too
strong with few events, by up to half (arXiv:2105.00599).

One bin has the exact constructions besides: `classical`, `cls` (J. Phys. G 28 (2002) 2693) and `unified`
(physics/9711021). An uncertain background is averaged over in the first two.
"""

from __future__ import annotations

import math
from functools import lru_cache
from typing import Final

import numpy as np
from numba import njit
from scipy.optimize import brentq
from scipy.special import gammaln, ndtri, pdtr, roots_hermitenorm, roots_legendre, xlogy

from scanfit.priors import FloatArray

from .counting import BinnedCounts, log_likelihood_of_counts

_NODES, _WEIGHTS = roots_legendre(32)
_DEPTH: Final = 20.0
"""Fall of ln L at which a likelihood is cut off: e^-20 of the peak is nothing."""
_NORMAL_NODES, _NORMAL_WEIGHTS = roots_hermitenorm(24)
_FINE: Final = 0.002
"""Step in events of the unified construction, after a coarse pass."""
_COARSE: Final = 0.02


def flat_prior(counting: BinnedCounts, shape: FloatArray, level: float) -> float:
    """Upper limit in events with a flat prior on the total signal.

    Parameters
    ----------
    counting : BinnedCounts
        Data, background and the treatment of its uncertainty.
    shape : ndarray, shape (n_bins,)
        Signal in each bin for one event in total.
    level : float
        Credibility.
    """
    return float(_flat_prior(*_arguments(counting, shape), level))


def likelihood_ratio(counting: BinnedCounts, shape: FloatArray, level: float) -> float:
    """Upper limit in events where ln L has fallen from its maximum at s >= 0 by half the squared normal quantile.

    The parameters are those of `flat_prior`. The fall of 2 ln L is 1.642 at 90 %.
    """
    return float(_likelihood_ratio(*_arguments(counting, shape), 0.5 * float(ndtri(level)) ** 2))


def classical(observed: float, background: float, level: float, spread: float = 0.0) -> float:
    """Signal that would leave at most `observed` events with probability 1 - level; zero when none does.

    Parameters
    ----------
    observed, background : float
        Events counted and expected.
    level : float
        Confidence level.
    spread : float
        Standard deviation of the log of the background.
    """
    return _solve(observed, background, spread, 1.0 - level)


def cls(observed: float, background: float, level: float, spread: float = 0.0) -> float:
    """Upper limit from the ratio of tail probabilities with and without signal; parameters as in `classical`."""
    return _solve(observed, background, spread, (1.0 - level) * _tail(observed, 0.0, background, spread))


@lru_cache(maxsize=4096)
def unified(observed: int, background: float, level: float) -> tuple[float, float]:
    """Interval of the unified approach for a known background, physics/9711021, to 0.002 events.

    As in that paper an upper end never falls when the background grows: it is the largest among all larger backgrounds.
    """
    low, high = _unified_raw(observed, background, level)
    # The raw end saws up and down with the background, with teeth shorter than 1.5 events. Larger backgrounds lie on a
    # fixed grid, so that all smaller ones see the same teeth.
    first = math.floor(100.0 * background) + 1
    for larger in range(first, first + 150):
        high = max(high, _unified_raw(observed, 0.01 * larger, level, coarse_only=high)[1])
    return low, high


def _arguments(
    counting: BinnedCounts, shape: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, bool]:
    profile = counting.treatment == "profile"
    return np.ascontiguousarray(shape), counting.background, counting.observed, counting.loading, profile


def _tail(observed: float, signal: float, background: float, spread: float) -> float:
    """Probability to see at most `observed` events, averaged over the background."""
    if spread == 0.0 or background == 0.0:
        return float(pdtr(math.floor(observed), signal + background))
    expected = signal + background * np.exp(spread * _NORMAL_NODES)
    return float(_NORMAL_WEIGHTS @ pdtr(math.floor(observed), expected) / _NORMAL_WEIGHTS.sum())


def _solve(observed: float, background: float, spread: float, probability: float) -> float:
    if _tail(observed, 0.0, background, spread) <= probability:
        return 0.0
    end = 10.0 + 3.0 * observed
    while _tail(observed, end, background, spread) > probability:
        end *= 2.0
    return float(brentq(lambda s: _tail(observed, s, background, spread) - probability, 0.0, end, xtol=1e-10))


def _unified_raw(
    observed: int, background: float, level: float, coarse_only: float | None = None
) -> tuple[float, float]:
    """Ends of the interval; with `coarse_only` the upper end is refined only if it can exceed that value."""
    end = observed + 10.0 + 5.0 * math.sqrt(observed + background + 1.0)
    # Accepted signals can have holes: every pass looks at the same ones.
    start = 0 if coarse_only is None else max(math.floor(coarse_only / _COARSE) - 2, 0)
    end = end if coarse_only is None else min(end, coarse_only + 1.5)
    signals = _COARSE * np.arange(start, math.ceil(end / _COARSE), dtype=float)
    inside = signals[_accepted(observed, signals, background, level)]
    if inside.size == 0:
        return 0.0, 0.0
    if coarse_only is None:
        around_low = np.arange(max(inside[0] - _COARSE, 0.0), inside[0] + _FINE, _FINE)
        low = float(around_low[_accepted(observed, around_low, background, level)][0])
    else:
        low = 0.0
    around_high = np.arange(inside[-1], inside[-1] + _COARSE, _FINE)
    return low, float(around_high[_accepted(observed, around_high, background, level)][-1])


def _accepted(observed: int, signals: FloatArray, background: float, level: float) -> np.ndarray:
    """Whether `observed` lies in the acceptance region of each signal: counts in order of their likelihood ratio."""
    largest = float(signals.max()) + background
    counts = np.arange(int(max(observed, largest + 8.0 * math.sqrt(largest + 1.0))) + 10)
    expected = signals[:, None] + background
    log_probability = xlogy(counts, expected) - expected - gammaln(counts + 1.0)
    best = np.maximum(counts, background)
    ratio = log_probability - (xlogy(counts, best) - best - gammaln(counts + 1.0))
    ahead = ratio > ratio[:, observed, None]  # these enter the region before the observed count does
    return np.asarray(np.where(ahead, np.exp(log_probability), 0.0).sum(axis=1) < level)


@njit(cache=True, fastmath=False, error_model="numpy")
def _peak(
    shape: FloatArray, background: FloatArray, observed: FloatArray, loading: FloatArray, profile: bool,
    precision: float,
) -> tuple[float, float, float]:  # fmt: skip
    """Most likely signal, ln L there, and a signal at which ln L has fallen by `_DEPTH` at least."""
    highest: float = max(
        log_likelihood_of_counts(0.0 * shape, background, observed, loading, profile),
        log_likelihood_of_counts(shape, background, observed, loading, profile),
    )
    end = 8.0
    for _ in range(60):
        value = log_likelihood_of_counts(end * shape, background, observed, loading, profile)
        highest = max(highest, value)
        if value < highest - _DEPTH:
            break
        end *= 2.0
    low, high, golden = 0.0, end, 0.5 * (math.sqrt(5.0) - 1.0)
    left, right = high - golden * (high - low), low + golden * (high - low)
    at_left = log_likelihood_of_counts(left * shape, background, observed, loading, profile)
    at_right = log_likelihood_of_counts(right * shape, background, observed, loading, profile)
    while high - low > precision * (1.0 + high):
        if at_left >= at_right:
            high, right, at_right = right, left, at_left
            left = high - golden * (high - low)
            at_left = log_likelihood_of_counts(left * shape, background, observed, loading, profile)
        else:
            low, left, at_left = left, right, at_right
            right = low + golden * (high - low)
            at_right = log_likelihood_of_counts(right * shape, background, observed, loading, profile)
    best = 0.5 * (low + high)
    at_best = log_likelihood_of_counts(best * shape, background, observed, loading, profile)
    at_zero = log_likelihood_of_counts(0.0 * shape, background, observed, loading, profile)
    return (0.0, at_zero, end) if at_zero >= at_best else (best, at_best, end)


@njit(cache=True, fastmath=False, error_model="numpy")
def _fallen(
    shape: FloatArray, background: FloatArray, observed: FloatArray, loading: FloatArray, profile: bool,
    inside: float, outside: float, height: float, steps: int,
) -> float:  # fmt: skip
    """Signal between `inside` and `outside` at which ln L passes `height`, by bisection."""
    for _ in range(steps):
        middle = 0.5 * (inside + outside)
        if log_likelihood_of_counts(middle * shape, background, observed, loading, profile) > height:
            inside = middle
        else:
            outside = middle
    return outside


@njit(cache=True, fastmath=False, error_model="numpy")
def _likelihood_ratio(
    shape: FloatArray, background: FloatArray, observed: FloatArray, loading: FloatArray, profile: bool,
    fall: float,
) -> float:  # fmt: skip
    best, height, end = _peak(shape, background, observed, loading, profile, 1e-5)
    return _fallen(shape, background, observed, loading, profile, best, end, height - fall, 40)


@njit(cache=True, fastmath=False, error_model="numpy")
def _flat_prior(
    shape: FloatArray, background: FloatArray, observed: FloatArray, loading: FloatArray, profile: bool,
    level: float,
) -> float:  # fmt: skip
    """Integrate a Legendre series through the likelihood at Gauss nodes and find its quantile by bisection."""
    best, height, end = _peak(shape, background, observed, loading, profile, 1e-2)
    cut = height - _DEPTH
    high = _fallen(shape, background, observed, loading, profile, best, end, cut, 8)
    low = 0.0
    if best > 0.0 and not log_likelihood_of_counts(0.0 * shape, background, observed, loading, profile) > cut:
        low = _fallen(shape, background, observed, loading, profile, best, 0.0, cut, 8)
    n = _NODES.size
    coefficients = np.zeros(n)
    for j in range(n):
        signal = low + 0.5 * (high - low) * (1.0 + _NODES[j])
        value = log_likelihood_of_counts(signal * shape, background, observed, loading, profile)
        weight = _WEIGHTS[j] * math.exp(value - height)
        before, now = 1.0, _NODES[j]
        coefficients[0] += 0.5 * weight
        for k in range(1, n):
            coefficients[k] += (k + 0.5) * weight * now
            before, now = now, ((2 * k + 1) * _NODES[j] * now - k * before) / (k + 1)
    left, right = -1.0, 1.0
    for _ in range(44):
        x = 0.5 * (left + right)
        # int_-1^x P_k = (P_{k+1}(x) - P_{k-1}(x))/(2k+1)
        integral, before, now = coefficients[0] * (x + 1.0), 1.0, x
        for k in range(1, n):
            after = ((2 * k + 1) * x * now - k * before) / (k + 1)
            integral += coefficients[k] * (after - before) / (2 * k + 1)
            before, now = now, after
        if integral < level * 2.0 * coefficients[0]:
            left = x
        else:
            right = x
    return low + 0.5 * (high - low) * (1.0 + right)
