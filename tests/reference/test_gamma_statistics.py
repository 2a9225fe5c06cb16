"""Profiled and marginal likelihoods against brute force on dense grids, and what the J-factor's density must not do."""

import dataclasses
import math

import numpy as np
import pytest
from scipy.optimize import minimize
from scipy.stats import norm, poisson

from scanfit.likelihoods.gamma_dwarfs import j_factor
from scanfit.likelihoods.gamma_dwarfs.dispersion import normal_response
from scanfit.likelihoods.gamma_dwarfs.likelihood import DwarfLikelihood
from scanfit.likelihoods.gamma_dwarfs.limits import one_sided_fall, upper_limit
from scanfit.likelihoods.gamma_dwarfs.telescope import Observation

EDGES = np.geomspace(0.5, 500.0, 25)
FALLING = 400.0 * (EDGES[:-1] ** -1.4 - EDGES[1:] ** -1.4)
SHAPE = np.exp(-np.arange(24) / 6.0) * (np.arange(24) < 18)


def observation(n_targets, rng, injected=0.0, background_error=0.0, asymmetric=True):
    background = np.outer(rng.uniform(0.3, 1.5, n_targets), FALLING)
    log10_j = rng.uniform(17.6, 19.5, n_targets)
    minus = rng.uniform(0.12, 0.65, n_targets)
    signal = injected * np.outer(10.0 ** (log10_j - 18.5), SHAPE)
    return Observation(
        title="invented",
        invented=True,
        names=tuple(f"target {i}" for i in range(n_targets)),
        response=normal_response(EDGES, 0.0),
        acceptance=np.full((n_targets, 24), 10.0**-18.5),
        log10_j=log10_j,
        j_minus=minus,
        j_plus=rng.uniform(0.12, 0.65, n_targets) if asymmetric else minus,
        background=background,
        background_error=np.full(n_targets, background_error),
        background_centre=np.ones(n_targets) + background_error * rng.standard_normal(n_targets),
        observed=rng.poisson(background + signal).astype(float),
    )


def brute_force(data, i, flux):
    """Profiled and marginal log-likelihood of target i from scipy densities on a grid, all constants included."""
    minus, plus = data.j_minus[i], data.j_plus[i]
    error, centre = data.background_error[i], data.background_centre[i]
    uncertain = error > 0.0
    y = np.linspace(-8.0 * minus - 1.0, 8.0 * plus + 4.0, 2001 if uncertain else 20001)
    scales = np.linspace(max(centre - 7.0 * error, 1e-6), centre + 7.0 * error, 401) if uncertain else np.ones(1)
    signal = data.acceptance[i] * 10.0 ** data.log10_j[i] * flux
    density = np.where(
        y < 0.0, norm.logpdf(y, scale=minus) + math.log(2 * minus), norm.logpdf(y, scale=plus) + math.log(2 * plus)
    )
    density -= math.log(minus + plus)
    table = np.empty((scales.size, y.size))
    for row, scale in zip(table, scales, strict=True):
        mean = scale * data.background[i][:, None] + 10.0**y * signal[:, None]
        row[:] = poisson.logpmf(data.observed[i][:, None], mean).sum(axis=0) + density
        row += norm.logpdf(scale, centre, error) if uncertain else 0.0
    highest = table.max()

    def minus_log(point):
        # Polishes the best point of the grid with a method that shares nothing with the kernels.
        at, scale = point if uncertain else (point[0], 1.0)
        value = poisson.logpmf(data.observed[i], scale * data.background[i] + 10.0**at * signal).sum()
        width = minus if at < 0.0 else plus
        value += norm.logpdf(at, scale=width) + math.log(2.0 * width / (minus + plus))
        return -value - (norm.logpdf(scale, centre, error) if uncertain else 0.0)

    row, column = np.unravel_index(table.argmax(), table.shape)
    start = [y[column], scales[row]] if uncertain else [y[column]]
    simplex = np.array([start] + [np.add(start, 0.01 * unit) for unit in np.eye(len(start))])
    options = {"xatol": 1e-7, "fatol": 1e-10, "initial_simplex": simplex, "maxiter": 2000}
    polished = -minimize(minus_log, start, method="Nelder-Mead", options=options).fun
    inner = np.trapezoid(np.exp(table - highest), scales, axis=0) if uncertain else np.exp(table[0] - highest)
    return polished, highest + math.log(np.trapezoid(inner, y))


@pytest.mark.parametrize("n_targets", [1, 5, 30])
@pytest.mark.parametrize("strength", [0.01, 1.0, 30.0])
def test_profile_and_marginal_agree_with_brute_force(n_targets, strength):
    rng = np.random.default_rng([n_targets, int(100 * strength)])
    data = observation(n_targets, rng, injected=rng.choice([0.0, strength]), asymmetric=n_targets != 5)
    profiled, marginal = np.sum([brute_force(data, i, strength * SHAPE) for i in range(n_targets)], axis=0)
    assert DwarfLikelihood(data, "profile").total(strength * SHAPE) == pytest.approx(profiled, abs=1e-6)
    assert DwarfLikelihood(data, "marginal").total(strength * SHAPE) == pytest.approx(marginal, abs=1e-5)


