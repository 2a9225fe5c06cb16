"""Counting statistics against textbook limits, published asymptotic formulas and brute force."""

from __future__ import annotations

import math
from pathlib import Path
from typing import TypeAlias

import numpy as np
import pytest
from scipy import optimize, stats
from scipy.integrate import quad

from scanfit.contracts import BuildContext, InnerNuisances
from scanfit.likelihoods.candidate import Annihilation, Candidate, CosmologyOptions, NucleonCouplings
from scanfit.likelihoods.direct_detection.counting import BinnedCounts
from scanfit.likelihoods.direct_detection.term import DirectDetection

VALUES = {"local_density": 0.3, "most_probable_speed": 238.0, "escape_speed": 544.0, "earth_speed": 252.0}
Case: TypeAlias = tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]

COUNTER = """
title = "one bin"
source = "none"
exposure_tonne_year = 1.0
target = {{ Xe = 1 }}
[efficiency]
energy_kev = [5.0, 40.0]
value = [1.0, 1.0]
[bins]
intervals_kev = [[5.0, 40.0]]
background = [{background}]
observed = [{observed}]
"""


def candidate(coupling: float, mass: float = 50.0) -> Candidate:
    nothing = np.zeros((0, 1))
    return Candidate(
        mass=mass,
        self_conjugate=True,
        spin_degrees_of_freedom=1,
        annihilation=Annihilation((), lambda s: nothing, lambda s: nothing[0]),
        nucleon=NucleonCouplings(f_proton=coupling, f_neutron=coupling),
        cosmology=CosmologyOptions(underabundant="assume-all"),
    )


def one_bin(folder: Path, observed: int, background: float) -> DirectDetection:
    (folder / "one.toml").write_text(COUNTER.format(observed=observed, background=background), encoding="utf-8")
    return DirectDetection(DirectDetection.Options(data="one.toml"), BuildContext(folder))


def likelihood_of_signal(term: DirectDetection, signal: float) -> float:
    per_coupling = term.signal(candidate(1e-9), VALUES).sum() / 1e-18
    return math.exp(term.loglike(candidate(math.sqrt(signal / per_coupling)), VALUES))


@pytest.mark.parametrize("level", [0.90, 0.95])
@pytest.mark.parametrize("observed", [0, 1, 2, 3, 4, 5, 10])
def test_poisson_upper_limits(tmp_path: Path, observed: int, level: float) -> None:
    # Without background the classical limit is a quantile of chi2 (2.303, 3.890, ... at 90 %), and a flat prior in the
    # signal gives the same number.
    limit = 0.5 * stats.chi2.ppf(level, 2 * (observed + 1))
    term = one_bin(tmp_path, observed, 0.0)
    below = quad(lambda s: likelihood_of_signal(term, s), 0.0, limit, epsabs=0.0, epsrel=1e-9)[0]
    above = quad(lambda s: likelihood_of_signal(term, s), limit, limit + 60.0, epsabs=1e-14, epsrel=1e-9)[0]
    assert below / (below + above) == pytest.approx(level, abs=1e-8)


@pytest.mark.parametrize(("observed", "background", "limit"), [(2, 1.62, 4.061), (14, 7.36, 12.792)])
def test_limits_with_known_background(tmp_path: Path, observed: int, background: float, limit: float) -> None:
    # CLs at 90 %, computed independently; for one bin and a known background it equals the flat-prior limit.
    cls = stats.poisson.cdf(observed, background + limit) / stats.poisson.cdf(observed, background)
    assert cls == pytest.approx(0.10, abs=1e-4)
    term = one_bin(tmp_path, observed, background)
    below = quad(lambda s: likelihood_of_signal(term, s), 0.0, limit)[0]
    above = quad(lambda s: likelihood_of_signal(term, s), limit, limit + 60.0)[0]
    assert below / (below + above) == pytest.approx(0.90, abs=1e-4)


