"""Credible intervals against distributions whose highest-density regions are known in closed form."""

import numpy as np
import pytest
from scipy import stats

from scanfit.results import Axis
from scanfit.statistics.credible import credible_intervals, credible_region, intervals_below, marginal_density
from scanfit.statistics.density import effective_size, estimate, weighted_quantile
from scanfit.statistics.levels import LEVELS, likelihood_threshold

LINEAR = Axis("x", "x", "linear")


def found(values, weights, level, axis=LINEAR):
    density = marginal_density(values, weights, axis)
    assert density is not None
    return credible_intervals(density, LEVELS[level], axis)


def test_levels_are_one_and_two_sigma():
    # Reference: scipy's normal distribution.
    for label, sigmas in (("68", 1.0), ("95", 2.0)):
        assert LEVELS[label] == pytest.approx(stats.norm.cdf(sigmas) - stats.norm.cdf(-sigmas), abs=1e-15)


@pytest.mark.parametrize("parameters", [1, 2, 3, 5])
@pytest.mark.parametrize("level", [0.6827, 0.90, 0.9545, 0.9973])
def test_likelihood_thresholds_are_chi_square_quantiles(parameters, level):
    assert likelihood_threshold(level, parameters) == pytest.approx(stats.chi2.ppf(level, parameters), rel=1e-12)


def test_weighted_quantile_with_equal_weights_is_the_plain_one():
    values = np.random.default_rng(1).normal(size=999)
    expected = np.quantile(values, [0.16, 0.5, 0.84], method="hazen")  # same convention: midpoints of the steps
    assert weighted_quantile(values, np.ones(999), np.array([0.16, 0.5, 0.84])) == pytest.approx(expected)


def test_weighted_quantile_takes_integer_weights_as_repetitions():
    values, weights = np.array([1.0, 2.0, 5.0]), np.array([1.0, 8.0, 1.0])
    assert weighted_quantile(values, weights, 0.5) == pytest.approx(2.0)
    assert effective_size(weights) == pytest.approx(100.0 / 66.0)


@pytest.mark.parametrize("seed", range(4))
def test_gaussian_intervals(seed):
    size = 6000
    values = 3.0 + 2.0 * np.random.default_rng(seed).normal(size=size)
    for label, sigmas in (("68", 1.0), ("95", 2.0)):
        ((low, high),) = found(values, np.ones(size), label)
        # Ends scatter by about 2/sqrt(n) standard deviations; four times that.
        assert (low - 3.0) / 2.0 == pytest.approx(-sigmas, abs=8.0 / np.sqrt(size))
        assert (high - 3.0) / 2.0 == pytest.approx(sigmas, abs=8.0 / np.sqrt(size))


def test_weights_are_used():
    rng = np.random.default_rng(2)
    values = rng.uniform(-6.0, 6.0, 40_000)
    ((low, high),) = found(values, stats.norm.pdf(values), "68")
    assert (low, high) == pytest.approx((-1.0, 1.0), abs=0.08)


def test_density_cut_by_the_prior_is_not_depleted_at_the_edge():
    # Exponential: the interval starts at the bound and ends at -ln(1 - level).
    values = np.random.default_rng(3).exponential(size=8000)
    ((low, high),) = found(values, np.ones(8000), "68", Axis("x", "x", "linear", 0.0, 50.0))
    assert low == 0.0
    assert high == pytest.approx(-np.log(1.0 - LEVELS["68"]), abs=0.06)


def test_bimodal_density_has_two_intervals():
    rng = np.random.default_rng(4)
    values = np.r_[rng.normal(-5.0, 1.0, 5000), rng.normal(5.0, 0.5, 5000)]
    intervals = found(values, np.ones(10_000), "95")
    assert len(intervals) == 2
    # Reference: highest-density set of the mixture, found on a fine grid with scipy's densities.
    grid = np.linspace(-12.0, 9.0, 200_001)
    density = 0.5 * stats.norm.pdf(grid, -5.0, 1.0) + 0.5 * stats.norm.pdf(grid, 5.0, 0.5)
    ranked = np.sort(density)[::-1]
    height = ranked[np.searchsorted(np.cumsum(ranked) * (grid[1] - grid[0]), LEVELS["95"])]
    inside = grid[density >= height]
    ends = [inside[0], inside[inside < 0][-1], inside[inside > 0][0], inside[-1]]
    assert np.ravel(intervals) == pytest.approx(ends, abs=0.12)