@pytest.mark.parametrize("background_error", [0.05, 0.2])
@pytest.mark.parametrize("strength", [0.3, 10.0])
def test_an_uncertain_background_is_removed_as_well(background_error, strength):
    rng = np.random.default_rng([7, int(1000 * background_error), int(10 * strength)])
    data = observation(4, rng, injected=strength, background_error=background_error)
    profiled, marginal = np.sum([brute_force(data, i, strength * SHAPE) for i in range(4)], axis=0)
    assert DwarfLikelihood(data, "profile").total(strength * SHAPE) == pytest.approx(profiled, abs=1e-6)
    assert DwarfLikelihood(data, "marginal").total(strength * SHAPE) == pytest.approx(marginal, abs=3e-5)


@pytest.mark.parametrize(
    ("excess", "error", "strength"),
    [(20, 0.45, 0.1), (20, 0.6, 0.01), (20, 0.6, 0.03), (100, 0.2, 0.01), (1, 0.3, 0.6)],
)
def test_where_data_and_measured_j_disagree_the_higher_of_two_maxima_wins(excess, error, strength):
    """All but the last case have two maxima; in the second the one near the measured J is the higher."""
    data = observation(1, np.random.default_rng(5))
    data = dataclasses.replace(
        data,
        observed=np.round(data.background + excess * SHAPE),
        j_minus=np.array([error]),
        j_plus=np.array([error]),
        log10_j=np.array([18.5]),
    )
    profiled, marginal = brute_force(data, 0, strength * SHAPE)
    assert DwarfLikelihood(data, "profile").total(strength * SHAPE) == pytest.approx(profiled, abs=1e-6)
    assert DwarfLikelihood(data, "marginal").total(strength * SHAPE) == pytest.approx(marginal, abs=1e-5)


@pytest.mark.parametrize(("spread", "shift"), [(0.2, 0.092), (0.3, 0.207), (0.5, 0.576)])
def test_the_maximum_of_the_j_density_is_the_measured_value(spread, shift):
    """With the true J in the prefactor it would move by -s^2 ln 10 dex; shifts from an independent computation."""
    y = np.linspace(-2.0, 2.0, 40001)
    width = np.array(spread)
    assert y[np.argmax(j_factor.log_density(y, width, width))] == pytest.approx(0.0, abs=1e-4)
    wrong = j_factor.log_density(y, width, width) - y * math.log(10.0)
    assert y[np.argmax(wrong)] == pytest.approx(-shift, abs=1e-3)


def test_the_j_density_is_normalised_and_drawn():
    minus, plus = np.array(0.2), np.array(0.5)
    y = np.linspace(-3.0, 6.0, 90001)
    assert np.trapezoid(np.exp(j_factor.log_density(y, minus, plus)), y) == pytest.approx(1.0, abs=1e-7)
    drawn = j_factor.draw(np.full(40_000, 0.2), np.full(40_000, 0.5), np.random.default_rng(3))
    # Mean of a two-piece normal: sqrt(2/pi) (plus - minus). Its fraction below zero: minus / (minus + plus).
    assert drawn.mean() == pytest.approx(math.sqrt(2.0 / math.pi) * 0.3, abs=4.0 * drawn.std() / 200.0)
    assert (drawn < 0.0).mean() == pytest.approx(2.0 / 7.0, abs=4.0 * 0.452 / 200.0)


def test_without_signal_only_the_constants_remain():
    data = observation(3, np.random.default_rng(9), asymmetric=False)
    counts = poisson.logpmf(data.observed, data.background).sum()
    assert DwarfLikelihood(data, "marginal").total(np.zeros(24)) == pytest.approx(counts, abs=1e-6)
    best_j = norm.logpdf(0.0, scale=data.j_plus).sum()
    assert DwarfLikelihood(data, "profile").total(np.zeros(24)) == pytest.approx(counts + best_j, abs=1e-9)


def test_evaluations_do_not_depend_on_earlier_ones():
    likelihood = DwarfLikelihood(observation(6, np.random.default_rng(2), injected=3.0), "marginal")
    first = likelihood.total(SHAPE)
    likelihood.total(1000.0 * SHAPE)
    assert likelihood.total(SHAPE) == first


