"""How well the best fit describes each observation, one line at a time.

No overall p-value is given: with limits, bounded parameters and counts near zero its distribution is not a
chi-square, and only pseudo-experiments could supply it.
"""

from __future__ import annotations

import math


def pull(predicted: float, observed: float | None, uncertainty: float | None) -> float | None:
    """Difference of prediction and observation in units of the uncertainty; None where there is no measurement."""
    if observed is None or not uncertainty:
        return None
    value = (predicted - observed) / uncertainty
    return value if math.isfinite(value) else None


def share_of_limit(predicted: float, limit: float | None) -> float | None:
    """Prediction over upper limit; above one is excluded at the limit's level. None where there is no limit."""
    if not limit:
        return None
    value = predicted / limit
    return value if math.isfinite(value) else None
