"""Every move of the ensemble explorer leaves a known distribution as it is."""

from __future__ import annotations

import numpy as np
import pytest
from emcee import State
from emcee.model import Model
from emcee.moves import RedBlueMove

from scanfit.explorers.ensemble import Ensemble, EnsembleOptions


@pytest.mark.parametrize("move", Ensemble(EnsembleOptions())._moves, ids=lambda move: type(move).__name__)
@pytest.mark.parametrize("dimension", [2, 8])
def test_a_gaussian_stays_a_gaussian(move: RedBlueMove, dimension: int) -> None:
    """500 ensembles start in the distribution; after 20 steps each their walkers still have variance 1 and mean 0.

    The spread over ensembles gives the error, since walkers of one ensemble depend on each other.
    """
    random = np.random.RandomState(1)

    def log_density(points: np.ndarray) -> tuple[np.ndarray, None]:
        return -0.5 * np.square(points).sum(axis=1), None

    model = Model(None, log_density, map, random)
    means, squares, moved = [], [], 0
    for _ in range(500):
        points = random.standard_normal((4 * dimension + 4, dimension))
        state = State(points, log_prob=log_density(points)[0])
        for _ in range(20):
            state, accepted = move.propose(model, state)
            moved += int(accepted.sum())
        means.append(state.coords.mean())
        squares.append(np.square(state.coords).mean())
    assert moved > 500
    for values, exact in ((means, 0.0), (squares, 1.0)):
        error = np.std(values, ddof=1) / np.sqrt(len(values))
        assert np.mean(values) == pytest.approx(exact, abs=4.0 * error)
        assert error < 0.02