@pytest.mark.parametrize("inner", ["profile", "marginal"])
def test_pseudo_data_follow_the_expectation(inner):
    rng = np.random.default_rng(21)
    likelihood = DwarfLikelihood(observation(4, rng, background_error=0.1), inner)
    flux = 3.0 * SHAPE
    mean = likelihood.observation.background + likelihood.signal(flux)
    drawn = [likelihood.simulate(flux, rng).observation for _ in range(400)]
    pulls = (np.mean([data.observed for data in drawn], axis=0) - mean) / np.sqrt(mean / 400.0)
    assert np.sum(pulls**2) < 96.0 + 4.0 * math.sqrt(2.0 * 96.0)
    measured = np.array([data.log10_j for data in drawn]) - likelihood.observation.log10_j
    expected = -math.sqrt(2.0 / math.pi) * (likelihood.observation.j_plus - likelihood.observation.j_minus)
    assert np.all(np.abs(measured.mean(axis=0) - expected) < 4.5 * measured.std(axis=0) / 20.0)
    centres = np.array([data.background_centre for data in drawn])
    assert centres.std() == pytest.approx(0.1, rel=0.1)
    asimov = likelihood.expected(flux).observation
    assert np.array_equal(asimov.observed, mean)
    # On expected data the true signal is the best one.
    scan = [DwarfLikelihood(asimov, "profile").total(factor * flux) for factor in (0.7, 0.95, 1.0, 1.05, 1.4)]
    assert np.argmax(scan) == 2


def excluded(spread, experiments):
    """Fractions of pseudo-experiments whose one-sided 95 % limits, upper and lower, exclude the truth."""
    data = observation(5, np.random.default_rng(77))
    width = np.full(5, spread)
    likelihood = DwarfLikelihood(dataclasses.replace(data, j_minus=width, j_plus=width), "profile")
    rng, flux, factors = np.random.default_rng(1), 1.5 * SHAPE, np.exp(np.linspace(-2.5, 2.5, 41))
    below, above = 0, 0
    for _ in range(experiments):
        pseudo = likelihood.simulate(flux, rng)
        values = np.array([pseudo.total(factor * flux) for factor in factors])
        highest = max(values.max(), pseudo.total(0.0 * flux))
        out = pseudo.total(flux) < highest - 0.5 * norm.isf(0.05) ** 2
        below += out and factors[values.argmax()] < 1.0
        above += out and factors[values.argmax()] > 1.0
    return below / experiments, above / experiments


def test_limits_cover_where_j_is_well_known():
    error = math.sqrt(0.05 * 0.95 / 1000.0)
    below, above = excluded(0.05, 1000)
    assert abs(below - 0.05) < 3.0 * error
    assert abs(above - 0.05) < 3.0 * error


def test_limits_are_too_strong_where_j_is_badly_known_as_documented():
    """Measured here and said in `FluxScan.upper_limit` and the term's caveats; a property of profiling J.

    Measured values of J scatter evenly in log J, so on average they exceed the true J, and weak targets cannot tell.
    """
    below, above = excluded(0.4, 1000)
    assert 0.06 < below < 0.10
    assert above < 0.05


def test_the_limit_of_an_empty_bin_is_the_textbook_one():
    """No background to speak of, no counts, J known: lnL = -s, so a fall of 1.353 is 1.353 photons."""
    data = observation(1, np.random.default_rng(4))
    data = dataclasses.replace(
        data,
        observed=np.zeros((1, 24)),
        background=np.full((1, 24), 1e-9),
        j_minus=np.array([1e-4]),
        j_plus=np.array([1e-4]),
    )
    likelihood = DwarfLikelihood(data, "profile")
    photons = upper_limit(likelihood, SHAPE) * likelihood.signal(SHAPE).sum()
    assert photons == pytest.approx(0.5 * norm.isf(0.05) ** 2, rel=1e-4)
    assert 2.0 * one_sided_fall(0.95) == pytest.approx(2.706, abs=5e-4)
    assert 2.0 * one_sided_fall(0.90) == pytest.approx(1.642, abs=5e-4)
    assert math.isinf(upper_limit(likelihood, 0.0 * SHAPE))


@pytest.mark.parametrize(
    ("counts", "level", "published"),
    [
        # Poisson upper limits without background, as every statistics review tabulates them (computed independently);
        # with a prior flat in the signal the credible limit is the same number.
        (0, 0.95, 2.996),
        (0, 0.90, 2.303),
        (1, 0.95, 4.744),
        (3, 0.95, 7.754),
        (10, 0.90, 15.407),
    ],
)
def test_credible_limits_are_the_textbook_ones(counts, level, published):
    data = dataclasses.replace(
        observation(1, np.random.default_rng(4)),
        observed=np.where(np.arange(24) == 3, counts, 0.0)[None, :],
        background=np.full((1, 24), 1e-9),
        j_minus=np.array([1e-4]),
        j_plus=np.array([1e-4]),
    )
    likelihood = DwarfLikelihood(data, "marginal")
    photons = upper_limit(likelihood, SHAPE, level) * likelihood.signal(SHAPE).sum()
    assert photons == pytest.approx(published, rel=1e-3)
