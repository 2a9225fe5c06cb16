"""Large-sample limits against the published formulas of arXiv:1007.1727 and tabulated normal quantiles."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import norm

from scanfit.likelihoods.limit_statistics import (
    QUANTILES,
    confidence_from_ratios,
    estimate_behind,
    limits_expected,
    upper_limit,
)


def test_median_limits_are_the_normal_quantiles():
    """CLs: Phi^-1(1 - alpha/2) = 1.95996 (eq. 88 with CLs); without: Phi^-1(1 - alpha) = 1.64485."""
    assert limits_expected(0.95, "cls")[2] == pytest.approx(1.959964, abs=1e-6)
    assert limits_expected(0.95, "one-sided")[2] == pytest.approx(1.644854, abs=1e-6)
    assert limits_expected(0.90, "cls")[2] == pytest.approx(1.644854, abs=1e-6)


def test_bands_follow_the_published_formula():
    """sigma [Phi^-1(1 - alpha Phi(N)) + N] at N standard deviations; eq. 89 with alpha -> alpha Phi(N) for CLs."""
    for column, quantile in enumerate(QUANTILES):
        n = norm.ppf(quantile)
        assert limits_expected(0.95, "cls")[column] == pytest.approx(norm.isf(0.05 * quantile) + n, abs=1e-9)
        assert limits_expected(0.95, "one-sided")[column] == pytest.approx(norm.isf(0.05) + n, abs=1e-9)


@pytest.mark.parametrize("statistic", ["cls", "one-sided"])
def test_estimates_and_limits_invert_each_other(statistic):
    pulls = np.linspace(-4.0, 6.0, 51)
    again = estimate_behind(upper_limit(pulls, 0.95, statistic), 0.95, statistic)
    np.testing.assert_allclose(again, pulls, atol=1e-5)


@pytest.mark.parametrize("pull", [-2.5, -0.5, 0.0, 1.3])
def test_cls_of_a_gaussian_estimate_is_its_ratio_of_tails(pull):
    """For a Gaussian estimate CLs = Phi(pull - strength)/Phi(pull), whatever side of zero the estimate lies on."""
    for strength in (1.4, 2.0, 3.5):
        best = max(pull, 0.0)
        ratio = (strength - pull) ** 2 - (best - pull) ** 2
        exact = norm.cdf(pull - strength) / norm.cdf(pull)
        assert confidence_from_ratios(ratio, strength**2) == pytest.approx(exact, rel=1e-9)


def test_no_signal_is_never_excluded():
    assert confidence_from_ratios(0.0, 0.0) == 1.0
    assert confidence_from_ratios(1e-9, 0.0) == 1.0
    assert math.isfinite(confidence_from_ratios(1e6, 1e6))
