"""The global search gathers populations in every mode and says when there is nothing to find."""

from __future__ import annotations

import numpy as np
import pytest

from scanfit.errors import ScanStopped
from scanfit.explorers.global_search import GlobalSearch, reflected
from scanfit.explorers.lockstep import LockstepPool


def search(log_likelihood, generations: int = 200) -> GlobalSearch:  # type: ignore[no-untyped-def]
    seeds = np.random.SeedSequence(5).spawn(4)
    found = GlobalSearch(LockstepPool(log_likelihood), seeds, 24, 3, generations)
    while not found.finished:
        found.advance(10)
    return found


def two_peaks(points: np.ndarray) -> np.ndarray:
    """Peaks of width 0.01 at (0.2, 0.2, 0.2) and (0.8, 0.8, 0.8), the second a little higher."""
    distances = [((points - place) ** 2).sum(axis=1) / 0.01**2 for place in (0.2, 0.8)]
    return np.asarray(np.logaddexp(-0.5 * distances[0], 0.5 - 0.5 * distances[1]))


def test_populations_lie_near_the_peaks_and_both_are_found() -> None:
    found = search(two_peaks)
    populations = found.populations()
    assert len(populations) == 4
    for points, log_likelihoods in populations:
        assert points.shape == (24, 3)
        assert np.array_equal(log_likelihoods, two_peaks(points))
        assert log_likelihoods.min() >= found.best - found.depth
        assert len(np.unique(points, axis=0)) == 24
    everywhere = np.concatenate([points[:, 0] for points, _ in populations])
    assert (everywhere < 0.5).any()
    assert (everywhere > 0.5).any()


def test_it_finds_a_spot_where_most_of_the_cube_has_likelihood_zero() -> None:
    def log_likelihood(points: np.ndarray) -> np.ndarray:
        return np.where(np.all(points > 0.7, axis=1), -100.0 * ((points - 0.9) ** 2).sum(axis=1), -np.inf)

    assert search(log_likelihood).best > -1.0


def test_a_search_without_success_stops_with_a_reason() -> None:
    found = search(lambda points: np.full(len(points), -np.inf), generations=3)
    with pytest.raises(ScanStopped, match="likelihood above zero"):
        found.populations()


def test_reflection_folds_any_point_into_the_cube() -> None:
    assert reflected(np.array([-0.2, 0.3, 1.1, 2.2, -1.5])) == pytest.approx([0.2, 0.3, 0.9, 0.2, 0.5])
