"""Weighted quantiles against the ``corner`` library, a general-purpose reference."""

from __future__ import annotations

import corner
import numpy as np
import pytest

from scanfit.statistics.density import weighted_quantile


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_weighted_quantiles_agree_with_the_corner_library(seed: int) -> None:
    rng = np.random.default_rng(seed)
    values, weights = rng.normal(size=20_000), rng.exponential(size=20_000)
    probabilities = np.array([0.02275, 0.16, 0.5, 0.84, 0.97725])
    ours = weighted_quantile(values, weights / weights.sum(), probabilities)
    # The two place a point's weight differently within its step; a step is 1/20,000 of the weight.
    assert ours == pytest.approx(np.array(corner.quantile(values, probabilities, weights)), abs=2e-3)
