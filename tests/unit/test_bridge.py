"""Bridge sampling against densities whose normalisation is known."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import multivariate_normal

from scanfit.explorers.bridge import KernelMixture, bridge


def test_the_mixture_is_normalised_and_drawn_from_as_written() -> None:
    random = np.random.default_rng(1)
    mixture = KernelMixture(0.5 + 0.1 * random.standard_normal((200, 2)), random)

    # Plain sum over a fine grid; the density is smooth on the scale of its kernels.
    axis = np.linspace(-0.5, 1.5, 801)
    points = np.stack(np.meshgrid(axis, axis, indexing="ij"), axis=-1).reshape(-1, 2)
    cells = np.exp(mixture.log_density(points)) * (axis[1] - axis[0]) ** 2
    assert cells.sum() == pytest.approx(1.0, abs=1e-4)
    draws = mixture.draw(20_000, random)
    low, high = 0.45125, 0.55125  # between grid points
    inside = ((draws > low) & (draws < high)).all(axis=1).mean()
    expected = cells[((points > low) & (points < high)).all(axis=1)].sum()
    assert inside == pytest.approx(expected, abs=4.0 * np.sqrt(expected / len(draws)))


@pytest.mark.parametrize("dimension", [1, 3, 8])
def test_a_gaussian_times_a_constant_gives_the_constant(dimension: int) -> None:
    deviations = []
    for seed in range(10):
        random = np.random.default_rng(seed)
        normal = multivariate_normal(np.full(dimension, 0.5), 0.05**2 * np.eye(dimension))
        fitted, draws = (0.5 + 0.05 * random.standard_normal((1500, dimension)) for _ in range(2))

        def evaluate(unit_points: np.ndarray, normal: object = normal) -> np.ndarray:
            return np.atleast_1d(normal.logpdf(unit_points)) + 3.25  # type: ignore[attr-defined]  # scipy's frozen one

        found = bridge(fitted, draws, evaluate(draws), 1500.0, evaluate, 1500, random)
        assert found.error < 0.1
        deviations.append((found.log_evidence - 3.25) / found.error)
    assert np.abs(deviations).max() < 4.0
    assert 0.3 < np.sqrt(np.mean(np.square(deviations))) < 1.8


def test_a_posterior_cut_by_the_cube_counts_only_the_inside() -> None:
    random = np.random.default_rng(3)
    fitted, draws = random.random((1000, 2)), random.random((1000, 2))
    found = bridge(fitted, draws, np.zeros(1000), 1000.0, lambda unit_points: np.zeros(len(unit_points)), 1000, random)
    assert found.log_evidence == pytest.approx(0.0, abs=4.0 * found.error)
    assert found.error < 0.05
