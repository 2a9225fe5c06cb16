"""Insertion ranks: were the new live points of nested sampling drawn as they should have been? (arXiv:2006.03371)

The rank of a new live point's likelihood among the other live points is uniform if it was drawn uniformly from the
region above the threshold. A proposal that misses part of the region, or prefers part of it, bends the distribution.
Passing is no proof: a proposal that goes wrong by the same proportion at every threshold leaves the ranks uniform.
"""

from __future__ import annotations

import numpy as np
from scipy.stats import kstwo

from scanfit.priors import FloatArray


class InsertionRanks:
    """Collects the ranks of new live points.

    Parameters
    ----------
    random : Generator
        Spreads each rank evenly over its place, which also breaks ties.

    Attributes
    ----------
    places : list of float
        Ranks as fractions in (0, 1).
    """

    def __init__(self, random: np.random.Generator) -> None:
        self.places: list[float] = []
        self._random = random

    def add(self, live_log_likelihoods: FloatArray, newest: int, threshold: float) -> None:
        """Count the live point at index `newest`, among those above the threshold that it had to pass."""
        value = live_log_likelihoods[newest]
        up_to_value = int(np.count_nonzero(live_log_likelihoods <= value))
        below = int(np.count_nonzero(live_log_likelihoods < value))
        out = int(np.count_nonzero(live_log_likelihoods <= threshold))
        place = below - out + (up_to_value - below) * self._random.random()
        self.places.append(place / (len(live_log_likelihoods) - out))

    def p_value(self) -> float:
        """Probability of ranks at least as far from uniform, by the Kolmogorov-Smirnov distance; 1 without ranks."""
        return uniformity(np.array(self.places))

    def p_value_rolling(self, length: int) -> float:
        """The same for the worst of the consecutive stretches of `length` ranks, corrected for their number.

        Finds a proposal that went wrong for a while only.
        """
        stretches = len(self.places) // length
        if stretches == 0:
            return 1.0
        worst = min(uniformity(np.array(part)) for part in np.array_split(self.places, stretches))
        return float(-np.expm1(stretches * np.log1p(-worst))) if worst < 1.0 else 1.0


def uniformity(places: FloatArray) -> float:
    """Kolmogorov-Smirnov p-value of numbers in (0, 1) against the uniform distribution; 1 if there are none."""
    count = len(places)
    if count == 0:
        return 1.0
    ordered = np.sort(places)
    steps = np.arange(1, count + 1) / count
    distance = max(float((steps - ordered).max()), float((ordered - steps + 1.0 / count).max()))
    return float(kstwo.sf(distance, count))
