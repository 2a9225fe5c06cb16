"""The two levels that every interval and region here is drawn at, and the likelihood drops that go with them."""

from __future__ import annotations

import math
from types import MappingProxyType
from typing import Final

from scipy.special import gammaincinv

LEVELS: Final = MappingProxyType({"68": math.erf(1.0 / math.sqrt(2.0)), "95": math.erf(math.sqrt(2.0))})
"""Probability within one and two standard deviations of a normal variable: 68.27 % and 95.45 %, under short
labels."""


def likelihood_threshold(level: float, parameters: int) -> float:
    """Drop of 2 ln L from its maximum that bounds a profile-likelihood region.

    Parameters
    ----------
    level : float
        Confidence level in (0, 1).
    parameters : int
        Number of parameters of interest: 1 for an interval, 2 for a region of a plane.

    Returns
    -------
    float
        Quantile of the chi-square distribution (Wilks, Ann. Math. Statist. 9 (1938) 60). The coverage is asymptotic:
        it does not hold exactly at a bound of the parameter space, for few counts, or where a search only sets a
        limit.
    """
    return 2.0 * float(gammaincinv(0.5 * parameters, level))
