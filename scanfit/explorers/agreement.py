"""Have several independent ensembles of walkers found the same distribution?

Chains are arrays of shape ``(ensembles, steps, walkers, quantities)``, burn-in removed. No single criterion is enough:
autocorrelation looks at each walker alone and cannot see a mode that walkers never enter or leave, so it is asked for
together with R-hat between ensembles and with a test of the ensembles' means against their own standard errors.
"""

from __future__ import annotations

import numpy as np
from emcee.autocorr import integrated_time
from scipy.stats import chi2, norm, rankdata

from scanfit.priors import FloatArray


def autocorrelation_times(chains: FloatArray) -> FloatArray:
    """Integrated autocorrelation time of each quantity, in steps, averaged over all walkers.

    The larger of the times of the quantity itself and of its distance from the median: tails may move more slowly than
    the bulk.

    Parameters
    ----------
    chains : ndarray, shape (ensembles, steps, walkers, quantities)

    Returns
    -------
    ndarray, shape (quantities,)
        At least 1; infinite where a walker never moved; 1 for a quantity that has one value everywhere.

    Notes
    -----
    The estimator is emcee's, with its self-consistent window of 5 autocorrelation times. It subtracts each walker's own
    mean, hence is low by a share of about ten times the result over the length of the chains.
    """
    folded = np.abs(chains - np.median(chains, axis=(0, 1, 2)))
    return np.maximum(_plain_times(chains), _plain_times(folded))


def _plain_times(chains: FloatArray) -> FloatArray:
    ensembles, steps, walkers, quantities = chains.shape
    side_by_side = chains.transpose(1, 0, 2, 3).reshape(steps, ensembles * walkers, quantities)
    with np.errstate(invalid="ignore"):  # the autocorrelation of a constant is 0/0
        times = np.asarray(integrated_time(side_by_side, tol=0))
    constant = np.ptp(chains, axis=(0, 1, 2)) == 0.0
    return np.where(constant, 1.0, np.maximum(np.where(np.isnan(times), np.inf, times), 1.0))


def rank_normalised(values: FloatArray) -> FloatArray:
    """Values of any shape replaced by the normal scores of their ranks (arXiv:1903.08008, equation 14)."""
    ranks = rankdata(values, axis=None).reshape(values.shape)
    return np.asarray(norm.ppf((ranks - 0.375) / (values.size + 0.25)))


def r_hat(chains: FloatArray) -> FloatArray:
    """Rank-normalised split R-hat of each quantity: the larger of the bulk's and the tails' (arXiv:1903.08008).

    All walkers of an ensemble count as one chain, since they are not independent; each is split into its first and
    second half.

    Parameters
    ----------
    chains : ndarray, shape (ensembles, steps, walkers, quantities)

    Returns
    -------
    ndarray, shape (quantities,)
        1 when all agree.
    """
    ensembles, steps, _, quantities = chains.shape
    half = steps // 2
    halves = np.concatenate([chains[:, :half], chains[:, half : 2 * half]])
    draws = halves.reshape(2 * ensembles, -1, quantities)
    found = np.empty(quantities)
    for number in range(quantities):
        values = draws[:, :, number]
        folded = np.abs(values - np.median(values))
        found[number] = max(_plain_r_hat(rank_normalised(values)), _plain_r_hat(rank_normalised(folded)))
    return found


def _plain_r_hat(draws: FloatArray) -> float:
    """R-hat of chains, shape ``(chains, draws)``."""
    count = draws.shape[1]
    within = float(draws.var(axis=1, ddof=1).mean())
    between = float(draws.mean(axis=1).var(ddof=1))
    if within == 0.0:
        return 1.0 if between == 0.0 else np.inf
    return float(np.sqrt((count - 1) / count + between / within))


def agreement_p_values(chains: FloatArray) -> FloatArray:
    """Probability that means of ensembles differ as much as they do, if all sample one distribution.

    Each ensemble's mean has a standard error from the autocorrelation of its own mean over walkers, step by step, so
    that walkers need not be independent. Both the normal scores of a quantity and those of its distance from the median
    are tested, and the smaller probability is doubled.

    Parameters
    ----------
    chains : ndarray, shape (ensembles, steps, walkers, quantities)

    Returns
    -------
    ndarray, shape (quantities,)
        Small where the ensembles disagree: typically a mode that holds different shares of them.
    """
    quantities = chains.shape[3]
    found = np.empty(quantities)
    for number in range(quantities):
        values = chains[..., number]
        folded = np.abs(values - np.median(values))
        found[number] = min(1.0, 2.0 * min(_p_value_of_means(values), _p_value_of_means(folded)))
    return found


def _p_value_of_means(values: FloatArray) -> float:
    ensembles, steps, _ = values.shape
    series = rank_normalised(values).mean(axis=2)  # (ensembles, steps): the mean over walkers
    if np.ptp(series) == 0.0:
        return 1.0
    time = float(_plain_times(series[:, :, np.newaxis, np.newaxis])[0])
    variance = float(series.var(axis=1, ddof=1).mean()) * min(time, float(steps)) / steps
    if variance == 0.0:
        return 0.0  # stuck at different places
    means = series.mean(axis=1)
    return float(chi2.sf(np.square(means - means.mean()).sum() / variance, ensembles - 1))
