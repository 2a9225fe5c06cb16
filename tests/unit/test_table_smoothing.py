"""Smoothing of rare counts: known rates are found again, and the stated errors are the true ones."""

import numpy as np
import pytest

from scanfit.likelihoods.tables.smoothing import smooth


@pytest.fixture(scope="module")
def smoothed():
    """Rates that fall steeply with energy and change with mass, from 20 photons down to one in a hundred."""
    mass, energy = np.meshgrid(np.arange(14), np.arange(12), indexing="ij")
    rate = np.exp(1.0 - 0.35 * energy - 0.03 * energy**2 + 0.6 * np.sin(mass / 4.0)) / 100.0
    counts = np.random.default_rng(12).poisson(700.0 * rate).astype(float)
    return rate, counts / 700.0, *smooth(counts, np.full(14, 700.0))


def test_known_rates_are_found_within_their_errors(smoothed):
    rate, _, found, covariance, _ = smoothed
    errors = np.sqrt(np.diagonal(covariance, axis1=1, axis2=2))
    pulls = (found - rate) / errors
    # Neighbouring bins share their errors, so there are some twenty independent pulls.
    assert np.sqrt(np.mean(pulls**2)) < 1.5
    assert np.sqrt(np.mean(pulls**2)) > 0.4


def test_rare_bins_gain_most(smoothed):
    rate, counted, found, _, _ = smoothed
    off = np.sqrt(np.mean(((found - rate) / rate) ** 2, axis=0))
    before = np.sqrt(np.mean(((counted - rate) / rate) ** 2, axis=0))
    assert np.all(off[6:] < 0.5 * before[6:])


def test_what_is_sharp_stays_sharp():
    """With many counts behind it a step is believed, because the counts choose the stiffness."""
    rate = np.where(np.arange(12)[None, :] < 6, 50.0, 5.0) * np.ones((8, 1))
    counts = np.random.default_rng(3).poisson(100.0 * rate).astype(float)
    found, _, stiffness = smooth(counts, np.full(8, 100.0))
    assert np.max(np.abs(found / rate - 1.0)) < 0.15
    assert stiffness[1] < 100.0
