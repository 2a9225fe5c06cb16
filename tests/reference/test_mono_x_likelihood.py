"""The simplified likelihood against published formulas, brute-force optimisers, quadrature and sampling."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.optimize import brentq, minimize
from scipy.stats import multivariate_normal, norm, poisson

from scanfit.likelihoods.mediator_widths import spin_one_total_width
from scanfit.likelihoods.mono_x.signal import SpinOneSignal, load_table
from scanfit.likelihoods.mono_x.simplified_likelihood import CorrelatedBackground, SimplifiedLikelihood

BACKGROUND = np.array([1114000.0, 434000.0, 176000.0, 84000.0, 65000.0, 20900.0, 7400.0, 2931.0, 1995.0, 485.0, 206.0])

EDGES = (200.0, 250.0, 300.0, 350.0, 400.0, 500.0, 600.0, 700.0, 800.0, 1000.0, 1200.0, math.inf)


def one_bin(background: float, deviation: float, observed: float, third: float = 0.0) -> SimplifiedLikelihood:
    model = CorrelatedBackground.from_moments(
        np.array([background]), np.array([[deviation**2]]), np.array([third]) if third else None
    )
    return SimplifiedLikelihood(model, np.array([observed]))


def many_bins(scale: float, skew: float = 0.0, correlated: float = 0.7) -> CorrelatedBackground:
    mean = scale * BACKGROUND
    relative = np.linspace(0.02, 0.1, len(mean))
    covariance = np.outer(mean * relative, mean * relative) * (correlated + (1 - correlated) * np.eye(len(mean)))
    return CorrelatedBackground.from_moments(mean, covariance, skew * np.diag(covariance) ** 1.5 if skew else None)


# Evaluated outside this project from arXiv:1809.05548, eqs. 2.9-2.12, with seven decimals.
@pytest.mark.parametrize(
    ("variance", "third", "curvature", "slope"),
    [(25.0, 30.0, 0.2002140, 4.9919764), (25.0, -100.0, -0.6748629, 4.9080668), (100.0, 1500.0, 2.6198820, 9.2882957)],
)
def test_coefficients_of_the_published_expansion(variance, third, curvature, slope):
    model = one_bin(100.0, math.sqrt(variance), 100.0, third).background
    assert model.curvature[0] == pytest.approx(curvature, abs=1e-6)
    assert model.slope[0] == pytest.approx(slope, abs=1e-6)
    # The paper's own moments of a + b theta + c theta^2.
    b, c = model.slope[0], model.curvature[0]
    assert model.constant[0] + c == pytest.approx(100.0, rel=1e-12)
    assert b**2 + 2.0 * c**2 == pytest.approx(variance, rel=1e-12)
    assert 6.0 * b**2 * c + 8.0 * c**3 == pytest.approx(third, rel=1e-12)


def test_covariance_of_the_expansion_is_the_one_given():
    model = many_bins(0.01, skew=0.8)
    slopes, curvatures = model.slope, model.curvature
    rho = model.correlation
    # Gaussian moments: cov(n_I, n_J) = b_I b_J rho + 2 c_I c_J rho^2.
    covariance = np.outer(slopes, slopes) * rho + 2.0 * np.outer(curvatures, curvatures) * rho**2
    mean = 0.01 * BACKGROUND
    deviation = mean * np.linspace(0.02, 0.1, len(mean))
    np.testing.assert_allclose(np.diag(covariance), deviation**2, rtol=1e-12)
    np.testing.assert_allclose(covariance / np.outer(deviation, deviation), 0.7 + 0.3 * np.eye(11), rtol=1e-12)


@pytest.mark.parametrize(("signal", "background", "z"), [(10, 9, 2.89727), (5, 1, 3.39133), (10, 100, 0.98399)])
def test_asimov_significance_without_uncertainty(signal, background, z):
    """arXiv:1007.1727: sqrt(2[(s + b) ln(1 + s/b) - s]), evaluated outside this project."""
    likelihood = one_bin(background, 1e-4 * background, signal + background)
    gain = likelihood.profile(np.array([float(signal)])) - likelihood.profile(np.zeros(1))
    assert math.sqrt(2.0 * gain) == pytest.approx(z, abs=1e-4)


def test_asimov_significance_with_a_control_sample_is_met_where_both_constraints_are_alike():
    """The closed form of arXiv:1007.1727 has a Poisson control sample; a Gaussian constraint agrees for small errors.

    For (s, b, sigma_b) = (10, 9, 3) the forms differ: 1.911 against 2.049 here.
    """
    s, b, sigma = 50.0, 100.0, 1.0
    total, variance = s + b, sigma**2
    square = total * math.log(total * (b + variance) / (b**2 + total * variance))
    square -= b**2 / variance * math.log(1.0 + variance * s / (b * (b + variance)))
    likelihood = one_bin(b, sigma, total)
    gain = likelihood.profile(np.array([s])) - likelihood.profile(np.zeros(1))
    assert math.sqrt(2.0 * gain) == pytest.approx(math.sqrt(2.0 * square), abs=2e-4)


@pytest.mark.parametrize(
    ("signal", "background", "deviation"), [(10.0, 9.0, 3.0), (50.0, 100.0, 10.0), (0.0, 1e6, 3e4)]
)
def test_one_gaussian_bin_has_a_closed_form(signal, background, deviation):
    """Derived here: the most likely expectation solves x^2 + (sigma^2 - b) x - N sigma^2 = 0."""
    observed = background + 10.0
    variance, centre = deviation**2, background + signal
    expectation = 0.5 * (centre - variance + math.sqrt((centre - variance) ** 2 + 4.0 * observed * variance))
    exact = poisson.logpmf(observed, expectation) - 0.5 * ((expectation - centre) / deviation) ** 2
    found = one_bin(background, deviation, observed).profile(np.array([signal]))
    # The smooth floor at zero background shifts n by 1e-6 sigma^2/n.
    assert found == pytest.approx(exact, abs=3e-6)


@pytest.mark.parametrize("skew", [0.0, 0.5, -0.5])
@pytest.mark.parametrize("scale", [1e-3, 1.0])
def test_profile_meets_a_brute_force_optimiser(scale, skew):
    model = many_bins(scale, skew)
    rng = np.random.default_rng(5)
    observed = rng.poisson(model.expected(model.lower @ rng.standard_normal(11))).astype(float)
    signal = 0.1 * scale * BACKGROUND * np.linspace(0.1, 1.0, 11)
    spread = np.linspace(0.1, 0.3, 11)

    def cost(z: np.ndarray) -> float:
        rate = model.expected(model.lower @ z[:-1]) + signal * np.exp(spread * z[-1])
        return float(-poisson.logpmf(observed, rate).sum() + 0.5 * z @ z)

    def gradient(z: np.ndarray) -> np.ndarray:
        theta = model.lower @ z[:-1]
        varied = signal * np.exp(spread * z[-1])
        pull = 1.0 - observed / (model.expected(theta) + varied)
        own = model.lower.T @ (pull * (model.slope + 2.0 * model.curvature * theta))
        return z + np.append(own, (pull * varied * spread).sum())

    brute = minimize(cost, np.zeros(12), jac=gradient, method="TNC", options={"maxfun": 3000})
    found = SimplifiedLikelihood(model, observed).profile(signal, spread)
    assert found == pytest.approx(-brute.fun, abs=1e-6)


def test_marginal_probabilities_add_up_to_one():
    """Normalisation: over all counts of one bin the marginal likelihood is a probability."""
    total = sum(math.exp(one_bin(20.0, 3.0, float(n), 20.0).marginal(np.array([4.0]))) for n in range(100))
    assert total == pytest.approx(1.0, abs=2e-4)


@pytest.mark.parametrize(
    ("background", "deviation", "third", "observed"),
    [(9.0, 1.5, 0.0, 14.0), (100.0, 10.0, 800.0, 80.0), (6e5, 2e4, 0.0, 5.7e5)],
)
def test_marginal_of_one_bin_meets_quadrature(background, deviation, third, observed):
    likelihood = one_bin(background, deviation, observed, third)
    signal = 0.1 * background

    def density(theta: float) -> float:
        rate = likelihood.background.expected(np.array([theta]))[0] + signal
        return math.exp(poisson.logpmf(observed, rate) - likelihood.profile(np.array([signal]))) * norm.pdf(theta)

    # Split finely: where counts are many the peak is narrow.
    edges = np.linspace(-8.0, 8.0, 161)
    area = sum(quad(density, low, high)[0] for low, high in itertools.pairwise(edges))
    exact = math.log(area) + likelihood.profile(np.array([signal]))
    assert likelihood.marginal(np.array([signal])) == pytest.approx(exact, abs=5e-4)
    # Plain Laplace misses by more than what is left, where there is something to miss.
    correction = likelihood.laplace_correction(np.array([signal]))
    error = abs(likelihood.marginal(np.array([signal])) - exact)
    assert error < max(0.5 * abs(correction), 1e-6)


@pytest.mark.parametrize("skew", [0.0, 0.5])
def test_marginal_meets_importance_sampling(skew):
    model = many_bins(1e-3, skew)
    rng = np.random.default_rng(11)
    observed = rng.poisson(model.expected(model.lower @ rng.standard_normal(11))).astype(float)
    signal, spread = 1e-4 * BACKGROUND, np.full(11, 0.2)
    draws = 200_000
    z = rng.standard_normal((draws, 12))
    # Sample from a Gaussian around the mode found by simple iteration of the sample itself: prior first, then refined.
    centre, covariance = np.zeros(12), np.eye(12)
    for _ in range(3):
        proposal = multivariate_normal(centre, covariance)
        points = centre + z @ np.linalg.cholesky(covariance).T
        rate = model.expected(points[:, :-1] @ model.lower.T) + signal * np.exp(spread * points[:, -1:])
        log_weight = poisson.logpmf(observed, rate).sum(axis=1) + multivariate_normal(np.zeros(12)).logpdf(points)
        log_weight -= proposal.logpdf(points)
        weight = np.exp(log_weight - log_weight.max())
        sampled = math.log(weight.mean()) + log_weight.max()
        error = weight.std() / weight.mean() / math.sqrt(draws)
        centre = np.average(points, axis=0, weights=weight)
        covariance = 1.1 * np.cov(points.T, aweights=weight)
    likelihood = SimplifiedLikelihood(model, observed)
    assert error < 5e-3
    assert likelihood.marginal(signal, spread) == pytest.approx(sampled, abs=5.0 * error)


def test_marginal_integrates_the_signal_nuisance_as_an_outer_quadrature_does():
    model = many_bins(1.0)
    likelihood = SimplifiedLikelihood(model, BACKGROUND.copy())
    signal = 0.03 * BACKGROUND
    spread = np.linspace(0.15, 0.3, 11)
    nodes = np.linspace(-8.0, 8.0, 321)
    values = np.array([likelihood.marginal(signal * np.exp(spread * x)) + norm.logpdf(x) for x in nodes])
    outer = math.log(np.exp(values - values.max()).sum() * (nodes[1] - nodes[0])) + values.max()
    assert likelihood.marginal(signal, spread) == pytest.approx(outer, abs=2e-3)


@pytest.mark.parametrize("events", [3e5, 3e6, 1e7, 5e7])
def test_profile_of_an_excluded_signal_is_the_highest_of_its_maxima(events):
    """Signals far too large have lower maxima where a background vanishes; many starts find the highest."""
    model = many_bins(1.0, correlated=0.8)
    shape, spread = SpinOneSignal(load_table("mono-jet", 13.0), EDGES)(20.0, 1.0, False, 1.0, 1.0, 1.0)
    signal, spread = events * shape / shape.sum(), np.hypot(spread, 0.1)

    def cost(z: np.ndarray) -> tuple[float, np.ndarray]:
        raw = model.constant + model.slope * (model.lower @ z[:-1])
        root = np.sqrt(raw**2 + (2e-3 * model.slope) ** 2)
        varied = signal * np.exp(np.clip(spread * z[-1], -500.0, 500.0))
        rate = 0.5 * (raw + root) + varied
        pull = 1.0 - BACKGROUND / rate
        own = model.lower.T @ (pull * 0.5 * (1.0 + raw / root) * model.slope)
        value = (rate - BACKGROUND + BACKGROUND * np.log(BACKGROUND / rate)).sum() + 0.5 * z @ z
        return float(value), z + np.append(own, (pull * varied * spread).sum())

    starts = [np.append(np.zeros(11), z) for z in (-80.0, -50.0, -30.0, -20.0, -10.0, -5.0, 0.0)]
    # The second optimiser polishes what the first one found.
    rough = [minimize(cost, start, jac=True, method="TNC", options={"maxfun": 5000}).x for start in starts]
    options = {"maxiter": 5000, "ftol": 1e-15, "gtol": 1e-9}
    best = min(minimize(cost, start, jac=True, method="L-BFGS-B", options=options).fun for start in rough)
    likelihood = SimplifiedLikelihood(model, BACKGROUND.copy())
    found = likelihood.profile(signal, spread) - poisson.logpmf(BACKGROUND, BACKGROUND).sum()
    assert found == pytest.approx(-best, abs=1e-4)


def test_strongly_excluded_signals_stay_finite_and_ordered():
    likelihood = SimplifiedLikelihood(many_bins(1.0), BACKGROUND.copy())
    spread = np.full(11, 0.25)
    for method in (likelihood.profile, likelihood.marginal):
        values = [method(factor * BACKGROUND, spread) for factor in (0.0, 0.3, 3.0, 30.0, 300.0)]
        assert np.all(np.isfinite(values))
        assert np.all(np.diff(values) < 0.0)
        assert values[0] - values[-1] > 100.0


def test_empty_bins_with_large_uncertainty_are_handled():
    """The most likely background would be below zero; held at zero it costs theta^2/2 with theta = -a/b."""
    likelihood = one_bin(1.0, 2.0, 0.0)
    assert likelihood.profile(np.zeros(1)) == pytest.approx(-0.5 * 0.5**2, abs=0.02)
    assert likelihood.best_background(np.zeros(1))[0] == pytest.approx(0.0, abs=0.02)


@pytest.mark.parametrize(("luminosity", "reach"), [(13.0, 1800.0), (101.0, 2100.0)])
def test_axial_reach_is_that_of_the_independent_estimate(luminosity, reach):
    """With 5 % systematics per bin about 1.8 TeV at 13/fb and 2.1 TeV at 101/fb, computed outside this project.

    Published for comparison: exclusion up to 1.95 TeV at 12.9/fb (arXiv:1703.01651, from memory). Benchmark:
    g_quark = 0.25, g_dark = 1, light dark matter.
    """
    background = BACKGROUND * luminosity / 100.0
    model = CorrelatedBackground.from_moments(background, np.diag((0.05 * background) ** 2))
    likelihood = SimplifiedLikelihood(model, background)
    signal = SpinOneSignal(load_table("mono-jet", 13.0), EDGES)
    shower = np.full(11, math.log(1.1))

    def above_limit(mass: float) -> float:
        width = spin_one_total_width(mass, "axial", 1.0, 1.0, 0.25)
        events = 1.12 * luminosity * 1000.0 * signal(mass, width, True, 1.0, 0.25, 1.0)[0]
        return 2.0 * (likelihood.profile(np.zeros(11)) - likelihood.profile(events, shower)) - 2.706

    assert brentq(above_limit, 500.0, 5000.0, xtol=1.0) == pytest.approx(reach, rel=0.10)


@pytest.mark.parametrize(
    ("background", "deviation", "observed", "signal"),
    [
        (2.0, 2.0, 0.0, 1.0),
        (10.0, 4.0, 6.0, 2.0),
        (10.0, 6.0, 25.0, 2.0),
        (1.0, 2.0, 3.0, 0.0),
        (206.0, 82.0, 202.0, 30.0),
    ],
)
def test_marginal_with_a_background_that_reaches_zero_meets_quadrature(background, deviation, observed, signal):
    likelihood = one_bin(background, deviation, observed)
    assert likelihood.sampled
    theta = np.linspace(-9.0, 9.0, 200_001)
    raw = background + deviation * theta
    rate = 0.5 * (raw + np.sqrt(raw**2 + (2e-3 * deviation) ** 2)) + signal
    exact = math.log(np.trapezoid(poisson.pmf(observed, rate) * norm.pdf(theta), theta))
    assert likelihood.marginal(np.array([signal])) == pytest.approx(exact, abs=1e-3)
    if observed == 0.0:  # where the peak sits on the wall, the expansion that this replaces is lost
        peak, volume, correction, _ = likelihood._solve(np.array([signal]), None, volume=True)
        assert abs(likelihood._saturated + peak + volume + correction - exact) > 1.0


def test_sampled_marginal_of_many_bins_meets_a_larger_independent_sample():
    """Eleven bins, uncertainties from 5 to 90 %; plain sampling from the nuisances' own density, 2 million points."""
    scale = BACKGROUND * 1e-4
    deviation = scale * np.linspace(0.05, 0.9, 11)
    covariance = np.outer(deviation, deviation) * (0.5 + 0.5 * np.eye(11))
    model = CorrelatedBackground.from_moments(scale, covariance)
    rng = np.random.default_rng(3)
    observed = rng.poisson(model.expected(model.lower @ rng.standard_normal(11))).astype(float)
    likelihood = SimplifiedLikelihood(model, observed)
    signal, spread = 0.1 * scale, np.full(11, 0.2)
    total, squares, count = 0.0, 0.0, 0
    top = likelihood.profile(signal, spread)
    for _ in range(20):
        z = rng.standard_normal((100_000, 12))
        rate = model.expected(z[:, :-1] @ model.lower.T) + signal * np.exp(spread * z[:, -1:])
        weight = np.exp(poisson.logpmf(observed, rate).sum(axis=1) - top)
        total, squares, count = total + weight.sum(), squares + (weight**2).sum(), count + len(weight)
    sampled, error = math.log(total / count) + top, math.sqrt(squares) / total
    assert error < 0.02
    assert likelihood.marginal(signal, spread) == pytest.approx(sampled, abs=0.015 + 4.0 * error)
    assert likelihood.effective_samples(signal, spread) > 200.0
