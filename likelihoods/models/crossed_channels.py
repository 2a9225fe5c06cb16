"""Angular averages of t- and u-channel propagators when a pair of equal masses turns into another.

With m the mass of the incoming (and exchanged) particle, M that of the outgoing one and c the cosine of the scattering
angle in the centre-of-mass frame, t - m^2 = -(a - b c) and u - m^2 = -(a + b c), where a = s/2 - M^2 and
b = (s/2) beta_m beta_M.
"""

from __future__ import annotations

import math

from numba import njit


@njit(cache=True, error_model="numpy")
def crossed_averages(s: float, incoming: float, outgoing: float) -> tuple[float, float]:
    """Averages over c of 1/(a^2 - b^2 c^2) and of its square, for s above both thresholds (GeV^2, masses in GeV)."""
    m2, M2 = incoming**2, outgoing**2
    a = 0.5 * s - M2
    b = 0.5 * s * math.sqrt(max(0.0, (1.0 - 4.0 * m2 / s) * (1.0 - 4.0 * M2 / s)))
    difference = M2**2 + m2 * (s - 4.0 * M2)  # a^2 - b^2 without cancellation
    x = b / a
    # atanh(x)/x, whose logarithm loses digits at small x.
    ratio = 1.0 + x**2 / 3.0 + x**4 / 5.0 if x < 1e-3 else math.log((a + b) / math.sqrt(difference)) / x
    first = ratio / a**2
    return first, 0.5 * (1.0 / difference + first) / a**2
