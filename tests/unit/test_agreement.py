"""Convergence measures against series whose autocorrelation and spread are known."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import lfilter
from scipy.stats import kstest

from scanfit.explorers.agreement import agreement_p_values, autocorrelation_times, r_hat, rank_normalised


def autoregressive(memory: float, shape: tuple[int, ...], seed: int = 1) -> np.ndarray:
    """Stationary AR(1) series along axis 1, unit variance: autocorrelation time (1 + memory) / (1 - memory), exact."""
    random = np.random.default_rng(seed)
    noise = random.standard_normal(shape) * np.sqrt(1.0 - memory**2)
    noise[:, 0] /= np.sqrt(1.0 - memory**2)
    return np.asarray(lfilter([1.0], [1.0, -memory], noise, axis=1))


@pytest.mark.parametrize("memory", [0.0, 0.5, 0.9])
def test_autocorrelation_time_of_an_autoregressive_series(memory: float) -> None:
    chains = autoregressive(memory, (4, 20_000, 2, 2))  # long: the estimator is low by ten times over length
    exact = (1.0 + memory) / (1.0 - memory)
    assert autocorrelation_times(chains) == pytest.approx([exact, exact], rel=0.06)


def test_autocorrelation_of_a_stuck_walker_is_infinite_and_of_a_constant_one() -> None:
    chains = autoregressive(0.5, (2, 200, 4, 2))
    chains[1, :, 2, 0] = 3.0
    chains[..., 1] = -1.0
    assert autocorrelation_times(chains).tolist() == [np.inf, 1.0]


def test_rank_normalisation_sees_only_the_order() -> None:
    values = np.random.default_rng(1).standard_normal((3, 50))
    assert np.array_equal(rank_normalised(values), rank_normalised(np.exp(values)))
    assert rank_normalised(values).std() == pytest.approx(1.0, abs=0.02)


def test_r_hat_of_one_distribution_and_of_shifted_means() -> None:
    # With K chains of variance 1 and means of variance b, R-hat is sqrt(1 + b / within) (arXiv:1903.08008, eq. 1-4).
    draws = np.random.default_rng(2).standard_normal((4, 4000, 4, 1))
    assert r_hat(draws)[0] == pytest.approx(1.0, abs=1e-3)
    shifts = np.array([-0.3, -0.1, 0.1, 0.3])
    expected = np.sqrt(1.0 + np.var(np.repeat(shifts, 2), ddof=1))
    # Rank normalisation makes the whole sample unit normal, which leaves the ratio almost as it is.
    assert r_hat(draws + shifts[:, None, None, None])[0] == pytest.approx(expected, abs=5e-3)


def test_r_hat_sees_different_widths() -> None:
    draws = np.random.default_rng(3).standard_normal((4, 2000, 4, 1))
    draws[0] *= 2.0
    assert r_hat(draws)[0] > 1.01


def test_p_values_of_agreeing_ensembles_are_uniform() -> None:
    # Strong autocorrelation, as in practice; 60 steps of each autocorrelation time.
    found = [agreement_p_values(autoregressive(0.8, (4, 540, 4, 1), seed))[0] for seed in range(120)]
    # Twice the smaller of two probabilities is not uniform but never prefers small values by more than sampling error.
    small = np.mean(np.array(found) < 0.1)
    assert small < 0.1 + 4.0 * np.sqrt(0.1 * 0.9 / len(found)) + 0.05
    assert kstest(found, "uniform", alternative="greater").pvalue > 1e-4


def test_walkers_stuck_in_their_modes_pass_two_criteria_and_fail_the_third() -> None:
    """The trap that has been measured: within its mode each walker mixes well, and no walker ever changes mode."""
    chains = autoregressive(0.6, (4, 2000, 50, 1), 6)
    share = np.array([0.0, 0.0, 0.02, 0.04])  # of walkers in the far mode, by ensemble; truth 0.04 everywhere
    for ensemble, part in enumerate(share):
        chains[ensemble, :, : int(50 * part), 0] += 8.0
    assert 50 * autocorrelation_times(chains)[0] < 2000
    assert r_hat(chains)[0] < 1.01
    assert agreement_p_values(chains)[0] < 1e-6
    # Control: the same walkers without the far mode agree.
    assert agreement_p_values(autoregressive(0.6, (4, 2000, 50, 1), 6))[0] > 1e-3