@pytest.mark.parametrize(
    ("signal", "background", "significance"), [(10.0, 9.0, 2.89727), (5.0, 1.0, 3.39133), (10.0, 100.0, 0.98399)]
)
def test_median_significance(signal: float, background: float, significance: float) -> None:
    # Z = sqrt(2 [(s+b) ln(1+s/b) - s]), arXiv:1007.1727 (formula from memory, numbers computed independently).
    empty = BinnedCounts(np.zeros(1), np.array([background]), np.zeros((1, 0)), "profile")
    asimov = empty.asimov(np.array([signal]))
    gain = asimov.log_likelihood(np.array([signal])) - asimov.log_likelihood(np.array([0.0]))
    assert math.sqrt(2.0 * gain) == pytest.approx(significance, abs=1e-5)


def test_plain_poisson_keeps_its_factorials() -> None:
    rng = np.random.default_rng(3)
    background, signal = rng.uniform(0.1, 5.0, 8), rng.uniform(0.0, 5.0, 8)
    observed = rng.poisson(background + signal)
    for treatment in ("profile", "marginal"):
        counts = BinnedCounts(observed.astype(float), background, np.zeros((8, 0)), treatment)
        reference = np.sum(stats.poisson.logpmf(observed, background + signal))
        assert counts.log_likelihood(signal) == pytest.approx(reference, abs=1e-11)


def random_case(seed: int, spread: float, n_nuisances: int) -> Case:
    """Observed, background, loading and signal of five bins; counts scatter about half the signal."""
    rng = np.random.default_rng(seed)
    background, signal = rng.uniform(0.3, 8.0, 5), rng.uniform(0.0, 6.0, 5) * rng.integers(0, 2, 5)
    directions = rng.standard_normal((5, n_nuisances))
    loading = spread * directions / np.linalg.norm(directions, axis=1, keepdims=True)
    return rng.poisson(0.5 * signal + background).astype(float), background, loading, signal


def log_integrand(case: Case, nuisances: np.ndarray) -> np.ndarray:
    """Log of Poisson times normal densities by scipy; nuisances have shape (n_points, n_nuisances)."""
    observed, background, loading, signal = case
    expected = signal + background * np.exp(nuisances @ loading.T)
    poisson = np.sum(stats.poisson.logpmf(observed, expected), axis=1)
    return np.asarray(poisson + np.sum(stats.norm.logpdf(nuisances), axis=1))


def treat(case: Case, treatment: InnerNuisances) -> float:
    observed, background, loading, signal = case
    return BinnedCounts(observed, background, loading, treatment).log_likelihood(signal)


@pytest.mark.parametrize("n_nuisances", [1, 2, 3, 5])
@pytest.mark.parametrize("spread", [0.1, 0.3, 0.7])
def test_profile_against_a_general_minimiser(spread: float, n_nuisances: int) -> None:
    for seed in range(4):
        case = random_case(seed, spread, n_nuisances)

        def cost(z: np.ndarray, case: Case = case) -> float:
            return -float(log_integrand(case, z[None])[0])

        found = optimize.minimize(cost, np.zeros(n_nuisances))
        assert treat(case, "profile") == pytest.approx(-found.fun, abs=1e-6)


@pytest.mark.parametrize(("spread", "tolerance"), [(0.1, 1e-10), (0.3, 1e-8), (0.7, 1e-5)])
def test_marginal_of_one_nuisance_against_quadrature(spread: float, tolerance: float) -> None:
    for seed in range(8):
        case = random_case(seed, spread, 1)
        scale = treat(case, "profile")
        integral = quad(
            lambda z, case=case, scale=scale: math.exp(log_integrand(case, np.array([[z]]))[0] - scale),
            -9.0, 9.0, epsabs=0.0, epsrel=1e-11, limit=400, points=[-2.0, 0.0, 2.0],
        )[0]  # fmt: skip
        assert treat(case, "marginal") == pytest.approx(math.log(integral) + scale, abs=tolerance)


