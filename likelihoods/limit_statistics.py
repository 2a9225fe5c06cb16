"""Upper limits in the large-sample approximation of arXiv:1007.1727, with and without CLs.

The signal strength is estimated by a Gaussian variate of standard deviation sigma. Everything is counted in units of
sigma: `pull` is the estimate, `strength` the hypothesis that is tested.
"""

from __future__ import annotations

import math
from typing import Final, Literal

import numpy as np
from scipy.special import log_ndtr, ndtr, ndtri, ndtri_exp

from scanfit.priors import FloatArray

Statistic = Literal["cls", "one-sided"]

QUANTILES: Final = (0.025, 0.16, 0.50, 0.84, 0.975)
"""Of background-only limits; the columns of `scanfit.contracts.LimitCurve.bands`."""

# Without CLs a limit can be negative; with it the limit is positive whatever the estimate.
_PULLS: Final = np.linspace(-12.0, 12.0, 9601)


def upper_limit(pull: FloatArray, level: float, statistic: Statistic) -> FloatArray:
    """Upper limit, in units of sigma, when the estimate is `pull`."""
    pull = np.asarray(pull, dtype=float)
    if statistic == "one-sided":
        return pull + ndtri(level)
    return np.asarray(pull - ndtri_exp(math.log1p(-level) + log_ndtr(pull)))


def estimate_behind(limit: FloatArray, level: float, statistic: Statistic) -> FloatArray:
    """Estimate, in units of sigma, that leads to the upper limit `limit` (in units of sigma, too)."""
    limit = np.asarray(limit, dtype=float)
    if statistic == "one-sided":
        return limit - ndtri(level)
    return np.interp(limit, upper_limit(_PULLS, level, statistic), _PULLS)


def limits_expected(level: float, statistic: Statistic) -> FloatArray:
    """Limits without signal at `QUANTILES`, in units of sigma, shape (5,)."""
    return upper_limit(ndtri(np.array(QUANTILES)), level, statistic)


def confidence_from_ratios(observed: float, asimov: float) -> float:
    """CLs of a signal from the one-sided test statistics of the data and of the background-only Asimov data.

    Parameters
    ----------
    observed, asimov : float
        -2 ln of the profile likelihood ratio between the signal and the best signal no stronger than it; both >= 0.

    Returns
    -------
    float
        The signal is excluded at confidence level 1 - CLs.
    """
    root, sensitivity = math.sqrt(max(observed, 0.0)), math.sqrt(max(asimov, 0.0))
    if root <= sensitivity:
        both, background = ndtr(-root), ndtr(sensitivity - root)
    else:
        # The estimate lies below zero: the statistic that is bounded at zero signal, arXiv:1007.1727, eq. 62.
        if sensitivity == 0.0:
            return 1.0
        both = ndtr(-(observed + asimov) / (2.0 * sensitivity))
        background = ndtr(-(observed - asimov) / (2.0 * sensitivity))
    return float(both / background) if background > 0.0 else 0.0