def test_one_mode_is_not_cut_into_many():
    """Control for the test above: no number of samples makes two intervals of one normal density."""
    for size in (300, 1000, 10_000):
        values = np.random.default_rng(size).normal(size=size)
        assert len(found(values, np.ones(size), "68")) == len(found(values, np.ones(size), "95")) == 1


def test_logarithmic_axis_is_treated_in_the_logarithm():
    values = 10.0 ** np.random.default_rng(5).normal(-46.0, 0.3, 6000)
    ((low, high),) = found(values, np.ones(6000), "68", Axis("s", "s", "log"))
    assert np.log10([low, high]) == pytest.approx([-46.3, -45.7], abs=0.03)


def test_value_that_holds_much_of_the_weight_stays_inside_its_bound():
    rng = np.random.default_rng(6)
    values = np.minimum(1.0, rng.lognormal(0.0, 0.3, 5000))  # half of the points sit at exactly one
    ((low, high),) = found(values, np.ones(5000), "68", Axis("f", "f", "log"))
    assert high == 1.0
    # The atom holds 1/2; the rest, LEVEL - 1/2, comes from just below: ln low = 0.3 Phi^-1(1 - LEVEL).
    assert low == pytest.approx(np.exp(0.3 * stats.norm.ppf(1.0 - LEVELS["68"])), abs=0.02)


@pytest.mark.parametrize("label", ["68", "95"])
def test_area_of_gaussian_region(label):
    size, correlation = 8000, 0.9
    covariance = np.array([[1.0, correlation], [correlation, 1.0]])
    x, y = np.random.default_rng(7).multivariate_normal([0.0, 0.0], covariance, size).T
    region = credible_region(x, y, np.ones(size), (LINEAR, LINEAR))
    assert region is not None
    cell = np.prod([edge[1] - edge[0] for edge in region.density.edges])
    area = np.count_nonzero(region.density.height >= region.heights[label]) * cell
    expected = np.pi * stats.chi2.ppf(LEVELS[label], 2) * np.sqrt(np.linalg.det(covariance))
    assert area == pytest.approx(expected, rel=0.06)


def test_thin_band_is_not_smeared():
    """A rule-of-thumb kernel would widen this band several times over."""
    rng = np.random.default_rng(8)
    x = rng.normal(size=5000)
    region = credible_region(x, np.square(x) + 0.05 * rng.normal(size=5000), np.ones(5000), (LINEAR, LINEAR))
    assert region is not None
    cell = np.prod([edge[1] - edge[0] for edge in region.density.edges])
    # A sheared normal density: its areas are known. The band is thinner than a cell, so some widening is due to these.
    expected = np.pi * stats.chi2.ppf(LEVELS["68"], 2) * 0.05
    assert np.count_nonzero(region.density.height >= region.heights["68"]) * cell < 1.5 * expected


def test_density_is_normalised_and_keeps_its_mass():
    values = np.random.default_rng(9).uniform(0.0, 1.0, (4000, 1))
    density = estimate(values, np.ones(4000), [(0.0, 1.0)])
    width = density.edges[0][1] - density.edges[0][0]
    assert density.height.sum() * width == pytest.approx(1.0)
    assert density.height[0] == pytest.approx(1.0, abs=0.15)


def test_axis_without_extent_has_no_density():
    assert marginal_density(np.full(50, 2.0), np.ones(50), LINEAR) is None
    assert marginal_density(np.full(50, np.nan), np.ones(50), LINEAR) is None
    assert marginal_density(np.zeros(50), np.ones(50), Axis("s", "s", "log")) is None


def test_stretches_below_a_threshold():
    assert intervals_below(np.array([2.0, 0.0, 2.0, 4.0, 1.0]), 1.0) == [(0.5, 1.5), (4.0, 4.0)]
    assert intervals_below(np.array([0.0, 0.0]), 1.0) == [(0.0, 1.0)]
    assert intervals_below(np.array([np.inf, 0.0, np.inf]), 1.0) == [(1.0, 1.0)]