@pytest.mark.parametrize("n_nuisances", [2, 3])
@pytest.mark.parametrize(("spread", "tolerance"), [(0.1, 5e-6), (0.2, 1e-4), (0.4, 3e-3)])
def test_marginal_of_several_nuisances_against_a_grid(spread: float, tolerance: float, n_nuisances: int) -> None:
    # The trapezium rule on a smooth integrand that dies out at both ends converges exponentially.
    step, axis = (0.1, np.arange(-7.0, 7.05, 0.1)) if n_nuisances == 2 else (0.25, np.arange(-6.0, 6.1, 0.25))
    grid = np.stack(np.meshgrid(*[axis] * n_nuisances, indexing="ij"), axis=-1).reshape(-1, n_nuisances)
    for seed in range(3):
        case = random_case(seed, spread, n_nuisances)
        log_values = log_integrand(case, grid)
        reference = math.log(np.exp(log_values - log_values.max()).sum() * step**n_nuisances) + log_values.max()
        assert treat(case, "marginal") == pytest.approx(reference, abs=tolerance)


def test_profile_and_marginal_differ() -> None:
    # Up to constants the two agree when the data fix nothing; here they pull on the background, and must not.
    observed, background, loading = np.array([12.0]), np.array([5.0]), np.array([[0.5]])
    profile = BinnedCounts(observed, background, loading, "profile")
    marginal = BinnedCounts(observed, background, loading, "marginal")
    gap = [c.log_likelihood(np.array([6.0])) - c.log_likelihood(np.array([0.0])) for c in (profile, marginal)]
    assert abs(gap[0] - gap[1]) > 0.05


@pytest.mark.parametrize("observed", [0.0, 1.0, 50.0, 3000.0])
def test_large_pulls_are_found(observed: float) -> None:
    # One bin without signal: the best background solves b e^x - n + x/spread^2 = 0 with x its log shift.
    spread, background = 0.3, 2.0
    shift = optimize.brentq(lambda x: background * math.exp(x) - observed + x / spread**2, -5.0, 10.0, xtol=1e-14)
    expected = background * math.exp(shift)
    reference = stats.poisson.logpmf(observed, expected) + stats.norm.logpdf(shift / spread)
    counts = BinnedCounts(np.array([observed]), np.array([background]), np.array([[spread]]), "profile")
    assert counts.log_likelihood(np.zeros(1)) == pytest.approx(reference, rel=1e-10, abs=1e-8)
    assert counts.most_likely_background(np.zeros(1))[0] == pytest.approx(expected, rel=1e-6)


def test_events_without_any_source_are_impossible() -> None:
    counts = BinnedCounts(np.array([0.0, 1.0]), np.zeros(2), np.zeros((2, 0)), "marginal")
    assert counts.log_likelihood(np.array([1.0, 0.0])) == -math.inf
    assert counts.log_likelihood(np.array([0.0, 1.0])) == pytest.approx(-1.0)


def test_pseudo_data_have_the_right_mean_and_variance() -> None:
    # Mean and variance of Poisson with a log-normal expectation: m = s + b e^{d^2/2}, m + b^2 e^{d^2} (e^{d^2} - 1).
    signal, background, spread = np.array([1.5]), np.array([4.0]), 0.4
    counts = BinnedCounts(np.zeros(1), background, np.array([[spread]]), "marginal")
    rng = np.random.default_rng(20261201)
    draws = np.array([counts.draw(signal, rng).observed[0] for _ in range(20000)])
    mean = 1.5 + 4.0 * math.exp(0.5 * spread**2)
    variance = mean + 16.0 * math.exp(spread**2) * math.expm1(spread**2)
    assert draws.mean() == pytest.approx(mean, abs=4.0 * math.sqrt(variance / draws.size))
    # The variance of a sample variance needs the fourth moment; take it from the sample.
    error = math.sqrt((np.mean((draws - draws.mean()) ** 4) - draws.var() ** 2) / draws.size)
    assert draws.var() == pytest.approx(variance, abs=4.0 * error)
    assert abs(variance - mean) > 10.0 * error  # a draw that forgot the background's uncertainty would fail
